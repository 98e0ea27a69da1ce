"""The joint law for Westfall-Young: three ways to draw it, where events come in bursts and not.

*exchanges* ranks drawn hits by the closed form's rates; *own mean* by those rates tilted, one odds
ratio a combination, to the mean of its draws; *whole runs* draws by the trial form.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np

from miner.adjust import step_down_min_p
from miner.discovery import TIE
from miner.kernels import tails
from miner.nulls.exchanges import Exchanger
from miner.units import Case
from tests.calibration import remedies
from tests.calibration.hazard import hazard_rates
from tests.calibration.in_memory import case_of
from tests.calibration.level import DRAWS, Tasks
from tests.calibration.power import PAIR
from tests.calibration.table import BY_NAME, NamedWorld
from tests.calibration.whole_runs import RunExchanger
from tests.worlds import Plant

WORLDS = (
    "quiet",
    "both clusters",
    "calendar, busy",
    "calendar, busy, common",
    "all held",
    "all held, common",
)
PLANTED = Plant(PAIR, 0.2, 200)
WAYS = ("exchanges", "own mean", "whole runs")


def tilted_to_draws(case: Case, rates: np.ndarray, hits_rc: np.ndarray) -> np.ndarray:
    """Rates at the triggers, tilted so that each combination expects the mean of its draws."""
    offset_c = case.unit.triggers.offset_c
    tilted = rates.copy()
    for c, mean in enumerate(hits_rc.mean(axis=0)):
        part = tilted[offset_c[c] : offset_c[c + 1]]
        is_inside = (part > 0) & (part < 1)
        total = float(mean - (part >= 1).sum())
        if 0 < total < is_inside.sum():
            inside = part[is_inside]
            part[is_inside] = tails.tilt(inside, _log_odds(inside, total))
    return tilted


def _log_odds(rates: np.ndarray, total: float) -> float:
    """The log odds ratio that makes the rates add up to ``total``, by halving."""
    low, high = -30.0, 30.0
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if tails.tilt(rates, middle).sum() < total else (low, middle)
    return low


def adjusted_p(case: Case, seed: int) -> dict[str, np.ndarray]:
    """Step-down min-p of every combination, by each way of drawing."""
    table = case.unit.triggers
    rates = hazard_rates(case, table.entity, table.session)
    log_p = np.log(remedies.p_values(case, rates))
    exchanged_rc = Exchanger(case, seed, "joint").hits(DRAWS)
    ways = {
        "exchanges": (exchanged_rc, rates),
        "own mean": (exchanged_rc, tilted_to_draws(case, rates, exchanged_rc)),
        "whole runs": (RunExchanger(case, seed).hits(DRAWS), rates),
    }
    rows = np.arange(len(table.combos))
    return {
        way: step_down_min_p(
            log_p,
            tails.log_tail_ranks(rows, table.offset_c, by, np.ascontiguousarray(hits_rc.T)),
            TIE,
        )
        for way, (hits_rc, by) in ways.items()
    }


def measure(world: NamedWorld, seed: int) -> dict[str, Any]:
    """Smallest adjusted p where nothing is there, and that of a planted pair."""
    nothing = adjusted_p(case_of(world.make(seed)), seed)
    case = case_of(world.make(seed, [PLANTED], type_coverage=0.0))
    row = case.unit.triggers.combos.index(PAIR)
    planted = adjusted_p(case, seed)
    return {
        way: {"smallest": float(nothing[way].min()), "pair": float(planted[way][row])}
        for way in WAYS
    }


def tasks(n_seeds: int) -> Tasks:
    """Seeds outermost."""
    for i in range(n_seeds):
        for name in WORLDS:
            seed = 90_000 + i
            yield (
                {"part": "joint", "world": name, "seed": seed},
                partial(measure, BY_NAME[name], seed),
            )
