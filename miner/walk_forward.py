"""Walk-forward: rules found by the end of each fold, judged on the next."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner.judged import judge_rules
from miner.panel import Panel
from miner.search import families_of, search
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


def walk_forward(
    panel: Panel, targets: Sequence[str], study: Study, n_workers: int = 1
) -> tuple[list[tuple[int, int, int]], list[FoldRule]]:
    """Search and judge fold by fold, with the study's embargo between the two."""
    windows = study.windows
    shortest = 2 * (windows.lookback + windows.horizon)
    parts = folds(panel.n_sessions, study.holdout.folds, study.holdout.embargo, shortest)
    if not parts:
        return [], []
    # a trigger depends on nothing after it, so the last fold's triggers serve the earlier ones
    latest = families_of(discovery_slice(panel, parts[-1][0]), study, n_workers)
    rows = []
    for number, (until, first, last) in enumerate(parts, start=1):
        early = discovery_slice(panel, until)
        late = holdout_slice(panel, first, last)
        families = {
            name: table.until(until - windows.horizon + 1, study.mining.min_triggers)
            for name, table in latest.items()
        }
        rules = search(
            early, targets, study, with_draws=False, families=families, n_workers=n_workers
        ).chosen()
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
    return parts, rows
