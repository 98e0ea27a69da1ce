"""Power of one test: how often a planted pair is seen, by every null and remedy."""

from __future__ import annotations

from functools import partial
from typing import Any

from tests.calibration.in_memory import case_of
from tests.calibration.level import Tasks, judge
from tests.calibration.table import BY_NAME, NamedWorld
from tests.worlds import Plant

PAIR = (0, 1)
# with what the background gives, about four times a base rate of 5 %
PLANTED = Plant(PAIR, 0.15, 200)

WORLDS = (
    "quiet",
    "season",
    "busy names",
    "both clusters",
    "calendar, busy",
    "calendar, busy, common",
    "all held",
    "sectors unknown",
    "reactive, clustered",
    "busy spell, mild",
    "busy spell",
)


def measure(world: NamedWorld, seed: int) -> dict[str, Any]:
    """p-values of the planted pair; types are published throughout, so that it is there."""
    case = case_of(world.make(seed, [PLANTED], type_coverage=0.0))
    judged = judge(case, seed, with_draws=True)
    row = case.unit.triggers.combos.index(PAIR)
    return {
        "triggers": int(case.unit.triggers.count_c[row]),
        "hits": int(case.hits_c[row]),
        "expected": float(judged.expected[row]),
        "p": {name: float(p[row]) for name, p in judged.p.items()},
    } | judged.facts


def tasks(n_seeds: int) -> Tasks:
    """One plant a world."""
    for i in range(n_seeds):
        for name in WORLDS:
            seed = 40_000 + i
            yield (
                {"part": "power", "world": name, "seed": seed},
                partial(measure, BY_NAME[name], seed),
            )
