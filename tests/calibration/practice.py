"""Usual practice beside this tool, on pure noise: combinations each of them would report.

Usual practice mines what is frequent before events, keeps what beats the base rate, tests that
against shuffled or shifted alerts and adjusts over what was mined.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from scipy.stats import binom

from miner.adjust import benjamini_hochberg
from miner.discovery import Adjuster, find
from miner.explain_away import explain_away
from miner.nulls.own_timing import OwnTimingNull
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.search import cases_of
from miner.time_split import discovery_slice
from tests.calibration.in_memory import panel_of, study_of
from tests.calibration.level import Tasks
from tests.calibration.remedies import multiplied_hazard
from tests.calibration.table import BY_NAME, NamedWorld
from tests.worlds import TARGET

LEAST_LIFT = 1.2
FDR = 0.05
SHUFFLES = 199
WORLDS = ("quiet", "season", "market", "busy names", "calendar, busy", "all held")


def measure(world: NamedWorld, seed: int) -> dict[str, Any]:
    """Numbers of combinations passed, way by way; of rules for this tool."""
    made = world.make(seed)
    study = study_of(made)
    (case,) = cases_of(discovery_slice(panel_of(made), made.n_sessions - 1), [TARGET], study)
    found = find(case, min_hits=study.mining.min_hits, max_size=study.mining.max_size)
    count_c = case.unit.triggers.count_c
    base = case.is_window_et[case.unit.is_open_et].mean()
    is_mined = found.is_proposed & (found.hits / count_c > LEAST_LIFT * base)
    mined = np.flatnonzero(is_mined)
    row: dict[str, Any] = {"family": found.size, "mined": int(mined.size), "passed": {}}

    def passed(p: np.ndarray, family: int) -> int:
        return int((benjamini_hochberg(p, family) <= FDR).sum())

    if mined.size:
        rate = binom.sf(found.hits[mined] - 1, count_c[mined], base)
        shuffled = PlainShuffleNull(SHUFFLES, seed).judge(case, mined).p_value
        shifted = OwnTimingNull().judge(case, mined).p_value
        row["passed"] = {
            "base rate": passed(rate, mined.size),
            "plain shuffle": passed(shuffled, mined.size),
            "circular shift": passed(shifted, mined.size),
            "circular shift, whole family": passed(shifted, found.size),
            "margins, mined only": passed(found.p[mined], mined.size),
        }
    hazard = np.where(found.is_proposed, multiplied_hazard(case), 1.0)
    row["passed"]["hazard, whole family"] = passed(hazard, found.size)
    row["passed"]["this tool"] = passed(found.p, found.size)
    rules = explain_away(
        [found], Adjuster([found], "bh"), fdr=FDR, min_triggers=study.mining.min_triggers
    ).rules
    row["passed"]["this tool, rules"] = len(rules)
    return row


def tasks(n_seeds: int) -> Tasks:
    """Worlds that people's logs look like."""
    for i in range(n_seeds):
        for name in WORLDS:
            seed = 70_000 + i
            yield (
                {"part": "practice", "world": name, "seed": seed},
                partial(measure, BY_NAME[name], seed),
            )
