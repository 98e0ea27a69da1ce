"""Precision of the rules quarter by quarter, over the whole study."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from miner.chosen import ChosenRule
from miner.judged import judge_rules
from miner.panel import Panel
from miner.settings import Study
from miner.time_split import Segment
from miner.wording import combination_name


def quarter_names(dates: np.ndarray) -> np.ndarray:
    """Calendar quarter of each date, as "2021Q3"."""
    month = dates.astype("datetime64[M]").astype(int)
    names, place = np.unique(month // 3, return_inverse=True)
    return np.array([f"{1970 + q // 4}Q{q % 4 + 1}" for q in names])[place]


def by_quarter(
    panel: Panel, dates: np.ndarray, rules: Sequence[ChosenRule], study: Study, n_workers: int = 1
) -> pd.DataFrame:
    """Triggers, hits and expected hits of each rule in each quarter with a trigger.

    For looking at only: the margins are fitted once over the whole study, holdout and all.
    """
    windows = study.windows
    whole = Segment(panel, 0, panel.n_sessions - 1)
    judged = judge_rules(
        whole,
        rules,
        lookback=windows.lookback,
        horizon=windows.horizon,
        rest=windows.rest,
        n_workers=n_workers,
    )
    quarter_t = quarter_names(dates)
    parts = []
    for order, (rule, (unit, row)) in enumerate(zip(rules, judged, strict=True), start=1):
        table = unit.case.unit.triggers
        part = slice(table.offset_c[row], table.offset_c[row + 1])
        frame = pd.DataFrame(
            {
                "quarter": quarter_t[table.session[part]],
                "hits": unit.case.is_hit[part].astype(int),
                "expected_hits": unit.rates[part],
            }
        )
        sums = frame.groupby("quarter", sort=True).agg(
            triggers=("hits", "size"), hits=("hits", "sum"), expected_hits=("expected_hits", "sum")
        )
        sums.insert(2, "precision", sums["hits"] / sums["triggers"])
        sums.insert(0, "combination", combination_name(panel, rule.combo))
        sums.insert(0, "stratum", rule.stratum)
        sums.insert(0, "target", rule.target)
        sums.insert(0, "rule_order", order)
        parts.append(sums.reset_index().set_index("rule_order").reset_index())
    columns = [
        "rule_order",
        "quarter",
        "target",
        "stratum",
        "combination",
        "triggers",
        "hits",
        "precision",
        "expected_hits",
    ]
    if not parts:
        return pd.DataFrame(columns=columns)
    return pd.concat(parts, ignore_index=True)[columns]
