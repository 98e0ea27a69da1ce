"""The whole hunt with closed-form statistics: a world in, the candidate rows out."""

from typing import Any

from .explaining import explain_away
from .intervals import precision_interval
from .nulls import own_timing
from .verdicts import judge_rules
from .world import World, base_rate, discovery, eligible_triggers, followed, text

COLUMNS = [
    "target",
    "stratum",
    "combination",
    "size",
    "triggers",
    "hits",
    "precision",
    "precision_low",
    "precision_high",
    "base_rate",
    "expected_hits",
    "lift",
    "p_value",
    "q_value",
    "p_own_timing",
    "rule_order",
    "sharpens",
    "explained_by",
    "holdout_triggers",
    "holdout_hits",
    "holdout_precision",
    "holdout_low",
    "holdout_high",
    "holdout_base_rate",
    "holdout_expected_hits",
    "holdout_p_value",
    "verdict",
]


def hunt(world: World, fdr: float, alpha: float, adjust: str = "bh") -> list[dict[str, Any]]:
    """One row per candidate by unit, size and text; None where a column is empty.

    Beyond the COLUMNS a row has `sharpens_order` and `explained_by_order`, the orders of the
    rules that `sharpens` and `explained_by` name by their combinations, the `judgement` of a
    rule and the rule's own `step` numbers.
    """
    segment = discovery(world)
    explanation = explain_away(world, fdr, adjust)
    judged = judge_rules(world, explanation, alpha)
    rule_of = {(rule.unit, rule.combination): rule for rule in explanation.rules}

    def name(order: int | None) -> str | None:
        return None if order is None else text(explanation.rules[order - 1].combination)

    rows = []
    for (unit, combination), found in explanation.first.items():
        key = unit, combination
        cells = eligible_triggers(world, unit, segment, combination)
        hits = [int(followed(world, unit[0], cell)) for cell in cells]
        low, high, _ = precision_interval(cells, hits, world.horizon)
        rule = rule_of.get(key)
        seen = None if rule is None else judged[rule.order]
        sharpens = None if rule is None else rule.sharpens
        explained_by = explanation.explained.get(key)
        rows.append(
            {
                "target": unit[0],
                "stratum": unit[1],
                "combination": text(combination),
                "size": len(combination),
                "triggers": found.triggers,
                "hits": found.hits,
                "precision": found.hits / found.triggers,
                "precision_low": low,
                "precision_high": high,
                "base_rate": base_rate(world, unit, segment, combination),
                "expected_hits": found.expected,
                "lift": found.hits / found.expected if found.expected > 0 else float("nan"),
                "p_value": found.p,
                "q_value": explanation.first_q[key],
                "p_own_timing": own_timing(world, unit, segment, combination),
                "rule_order": None if rule is None else rule.order,
                "sharpens": name(sharpens),
                "explained_by": name(explained_by),
                "holdout_triggers": None if seen is None else seen.triggers,
                "holdout_hits": None if seen is None else seen.hits,
                "holdout_precision": None if seen is None else seen.precision,
                "holdout_low": None if seen is None else seen.low,
                "holdout_high": None if seen is None else seen.high,
                "holdout_base_rate": None if seen is None else seen.base_rate,
                "holdout_expected_hits": None if seen is None else seen.expected,
                "holdout_p_value": None if seen is None else seen.p,
                "verdict": seen.verdict
                if seen is not None
                else "explained"
                if explained_by is not None
                else "not significant",
                "sharpens_order": sharpens,
                "explained_by_order": explained_by,
                "judgement": seen,
                "step": None if rule is None else rule.step,
            }
        )
    return rows
