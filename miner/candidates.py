"""The candidates table: one row a proposed combination of the family, with its verdict."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from miner.columns import CANDIDATE_COLUMNS, EXPLAINED, NOT_SIGNIFICANT
from miner.holdout import Outcome
from miner.intervals import precision_intervals
from miner.nulls.own_timing import OwnTimingNull
from miner.search import Search
from miner.units import base_rates
from miner.wording import combination_name

PANDAS_TYPES = {"text": "str", "integer": "Int64", "number": "float64"}


def candidates_table(
    found: Search, outcomes: Sequence[Outcome], n_workers: int = 1
) -> pd.DataFrame:
    """All candidates in order of target, stratum, size and types (``miner.columns``)."""
    adjusted = found.adjuster.adjusted([f.p for f in found.found])
    rules = found.explanation.rules
    parts = []
    for i, (f, q_value) in enumerate(zip(found.found, adjusted, strict=True)):
        case, table, rows = f.case, f.case.unit.triggers, f.rows
        panel = case.unit.segment.panel
        names = [combination_name(panel, table.combos[row]) for row in rows]
        n = table.count_c[rows]
        interval = precision_intervals(
            table, rows, case.is_hit, case.unit.horizon, panel.n_sessions
        )
        expected = f.expected[rows]
        lift = np.full(rows.size, np.nan)
        np.divide(f.hits[rows], expected, out=lift, where=expected > 0)
        frame = pd.DataFrame(
            {
                "target": case.target,
                "stratum": case.unit.stratum,
                "combination": names,
                "size": [len(table.combos[row]) for row in rows],
                "triggers": n,
                "hits": f.hits[rows],
                "precision": f.hits[rows] / n,
                "precision_low": interval.low,
                "precision_high": interval.high,
                "base_rate": base_rates(case)[rows],
                "expected_hits": expected,
                "lift": lift,
                "p_value": f.p[rows],
                "q_value": q_value[rows],
                "p_own_timing": OwnTimingNull().judge(case, rows, n_workers).p_value,
            },
            index=rows,
        ).reindex(columns=list(CANDIDATE_COLUMNS))
        frame = frame.astype({name: PANDAS_TYPES[kind] for name, kind in CANDIDATE_COLUMNS.items()})
        frame["verdict"] = NOT_SIGNIFICANT
        for (case_at, row), place in found.explanation.explained_by.items():
            if case_at == i:
                rule = rules[place]
                name = _name_of(found, rule.case, rule.row)
                if rule.case != i:
                    name += " [{}, {}]".format(*found.found[rule.case].case.name)
                frame.loc[row, "explained_by"] = name
                frame.loc[row, "verdict"] = EXPLAINED
        for order, (rule, outcome) in enumerate(zip(rules, outcomes, strict=True), start=1):
            if rule.case != i:
                continue
            frame.loc[rule.row, "rule_order"] = order
            if rule.sharpens is not None:
                base = rules[rule.sharpens]
                frame.loc[rule.row, "sharpens"] = _name_of(found, base.case, base.row)
            frame.loc[rule.row, "holdout_triggers"] = outcome.triggers
            frame.loc[rule.row, "holdout_hits"] = outcome.hits
            frame.loc[rule.row, "holdout_precision"] = outcome.precision
            frame.loc[rule.row, "holdout_low"] = outcome.low
            frame.loc[rule.row, "holdout_high"] = outcome.high
            frame.loc[rule.row, "holdout_base_rate"] = outcome.base_rate
            frame.loc[rule.row, "holdout_expected_hits"] = outcome.expected
            frame.loc[rule.row, "holdout_p_value"] = outcome.p
            frame.loc[rule.row, "verdict"] = outcome.verdict
        parts.append(frame)
    whole = pd.concat(parts)
    text = [name for name, kind in CANDIDATE_COLUMNS.items() if kind == "text"]
    whole[text] = whole[text].fillna("")
    return whole.reset_index(drop=True)


def rules_table(candidates: pd.DataFrame) -> pd.DataFrame:
    """The rows that became rules, in the order found."""
    return candidates[candidates["rule_order"].notna()].sort_values("rule_order", ignore_index=True)


def _name_of(found: Search, case: int, row: int) -> str:
    of = found.found[case].case
    return combination_name(of.unit.segment.panel, of.unit.triggers.combos[row])
