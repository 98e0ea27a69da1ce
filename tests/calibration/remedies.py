"""Hands on remedies tried for what the margins null does not hold: each gives p-values.

Hold it by another link (a hazard that multiplies); hold more fixed (rows renewed every period;
columns split by the entity's own recent events); or keep the null and widen it (by the clustering
of its own residuals; by the left-over inflation of the whole family, after Devlin & Roeder 1999,
Biometrics 55:997-1004).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from miner.kernels import tails
from miner.nulls.margins import Margins, fit_margins
from miner.panel import Labels
from miner.units import Case
from tests.calibration.hazard import hazard_rates

SMALLEST = 1e-300


def p_values(case: Case, rates: np.ndarray) -> np.ndarray:
    """P(X >= hits) of every combination under the rates at its triggers."""
    table = case.unit.triggers
    parts = zip(table.offset_c[:-1], table.offset_c[1:], case.hits_c, strict=True)
    p = [tails.upper_tail(rates[first:last], hits) for first, last, hits in parts]
    return np.maximum(p, SMALLEST)


def renewed_rows(case: Case, period: int) -> np.ndarray:
    """p-values where each entity's own rate starts afresh every ``period`` sessions."""
    is_open_et = case.unit.is_open_et
    n_sessions = is_open_et.shape[1]
    part_t = np.arange(n_sessions) // period
    n_parts = int(part_t[-1]) + 1
    is_part_pt = part_t == np.arange(n_parts)[:, None]

    def spread(flag_et: np.ndarray) -> np.ndarray:
        return (flag_et[:, None, :] & is_part_pt).reshape(-1, n_sessions)

    peers = case.unit.segment.panel.peers
    wide = Labels(peers.names, np.repeat(peers.code_et, n_parts, axis=0))
    margins = fit_margins(spread(is_open_et), spread(case.is_window_et), wide)
    table = case.unit.triggers
    row = table.entity * n_parts + part_t[table.session]
    return p_values(case, margins.rates(row, table.session))


def own_recent_events(case: Case, reach: int) -> Labels:
    """Peer groups split by whether the entity had an event in the last ``reach`` sessions."""
    peers = case.unit.segment.panel.peers
    n_sessions = peers.code_et.shape[1]
    is_recent_et = np.zeros(peers.code_et.shape, dtype=bool)
    entity, session = case.events
    for lag in range(reach):
        inside = session + lag < n_sessions
        is_recent_et[entity[inside], session[inside] + lag] = True
    names = tuple(f"{name} {word}" for word in ("calm", "recent") for name in peers.names)
    return Labels(names, (peers.code_et + len(peers.names) * is_recent_et).astype(np.int16))


def split_by_recent(case: Case, reach: int) -> np.ndarray:
    """p-values where peer groups are split by the entity's own recent events."""
    labels = own_recent_events(case, reach)
    margins = fit_margins(case.unit.is_open_et, case.is_window_et, labels)
    table = case.unit.triggers
    return p_values(case, margins.rates(table.entity, table.session))


def multiplied_hazard(case: Case) -> np.ndarray:
    """p-values where busy names and busy sessions multiply the events' rate, not their odds."""
    table = case.unit.triggers
    return p_values(case, hazard_rates(case, table.entity, table.session))


def widened_by_clusters(case: Case, rates: np.ndarray, p: np.ndarray) -> np.ndarray:
    """p-values with normal scores divided by the residuals' two-way clustered spread, if above 1.

    Variance by entity and date block as in Cameron, Gelbach & Miller (2011), at least either.
    """
    table = case.unit.triggers
    n_combos = len(table.combos)
    combo = table.trigger_combo
    residual = case.is_hit - rates
    block = table.session // case.unit.horizon
    n_blocks = int(block.max(initial=0)) + 1
    n_entities = case.unit.is_open_et.shape[0]

    def squares(cluster: np.ndarray, n_clusters: int) -> np.ndarray:
        key, place = np.unique(combo * n_clusters + cluster, return_inverse=True)
        total = np.bincount(place, residual)
        return np.bincount(key // n_clusters, total**2, minlength=n_combos)

    by_e, by_d = squares(table.entity, n_entities), squares(block, n_blocks)
    by_x = squares(table.entity * n_blocks + block, n_entities * n_blocks)
    simple = np.bincount(combo, rates * (1 - rates), minlength=n_combos)
    wide = np.maximum(np.maximum(by_e + by_d - by_x, by_e), by_d)
    effect = np.maximum(np.divide(wide, simple, out=np.ones(n_combos), where=simple > 0), 1.0)
    score = norm.isf(np.clip(p, SMALLEST, 1.0))
    return np.where(p >= 1.0, 1.0, norm.sf(score / np.sqrt(effect)))


@dataclass(frozen=True)
class Inflation:
    """How far the whole family's standardised excesses lie from those of drawn worlds.

    ``shift`` of the median, ``scale`` of the spread between quartiles (1: none), and ``p`` of a
    median as high as observed among the draws.
    """

    shift: float
    scale: float
    p: float


def inflation(case: Case, hits_rc: np.ndarray) -> Inflation:
    """Inflation against drawn worlds (``hits_rc`` [draws, combinations]); draws' mean and sd."""
    mean, spread = hits_rc.mean(axis=0), hits_rc.std(axis=0)
    some = (mean >= 1.0) & (spread > 0)
    if not some.any():
        return Inflation(0.0, 1.0, 1.0)
    z_rc = (hits_rc[:, some] - mean[some]) / spread[some]
    z = (case.hits_c[some] - mean[some]) / spread[some]
    middle_r, middle = np.median(z_rc, axis=1), float(np.median(z))
    wide_r = np.subtract(*np.percentile(z_rc, [75, 25], axis=1))
    wide = float(np.subtract(*np.percentile(z, [75, 25])))
    return Inflation(
        middle - float(middle_r.mean()),
        wide / float(wide_r.mean()),
        float((1 + (middle_r >= middle).sum()) / (1 + middle_r.size)),
    )


def deflated(p: np.ndarray, by: Inflation) -> np.ndarray:
    """p-values with normal scores moved by the shift and divided by the scale, where inflated."""
    score = norm.isf(np.clip(p, SMALLEST, 1.0))
    return np.where(p >= 1.0, 1.0, norm.sf((score - max(0.0, by.shift)) / max(1.0, by.scale)))


def left_over(case: Case, margins: Margins, drawn_worlds: list[np.ndarray]) -> tuple[float, float]:
    """p-values of two warnings on what the fitted rates leave of the event windows.

    First: names move together (largest eigenvalue of the residuals' products between entities, by
    date blocks). Second: names have spells of their own (products of an entity's residuals some
    blocks apart). Both against ``drawn_worlds``, window flags of worlds with the same margins.
    """
    is_open_et = case.unit.is_open_et
    n_sessions = is_open_et.shape[1]
    rates_et = np.zeros(is_open_et.shape)
    entity, session = np.nonzero(is_open_et)
    rates_et[entity, session] = margins.rates(entity, session)
    variance_et = rates_et * (1 - rates_et)
    starts = np.arange(0, n_sessions, case.unit.horizon)
    spread = np.sqrt(np.add.reduceat(variance_et, starts, axis=1))

    def statistics(is_window_et: np.ndarray) -> tuple[float, float]:
        gap = np.where(is_open_et, is_window_et - rates_et, 0.0)
        block = np.add.reduceat(gap, starts, axis=1)
        block = np.divide(block, spread, out=np.zeros(block.shape), where=spread > 0.05)
        products = block @ block.T
        np.fill_diagonal(products, 0.0)
        lagged = sum(float((block[:, lag:] * block[:, :-lag]).sum()) for lag in range(2, 6))
        return float(np.linalg.eigvalsh(products)[-1]), lagged

    seen = np.array(statistics(case.is_window_et))
    drawn = np.array([statistics(flags) for flags in drawn_worlds])
    together, spells = (1 + (drawn >= seen).sum(axis=0)) / (1 + len(drawn))
    return float(together), float(spells)


def fitted(case: Case) -> tuple[Margins, np.ndarray, np.ndarray]:
    """The margins null as it is: fit, rates at the triggers, p-values."""
    margins = fit_margins(case.unit.is_open_et, case.is_window_et, case.unit.segment.panel.peers)
    rates = margins.rates(case.unit.triggers.entity, case.unit.triggers.session)
    return margins, rates, p_values(case, rates)


def expected_hits(case: Case, rates: np.ndarray) -> np.ndarray:
    """Expected hits of every combination."""
    table = case.unit.triggers
    total = np.concatenate([[0.0], np.cumsum(rates)])
    return total[table.offset_c[1:]] - total[table.offset_c[:-1]]
