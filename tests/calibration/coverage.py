"""Coverage of the 95 % intervals of a precision whose triggers hang together."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from scipy.special import expit, logit
from scipy.stats import norm

from miner.intervals import precision_intervals, wilson
from miner.triggers import TriggerTable
from tests.calibration.level import Tasks

# entities, dates, triggers, precision, spread of entity and of date effects on the logit
DESIGNS = (
    (30, 60, 180, 0.2, 0.0, 0.0),
    (30, 60, 180, 0.2, 0.8, 0.0),
    (30, 60, 180, 0.2, 0.0, 0.8),
    (30, 60, 180, 0.2, 0.8, 0.8),
    (30, 60, 180, 0.2, 1.2, 1.2),
    (100, 80, 100, 0.1, 0.8, 0.8),
    (300, 100, 1000, 0.05, 0.8, 0.8),
    (12, 15, 60, 0.5, 0.8, 0.8),
)


def measure(design: tuple[Any, ...], seed: int, n_worlds: int) -> dict[str, Any]:
    """Share of worlds whose interval holds the marginal precision, ours and the plain one."""
    n_entities, n_dates, n_triggers, precision, sd_e, sd_d = design
    rng = np.random.default_rng([seed, int(1000 * (sd_e + 10 * sd_d)), n_entities])
    middle, truth = _middle(precision, float(np.hypot(sd_e, sd_d)))
    entity, session, is_hit, counts = [], [], [], []
    for _ in range(n_worlds):
        n = rng.poisson(n_triggers)
        e, d = rng.integers(0, n_entities, n), rng.integers(0, n_dates, n)
        cell = np.unique(e * n_dates + d)  # one trigger an entity and date
        e, d = cell // n_dates, cell % n_dates
        score = middle + sd_e * rng.standard_normal(n_entities)[e]
        score = score + sd_d * rng.standard_normal(n_dates)[d]
        entity.append(e)
        session.append(d)
        is_hit.append(rng.random(e.size) < expit(score))
        counts.append(e.size)
    offset_c = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    table = TriggerTable(
        tuple((i,) for i in range(n_worlds)),
        offset_c,
        np.concatenate(entity).astype(np.int32),
        np.concatenate(session).astype(np.int32),
    )
    flags = np.concatenate(is_hit)
    ours = precision_intervals(table, np.arange(n_worlds), flags, 1, n_dates)
    n = table.count_c.astype(float)
    share = np.add.reduceat(flags.astype(float), offset_c[:-1]) / n
    low, high = wilson(share, n, norm.ppf(0.975))
    return {
        "truth": truth,
        "worlds": n_worlds,
        "ours": float(((ours.low <= truth) & (truth <= ours.high)).mean()),
        "plain": float(((low <= truth) & (truth <= high)).mean()),
        "width": float((ours.high - ours.low).mean() / (high - low).mean()),
        "few": float(ours.is_few.mean()),
    }


def _middle(precision: float, spread: float) -> tuple[float, float]:
    """Middle of the logit so that its mean through ``expit`` is ``precision``; that mean."""
    node, weight = np.polynomial.hermite_e.hermegauss(61)
    weight = weight / weight.sum()
    low, high = logit(precision) - 5, logit(precision) + 5
    for _ in range(80):
        middle = (low + high) / 2
        mean = float((weight * expit(middle + spread * node)).sum())
        low, high = (middle, high) if mean < precision else (low, middle)
    return middle, mean


def tasks(n_worlds: int) -> Tasks:
    """One run a design."""
    for design in DESIGNS:
        yield (
            {"part": "intervals", "design": list(design), "seed": 50_000},
            partial(measure, design, 50_000, n_worlds),
        )
