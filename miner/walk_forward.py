"""Walk-forward: rules found by the end of each fold, judged on the next."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner.judged import judge_rules
from miner.panel import Panel
from miner.search import Families, families_until, search
from miner.settings import Study
from miner.time_split import discovery_slice, holdout_slice
from miner.triggers import Combo


@dataclass(frozen=True)
class FoldRule:
    """One rule of one fold, on the sessions ``first .. last`` that follow its discovery."""

    fold: int
    found_until: int
    first: int
    last: int
    target: str
    stratum: str
    combo: Combo
    triggers: int
    hits: int
    expected: float
    p: float


def folds(n_sessions: int, n_folds: int, gap: int, shortest: int) -> list[tuple[int, int, int]]:
    """Expanding windows: (last session of discovery, first and last session judged).

    The calendar is cut into ``n_folds + 1`` equal parts; each fold is judged on one part and found
    on all before it, less ``gap`` sessions. Folds with under ``shortest`` sessions are left out.
    """
    from sklearn.model_selection import TimeSeriesSplit

    if n_folds < 1 or n_sessions // (n_folds + 1) <= gap:
        return []
    if n_folds == 1:  # the splitter wants two or more
        half = n_sessions // 2
        found = [(n_sessions - half - gap - 1, n_sessions - half, n_sessions - 1)]
    else:  # the rows split are sessions, so that the gap counts sessions
        split = TimeSeriesSplit(n_splits=n_folds, gap=gap).split(np.arange(n_sessions))
        found = [(int(early[-1]), int(late[0]), int(late[-1])) for early, late in split]
    return [f for f in found if f[0] + 1 >= shortest and f[2] - f[1] + 1 >= shortest]


def plan(n_sessions: int, study: Study) -> list[tuple[int, int, int]]:
    """The folds of a study (``folds``)."""
    windows, held = study.windows, study.holdout
    shortest = 2 * (windows.lookback + windows.horizon)
    return folds(n_sessions, held.folds, held.embargo, shortest)


def walk_forward(
    panel: Panel,
    targets: Sequence[str],
    study: Study,
    parts: Sequence[tuple[int, int, int]],
    latest: Families,
    n_workers: int = 1,
) -> list[FoldRule]:
    """Search and judge fold by fold, with the study's embargo between the two.

    Parameters
    ----------
    parts : the folds (``plan``)
    latest : families found up to the last fold's discovery, or later
    """
    windows = study.windows
    rows = []
    for number, (until, first, last) in enumerate(parts, start=1):
        early = discovery_slice(panel, until)
        late = holdout_slice(panel, first, last)
        families = families_until(latest, until, study, n_workers)
        rules = search(early, targets, study, families, in_full=False, n_workers=n_workers).chosen()
        judged = judge_rules(
            late,
            rules,
            lookback=windows.lookback,
            horizon=windows.horizon,
            rest=windows.rest,
            n_workers=n_workers,
        )
        rows += [
            FoldRule(
                number,
                until,
                first,
                last,
                rule.target,
                rule.stratum,
                rule.combo,
                int(unit.triggers[i]),
                int(unit.hits[i]),
                float(unit.expected[i]),
                float(unit.p[i]),
            )
            for rule, (unit, i) in zip(rules, judged, strict=True)
        ]
    return rows
