"""Level: in worlds where no combination says anything, how often each null says p < .05."""

from __future__ import annotations

from typing import Any

import numpy as np

from miner.kernels.windows import mark_windows
from miner.nulls.exchanges import Exchanger
from miner.nulls.own_timing import OwnTimingNull
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.units import Case
from tests.calibration import remedies
from tests.calibration.in_memory import case_of
from tests.calibration.table import NamedWorld

LEVELS = (0.05, 0.01, 0.001)
ROOMY = 5.0  # expected hits from which discreteness no longer hides a level that is broken
DRAWS = 999
SHUFFLES = 99
WARNING_DRAWS = 99


def _below(p: np.ndarray, expected: np.ndarray) -> dict[str, list[float]]:
    """Shares below each level, of all combinations and of the roomy ones."""
    roomy = p[expected >= ROOMY]
    return {
        "all": [float((p < level).mean()) for level in LEVELS],
        "roomy": [float((roomy < level).mean()) for level in LEVELS] if roomy.size else [],
    }


def measure(
    world: NamedWorld, seed: int, *, with_shuffle: bool = False, with_warnings: bool = False
) -> dict[str, Any] | None:
    """Shares of combinations below each level by every null and remedy; None without a family."""
    case = case_of(world.make(seed))
    rows = np.arange(len(case.unit.triggers.combos))
    if rows.size == 0:
        return None
    margins, rates, p_margins = remedies.fitted(case)
    expected = remedies.expected_hits(case, rates)
    exchanger = Exchanger(case, seed, "judge")
    hits_rc = exchanger.hits(DRAWS)
    p_drawn = (1 + (hits_rc >= case.hits_c).sum(axis=0)) / (1 + DRAWS)
    extra = remedies.inflation(case, hits_rc)
    some = expected >= ROOMY
    closed_sd = _closed_sd(case, rates)
    p = {
        "margins": p_margins,
        "exchanges": p_drawn,
        "own timing": OwnTimingNull().judge(case, rows).p_value,
        "max of both": np.maximum(p_margins, OwnTimingNull().judge(case, rows).p_value),
        "rows by 100": remedies.renewed_rows(case, 100),
        "recent 10": remedies.split_by_recent(case, 10),
        "recent 30": remedies.split_by_recent(case, 30),
        "clustered": remedies.widened_by_clusters(case, rates, p_margins),
        "deflated": remedies.deflated(p_margins, extra),
    }
    if with_shuffle:
        p["plain shuffle"] = PlainShuffleNull(SHUFFLES, seed).judge(case, rows).p_value
    row: dict[str, Any] = {
        "family": int(rows.size),
        "base": float(case.is_window_et[case.unit.is_open_et].mean()),
        "below": {name: _below(values, expected) for name, values in p.items()},
        "shift": extra.shift,
        "scale": extra.scale,
        "p_inflated": extra.p,
    }
    if some.any():
        row["mean_ratio"] = float((hits_rc.mean(axis=0)[some] / expected[some]).mean())
        row["sd_ratio"] = float((closed_sd[some] / hits_rc.std(axis=0)[some]).mean())
    if with_warnings:
        row["p_together"], row["p_spells"] = remedies.left_over(
            case, margins, drawn_windows(case, seed, WARNING_DRAWS)
        )
    return row


def _closed_sd(case: Case, rates: np.ndarray) -> np.ndarray:
    combo = case.unit.triggers.trigger_combo
    size = len(case.unit.triggers.combos)
    return np.sqrt(np.bincount(combo, rates * (1 - rates), minlength=size))


def drawn_windows(case: Case, seed: int, n_draws: int) -> list[np.ndarray]:
    """Window flags of worlds with exchanged sessions."""
    n_entities, n_sessions = case.unit.is_open_et.shape
    return [
        mark_windows(entity, session, n_entities, n_sessions, case.unit.horizon)
        for entity, session in Exchanger(case, seed, "warning").worlds(n_draws)
    ]
