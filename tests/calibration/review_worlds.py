"""Hands on triggers of one rule over quarters, with a precision that is exactly what was asked for.

Nothing here imports the package. A hit comes from the trigger itself or from a shock that hits
whatever is open around it: a shock on session s in a sector turns the sector's triggers in
[s - horizon, s - 1] into hits with chance ``STRENGTH`` each. Half of a precision is then due to
shocks; the marginal chance of a hit is the precision exactly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

SESSIONS = 63  # in a quarter
SECTORS = 10
PER_SECTOR = 50
STRENGTH = 0.8
BURST = 4.0  # triggers in a burst, on average


@dataclass(frozen=True)
class Kind:
    """How triggers and hits hang together.

    ``shocks``: "", "sector" or "market"; ``is_bursty``: triggers come in bursts on one day in one
    sector; ``repeat``: chance that a trigger is followed by one on the same entity whose window
    overlaps; ``swing``: sd of the logit of the precision from quarter to quarter.
    """

    shocks: str = ""
    is_bursty: bool = False
    repeat: float = 0.0
    swing: float = 0.0


KINDS = {
    "independent": Kind(),
    "repeats": Kind(repeat=0.4),
    "bursts": Kind(is_bursty=True),
    "sector shocks": Kind("sector"),
    "bursts, sector shocks": Kind("sector", True),
    "bursts, sector shocks, repeats": Kind("sector", True, 0.4),
    "bursts, market shocks": Kind("market", True),
    "regimes by quarter": Kind(swing=0.5),
}


@dataclass(frozen=True)
class Triggers:
    """Triggers of one rule, int64 and bool [triggers]; sectors are the peer groups."""

    entity: np.ndarray
    session: np.ndarray
    sector: np.ndarray
    is_hit: np.ndarray


def draw(
    random: np.random.Generator,
    kind: Kind,
    rate: float,
    precision_q: np.ndarray,
    horizon: int,
) -> Triggers:
    """Triggers at ``rate`` a quarter, all closed by the end of the last quarter.

    Parameters
    ----------
    precision_q : float64 [quarters], chance of a hit of the triggers of each quarter
    """
    last = precision_q.size * SESSIONS - 1 - horizon
    mean = rate * precision_q.size / (1 + kind.repeat) / (BURST if kind.is_bursty else 1)
    n = int(random.poisson(mean))
    session, sector = random.integers(0, last + 1, n), random.integers(0, SECTORS, n)
    if kind.is_bursty:
        size = random.geometric(1 / BURST, n)
        session, sector = np.repeat(session, size), np.repeat(sector, size)
    entity = sector * PER_SECTOR + random.integers(0, PER_SECTOR, session.size)
    again = np.nonzero(random.random(session.size) < kind.repeat)[0]
    gap = random.integers(1, horizon, again.size) if horizon > 1 else np.ones(again.size, int)
    session = np.concatenate([session, session[again] + gap])
    is_in = session <= last
    entity, sector = np.append(entity, entity[again]), np.append(sector, sector[again])
    chance_q = precision_q
    if kind.swing:
        chance_q = _swung(random, precision_q, kind.swing)
    chance = chance_q[np.minimum(session // SESSIONS, precision_q.size - 1)]
    if kind.shocks:
        is_hit = _shocked(random, kind.shocks, session, sector, chance, chance_q, horizon)
    else:
        is_hit = random.random(session.size) < chance
    # a later window shares the sessions of the earlier one that it overlaps, and their event
    first = session.size - again.size
    is_shared = random.random(again.size) < (horizon - gap) / horizon
    is_hit[first:] = np.where(is_shared, is_hit[again], is_hit[first:])
    order = np.argsort(session[is_in], kind="stable")
    entity, session, sector, is_hit = (a[is_in][order] for a in (entity, session, sector, is_hit))
    return Triggers(entity, session, sector, is_hit)


def _swung(random: np.random.Generator, precision_q: np.ndarray, sd: float) -> np.ndarray:
    """Precisions that swing by quarter with the same mean."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(41)
    odds = precision_q / (1 - precision_q)
    grid = np.linspace(-1.5, 1.5, 3001)
    tilted = odds[:, None, None] * np.exp(grid[:, None] + sd * nodes)
    mean = ((tilted / (1 + tilted)) @ weights) / weights.sum()
    shift = np.array([np.interp(p, m, grid) for p, m in zip(precision_q, mean, strict=True)])
    swung = odds * np.exp(shift + sd * random.standard_normal(precision_q.size))
    return swung / (1 + swung)


def _shocked(
    random: np.random.Generator,
    shocks: str,
    session: np.ndarray,
    sector: np.ndarray,
    chance: np.ndarray,
    chance_q: np.ndarray,
    horizon: int,
) -> np.ndarray:
    """Hits of which half are due to shocks; the shocks' frequency follows the first precision."""
    by_shock = chance_q[0] / 2
    a_session = -np.log(1 - by_shock) / (horizon * STRENGTH)
    n_sessions = chance_q.size * SESSIONS
    own = 1 - (1 - chance) / (1 - by_shock)
    n_sectors = SECTORS if shocks == "sector" else 1
    count_gt = random.poisson(a_session, (n_sectors, n_sessions + 1))
    before_gt = np.concatenate([np.zeros((n_sectors, 1), int), count_gt.cumsum(axis=1)], axis=1)
    group = sector if shocks == "sector" else np.zeros_like(sector)
    stop = np.minimum(session + horizon + 1, n_sessions)
    n_shocks = before_gt[group, stop] - before_gt[group, np.minimum(session + 1, n_sessions)]
    return random.random(session.size) < 1 - (1 - own) * (1 - STRENGTH) ** n_shocks
