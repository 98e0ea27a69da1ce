"""Level: in worlds where no combination says anything, how often each null says p <= .05."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from miner.kernels.bits import unpack
from miner.kernels.windows import mark_windows
from miner.nulls.exchanges import Exchanger
from miner.nulls.own_timing import OwnTimingNull
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.units import Case
from tests.calibration import remedies
from tests.calibration.in_memory import case_of
from tests.calibration.table import WORLDS, NamedWorld
from tests.calibration.whole_runs import RunExchanger

LEVELS = (0.05, 0.01, 0.001)
ROOMY = 5.0  # expected hits from which discreteness no longer hides a level that is broken
DRAWS = 999
SHUFFLES = 99
WARNING_DRAWS = 99


def _below(p: np.ndarray, expected: np.ndarray) -> dict[str, list[float]]:
    """Shares at or below each level, of all combinations and of the roomy ones."""
    roomy = p[expected >= ROOMY]
    return {
        "all": [float((p <= level).mean()) for level in LEVELS],
        "roomy": [float((roomy <= level).mean()) for level in LEVELS] if roomy.size else [],
    }


@dataclass(frozen=True)
class Judged:
    """A case by every null and remedy: p-values by name, and what else was measured of it."""

    expected: np.ndarray
    p: dict[str, np.ndarray]
    facts: dict[str, Any]


def judge(case: Case, seed: int, *, with_draws: bool = False, with_slow: bool = False) -> Judged:
    """Judge every combination of a case.

    ``with_draws`` adds what needs drawn worlds; ``with_slow`` the plain shuffle and the warnings.
    """
    rows = np.arange(len(case.unit.triggers.combos))
    margins, rates, p_margins = remedies.fitted(case)
    expected = remedies.expected_hits(case, rates)
    p_own = OwnTimingNull().judge(case, rows).p_value
    p = {
        "margins": p_margins,
        "hazard": remedies.multiplied_hazard(case),
        "own timing": p_own,
        "larger of both": np.maximum(p_margins, p_own),
        "rows by 50": remedies.renewed_rows(case, 50),
        "rows by 25": remedies.renewed_rows(case, 25),
        "recent 10": remedies.split_by_recent(case, 10),
        "clustered": remedies.widened_by_clusters(case, rates, p_margins),
    }
    facts: dict[str, Any] = {}
    if with_draws:
        hits_rc = Exchanger(case, seed, "judge").hits(DRAWS)
        runs_rc = RunExchanger(case, seed).hits(DRAWS)
        extra = remedies.inflation(case, runs_rc)
        p["exchanges"] = _drawn_p(case, hits_rc)
        p["whole runs"] = _drawn_p(case, runs_rc)
        p["deflated"] = remedies.deflated(p_margins, extra)
        facts |= {"shift": extra.shift, "scale": extra.scale, "p_inflated": extra.p}
        facts["p_inflated_exchanges"] = remedies.inflation(case, hits_rc).p
        some = expected >= ROOMY
        if some.any():
            closed_sd = _closed_sd(case, rates)[some]
            for name, drawn in (("exchanges", hits_rc), ("runs", runs_rc)):
                sd = np.maximum(drawn.std(axis=0)[some], 1e-9)
                facts[f"mean_{name}"] = float((drawn.mean(axis=0)[some] / expected[some]).mean())
                facts[f"sd_{name}"] = float(np.median(closed_sd / sd))
    if with_slow:
        p["plain shuffle"] = PlainShuffleNull(SHUFFLES, seed).judge(case, rows).p_value
        facts["p_together"], facts["p_spells"] = remedies.left_over(
            case, margins, drawn_windows(case, seed, WARNING_DRAWS)
        )
    return Judged(expected, p, facts)


def measure(
    world: NamedWorld, seed: int, *, with_draws: bool = False, with_slow: bool = False
) -> dict[str, Any] | None:
    """Shares of combinations at or below each level, by null and remedy; None without a family."""
    case = case_of(world.make(seed))
    n_combos = len(case.unit.triggers.combos)
    if n_combos == 0:
        return None
    judged = judge(case, seed, with_draws=with_draws, with_slow=with_slow)
    return {
        "family": n_combos,
        "base": float(case.is_window_et[case.unit.is_open_et].mean()),
        "below": {name: _below(p, judged.expected) for name, p in judged.p.items()},
    } | judged.facts


def _drawn_p(case: Case, hits_rc: np.ndarray) -> np.ndarray:
    return (1 + (hits_rc >= case.hits_c).sum(axis=0)) / (1 + len(hits_rc))


def _closed_sd(case: Case, rates: np.ndarray) -> np.ndarray:
    combo = case.unit.triggers.trigger_combo
    size = len(case.unit.triggers.combos)
    return np.sqrt(np.bincount(combo, rates * (1 - rates), minlength=size))


def drawn_windows(case: Case, seed: int, n_draws: int) -> list[np.ndarray]:
    """Window flags of worlds with exchanged sessions."""
    n_entities, n_sessions = case.unit.is_open_et.shape
    return [
        unpack(mark_windows(entity, session, n_entities, n_sessions, case.unit.horizon), n_sessions)
        for entity, session in Exchanger(case, seed, "warning").worlds(n_draws)
    ]


Tasks = Iterator[tuple[dict[str, Any], Callable[[], Any]]]


def tasks(n_seeds: int, n_drawn: int, n_slow: int) -> Tasks:
    """Runs, seeds outermost so that an interruption leaves every world equally far.

    The first ``n_drawn`` seeds get the drawn worlds and the first ``n_slow`` the slow nulls; the
    world of 40 types, a hundred times the work, every tenth seed.
    """
    for i in range(n_seeds):
        for world in WORLDS:
            if world.drivers.get("n_types", 0) < 40 or i % 10 == 0:
                yield (
                    {"part": "level", "world": world.name, "seed": 10_000 + i},
                    partial(
                        measure,
                        world,
                        10_000 + i,
                        with_draws=i < n_drawn,
                        with_slow=i < n_slow and world.drivers.get("n_types", 0) < 40,
                    ),
                )
