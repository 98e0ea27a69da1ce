"""Rules judged on a segment they were not found on: hits against the null refitted there."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner import triggers
from miner.chosen import ChosenRule
from miner.intervals import Interval, precision_intervals
from miner.nulls.margins import Margins, fit, judge_hits, tally
from miner.time_split import Segment
from miner.triggers import Combo
from miner.units import Case, base_rates, make_case, make_unit


@dataclass(frozen=True)
class Judged:
    """What a segment says of one target's and stratum's combinations.

    Arrays are over ``case.unit.triggers.combos`` (sorted by size, then types); ``margins`` is
    the null, fitted, and ``rates`` its rate at every trigger.
    """

    case: Case
    margins: Margins
    rates: np.ndarray
    triggers: np.ndarray
    hits: np.ndarray
    expected: np.ndarray
    p: np.ndarray
    base_rate: np.ndarray
    interval: Interval

    def place(self, combo: Combo) -> int:
        """Row of a combination."""
        return self.case.unit.triggers.combos.index(combo)


def judge_on(
    segment: Segment,
    target: str,
    stratum: str,
    code: int | None,
    combos: Sequence[Combo],
    *,
    lookback: int,
    horizon: int,
    rest: int,
    n_workers: int = 1,
) -> Judged:
    """Judge combinations of one target and stratum on a segment, margins refitted in it."""
    table = triggers.find_triggers(
        segment, combos, code, lookback=lookback, horizon=horizon, rest=rest, n_workers=n_workers
    )
    unit = make_unit(segment, stratum, code, table, lookback=lookback, horizon=horizon, rest=rest)
    case = make_case(target, unit, segment.panel.events[target])
    panel = segment.panel
    margins = fit(unit.cells, case.window_ew, None, n_workers, panel.law)
    rates = margins.rates(table.entity, table.session)
    rows = np.arange(len(table.combos))
    n, hits, expected, _ = tally(table, margins, case.window_ew, n_workers=n_workers)
    p = judge_hits(rows, table, margins, hits, n_workers=n_workers)
    interval = precision_intervals(table, rows, case.is_hit, horizon, segment.panel.n_sessions)
    return Judged(case, margins, rates, n, hits, expected, p, base_rates(case), interval)


def judge_rules(
    segment: Segment,
    rules: Sequence[ChosenRule],
    *,
    lookback: int,
    horizon: int,
    rest: int,
    n_workers: int = 1,
) -> list[tuple[Judged, int]]:
    """Judge rules on a segment: for each its target's and stratum's ``Judged``, and its row there.

    The rules that others sharpen are judged along with them.
    """
    combos: dict[tuple[str, str, int | None], set[Combo]] = {}
    for rule in rules:
        mine = combos.setdefault((rule.target, rule.stratum, rule.code), set())
        mine.add(rule.combo)
        if rule.sharpens is not None:
            mine.add(rule.sharpens)
    judged = {
        key: judge_on(
            segment,
            *key,
            sorted(members),
            lookback=lookback,
            horizon=horizon,
            rest=rest,
            n_workers=n_workers,
        )
        for key, members in combos.items()
    }
    units = [judged[rule.target, rule.stratum, rule.code] for rule in rules]
    return [(unit, unit.place(rule.combo)) for unit, rule in zip(units, rules, strict=True)]
