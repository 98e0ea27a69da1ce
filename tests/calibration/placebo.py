"""Placebo against truth: rules in drawn worlds, beside false rules in the world they are drawn of.

At a level of 20 %, where false rules are frequent enough to be counted.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np

from miner.search import placebo_rules, search
from miner.time_split import discovery_slice
from tests.calibration.hunts import PLANT_SIZE, count_kinds, draw_plants
from tests.calibration.in_memory import panel_of, study_of
from tests.calibration.level import Tasks
from tests.calibration.table import BY_NAME, NamedWorld
from tests.worlds import TARGET

FDR = 0.2
N_DRAWN = 20
WORLDS = (
    "quiet",
    "busy names",
    "calendar, busy",
    "both clusters",
    "all held",
    "sectors unknown",
    "reactive, clustered",
    "busy spell, mild",
)
WITH_PLANTS = ("quiet", "calendar, busy")


def measure(world: NamedWorld, seed: int, has_plants: bool) -> dict[str, Any]:
    """Rules of the hunt by kind, and the number in each drawn world."""
    rng = np.random.default_rng([seed, 1])
    plants = [plant for plant, _ in draw_plants(rng, 0.05)] if has_plants else []
    made = world.make(seed, plants, **(PLANT_SIZE if has_plants else {}))
    study = study_of(made, testing={"placebo": N_DRAWN, "fdr": FDR, "permutations": 0})
    found = search(discovery_slice(panel_of(made), made.n_sessions - 1), [TARGET], study)
    combos = [
        found.found[rule.case].case.unit.triggers.combos[rule.row]
        for rule in found.explanation.rules
    ]
    return {
        "rules": count_kinds(combos, [plant.combination for plant in plants]),
        "placebo": placebo_rules(found, study),
    }


def tasks(n_seeds: int) -> Tasks:
    """Worlds without and with plants."""
    for i in range(n_seeds):
        for has_plants, names in ((False, WORLDS), (True, WITH_PLANTS)):
            for name in names:
                seed = 60_000 + i
                yield (
                    {"part": "placebo", "world": name, "plants": has_plants, "seed": seed},
                    partial(measure, BY_NAME[name], seed, has_plants),
                )
