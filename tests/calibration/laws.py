"""Level when names and sessions combine by another law than the null's: odds, hazard or sum.

One season, market shocks and busy names drive alerts and events. Their chance on a session follows
odds that multiply, a rate that multiplies, or a rate to which name and session each add.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np
from scipy.special import expit

from miner.demo.world_parts import name_weights, season_level, shock_level
from tests.calibration.in_memory import case_of
from tests.calibration.level import LEVELS, Tasks, judge
from tests.calibration.table import SIZE
from tests.worlds import WorldArrays, make_world

LAWS = ("odds", "hazard", "sum")
HORIZONS = (1, 5)
BASE_RATES = (0.01, 0.05, 0.2)
NULLS = ("margins", "hazard", "exchanges", "whole runs")


def make(seed: int, law: str, base_rate: float, horizon: int) -> WorldArrays:
    """A world whose events follow ``law``, its share of cells in a window near ``base_rate``."""
    rng = np.random.default_rng([seed, 5])
    n_entities, n_sessions = SIZE["n_entities"], SIZE["n_sessions"]
    weight = name_weights(rng, n_entities, 1.0)[:, None]
    level = season_level((np.arange(n_sessions) % 63) / 63, 1.0) * shock_level(
        rng, 1, n_sessions, 1.0
    )
    busy_et = weight * level / (weight * level).mean()

    def chance(log_scale: float) -> np.ndarray:
        if law == "odds":
            return expit(log_scale + np.log(busy_et))
        if law == "hazard":
            return -np.expm1(-np.exp(log_scale) * busy_et)
        return np.minimum(np.exp(log_scale) * (weight + level) / 2, 1.0)

    low, high = -20.0, 20.0
    for _ in range(60):
        middle = (low + high) / 2
        is_low = (1 - (1 - chance(middle)) ** horizon).mean() < base_rate
        low, high = (middle, high) if is_low else (low, middle)
    event = np.nonzero(rng.random(busy_et.shape) < chance(low))
    rate = SIZE["alerts_per_type"] / busy_et.size
    shape = (SIZE["n_types"], *busy_et.shape)
    kind, entity, session = np.nonzero(rng.random(shape) < -np.expm1(-rate * busy_et))
    frame = make_world(seed, **(SIZE | {"alerts_per_type": 1}), horizon=horizon)
    order = np.lexsort((session, kind, entity))
    return replace(
        frame,
        alert_entity=entity[order].astype(np.int32),
        alert_type=kind[order].astype(np.int32),
        alert_session=session[order].astype(np.int32),
        event_entity=event[0].astype(np.int32),
        event_session=event[1].astype(np.int32),
    )


def measure(seed: int, law: str, base_rate: float, horizon: int) -> dict[str, Any]:
    """Shares of the family at or below each level."""
    judged = judge(case_of(make(seed, law, base_rate, horizon)), seed, with_draws=True)
    return {name: [float((judged.p[name] <= a).mean()) for a in LEVELS] for name in NULLS}


def tasks(n_seeds: int) -> Tasks:
    """Every law, base rate and horizon."""
    for i in range(n_seeds):
        for law in LAWS:
            for base_rate in BASE_RATES:
                for horizon in HORIZONS:
                    key = {"law": law, "base_rate": base_rate, "horizon": horizon}
                    seed = 80_000 + i
                    yield {"part": "laws", **key, "seed": seed}, partial(measure, seed, **key)
