"""Parts of a run's record: counts, the rules' steps, reasons for distrust, folds, the shuffle."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import pandas as pd

from miner.assemble import Inputs
from miner.chosen import ChosenRule
from miner.columns import CONFIRMED, JOINER, ODDS
from miner.explain_away import Rule
from miner.holdout import Outcome
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.search import Search
from miner.settings import Study
from miner.walk_forward import FoldRule
from miner.wording import combination_name

LEANING = 0.01
HIGH_BASE_RATE = 0.1


def distrust(found: Search, study: Study) -> Iterator[str]:
    """Reasons not to believe a hunt that the hunt itself can see."""
    for f in found.found:
        rate = open_rate(f.case.unit.is_open_et, f.case.is_window_et)
        if study.testing.margins == ODDS and rate is not None and rate > HIGH_BASE_RATE:
            yield (
                f"target {f.case.target!r}, stratum {f.case.unit.stratum!r}: at a base rate of "
                f"{rate:.0%} odds that multiply can expect too few hits where busy names meet busy "
                'dates; margins = "hazard" in [testing] holds its level there.'
            )
    for f, lean in zip(found.found, found.leans, strict=False):
        if lean <= LEANING:
            yield (
                f"target {f.case.target!r}, stratum {f.case.unit.stratum!r}: the family as a whole "
                f"leans towards events (p {lean:.2g}), not only the rules. A peer column may be "
                "missing, or names have busy spells of their own; no null here removes those."
            )


def counts_of(found: Search, outcomes: list[Outcome], fdr: float) -> dict[str, Any]:
    """Sizes of the funnel: family, proposals, what passed by each adjustment, rules, confirmed."""
    p = [f.p for f in found.found]
    passed = {}
    for how in ("bh", "by", "westfall-young"):
        if how != "westfall-young" or found.adjuster.has_draws:
            adjusted = np.concatenate(found.adjuster.adjusted(p, how))
            passed[how] = int((adjusted <= fdr).sum())
    return {
        "family": found.adjuster.family,
        "proposed": sum(f.n_proposed for f in found.found),
        "candidates": sum(int(f.rows.size) for f in found.found),
        "passed": passed,
        "rules": len(outcomes),
        "confirmed": sum(outcome.verdict == CONFIRMED for outcome in outcomes),
    }


def open_rate(is_open_et: np.ndarray, is_window_et: np.ndarray) -> float | None:
    """Share of open cells in an event window, None where no cell is open."""
    cells = int(is_open_et.sum())
    return float((is_open_et & is_window_et).sum() / cells) if cells else None


def step_of(
    found: Search, rule: Rule, chosen: ChosenRule, outcome: Outcome, order: int
) -> dict[str, Any]:
    """A rule's numbers at the step at which it was taken, and its holdout beyond the table."""
    panel = found.found[rule.case].case.unit.segment.panel
    explained = sum(place == order - 1 for place in found.explanation.explained_by.values())
    return {
        "order": order,
        "target": chosen.target,
        "stratum": chosen.stratum,
        "combination": combination_name(panel, chosen.combo),
        "step": {
            "triggers": rule.triggers,
            "hits": rule.hits,
            "expected_hits": rule.expected,
            "standardised_excess": rule.excess,
            "p": rule.p,
            "adjusted": rule.adjusted,
        },
        "instead_of": None if rule.instead_of is None else combination_name(panel, rule.instead_of),
        "sharpens": None if chosen.sharpens is None else combination_name(panel, chosen.sharpens),
        "p_sharper": rule.p_sharper,
        "explains": explained,
        "holdout": {
            "p_holm": outcome.p_holm,
            "power": outcome.power,
            "p_sharper": outcome.p_sharper,
            "too_few_clusters": outcome.is_few,
            "verdict": outcome.verdict,
        },
    }


def walk_table(inputs: Inputs, rows: list[FoldRule]) -> pd.DataFrame:
    """The walk-forward's rules, one a row."""
    dates = inputs.calendar.dates
    return pd.DataFrame(
        [
            {
                "fold": row.fold,
                "found_until": str(dates[row.found_until]),
                "judged_from": str(dates[row.first]),
                "judged_to": str(dates[row.last]),
                "target": row.target,
                "stratum": row.stratum,
                "combination": JOINER.join(inputs.panel.type_names[k] for k in row.combo),
                "triggers": row.triggers,
                "hits": row.hits,
                "expected_hits": row.expected,
                "p_value": row.p,
            }
            for row in rows
        ],
        columns=[
            "fold",
            "found_until",
            "judged_from",
            "judged_to",
            "target",
            "stratum",
            "combination",
            "triggers",
            "hits",
            "expected_hits",
            "p_value",
        ],
    )


def shuffle_table(found: Search, study: Study, n_workers: int) -> pd.DataFrame:
    """What the plain shuffle says of the candidates, for comparison only."""
    null = PlainShuffleNull(study.testing.shuffle, study.testing.seed)
    parts = []
    for f in found.found:
        verdict = null.judge(f.case, f.rows, n_workers)
        table, panel = f.case.unit.triggers, f.case.unit.segment.panel
        parts.append(
            pd.DataFrame(
                {
                    "target": f.case.target,
                    "stratum": f.case.unit.stratum,
                    "combination": [combination_name(panel, table.combos[r]) for r in f.rows],
                    "triggers": table.count_c[f.rows],
                    "hits": f.hits[f.rows],
                    "expected_hits": verdict.expected_hits,
                    "p_plain_shuffle": verdict.p_value,
                    "p_margins": f.p[f.rows],
                }
            )
        )
    return pd.concat(parts, ignore_index=True)
