"""A review as tables, one a file: everything the page shows is in them."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable
from typing import Any

import pandas as pd

from miner.columns import JOINER
from miner.review.records import Evidence, NewRule, Review, RuleReview, Span

SPANS = ("triggers", "hits", "expected_hits", "precision", "low", "high")


def tables(review: Review) -> dict[str, pd.DataFrame]:
    """Every table by the name of its file, empty ones with their columns."""
    inputs = review.inputs
    return {
        "rules": _frame((rule_row(rule) for rule in review.rules), RULE_COLUMNS),
        "quarters": _frame(
            ({"rule": rule.id, **vars(line)}
             for rule in review.rules for line in rule.quarters),
            ["rule", "quarter", "triggers", "hits", "expected_hits", "precision", "e_works",
             "e_broken", "source"],
        ),
        "evidence": _frame(
            ({"rule": rule.id, **vars(point)}
             for rule in review.rules for point in rule.evidence),
            ["rule", "date", "quarter", "triggers", "e_works", "e_broken"],
        ),
        "triggers": _frame(
            ({"rule": rule.id, **trigger._asdict()}
             for rule in review.rules for trigger in rule.triggers),
            ["rule", "quarter", "entity", "session", "close", "hit", "expected", "peer"],
        ),
        "revisions": _frame(
            ({"rule": rule.id, **vars(revision)}
             for rule in review.rules for revision in rule.revisions),
            ["rule", "quarter", "appeared", "vanished", "changed", "rates"],
        ),
        "new_rules": _frame(
            ({**vars(rule), "combination": JOINER.join(rule.combination)}
             for rule in (() if review.hunt is None else review.hunt.rules)),
            [field.name for field in dataclasses.fields(NewRule)],
        ).drop(columns="name"),
        "inputs": _frame(
            ({**{k: v for k, v in vars(row).items() if k != "hour_spread"},
              "hour_low": None if row.hour_spread is None else row.hour_spread[0],
              "hour_high": None if row.hour_spread is None else row.hour_spread[1]}
             for row in inputs.types),
            ["type", "quarter", "alerts", "covered", "entities_with", "rate", "hour", "hour_low",
             "hour_high", "hour_shift", "companion", "companion_share", "companion_before"],
        ),
        "input_changes": _frame(
            (vars(change) for change in inputs.changes),
            ["type", "kind", "since", "p_value", "p_adjusted", "ratio", "words"],
        ),
        "weekly": _frame(
            ({"type": one.type, "week": week, "alerts": n}
             for one in inputs.weekly for week, n in zip(inputs.weeks, one.alerts, strict=True)),
            ["type", "week", "alerts"],
        ),
        "entities": _frame(
            (vars(entity) for entity in inputs.entities),
            ["entity", "change", "date", "basis", "alerts"],
        ),
        "workload": _frame(
            (vars(row) for row in review.workload),
            ["quarter", "rules", "triggers", "calls", "hits", "expected_hits"],
        ),
        "warnings": _frame(({"warning": text} for text in review.warnings), ["warning"]),
    }  # fmt: skip


RULE_COLUMNS = [
    "rule", "combination", "target", "stratum", "status_before", "proposed", "status_after",
    "settled",
    "reasons", "adopted", "promise", "keep_above",
    *(f"{stretch}_{key}" for stretch in ("quarter", "year", "since") for key in SPANS),
    *(f"{kind}_{key}" for kind in ("works", "broken")
      for key in ("e", "e_highest", "highest_quarter", "e_since", "e_restarted",
                  "restarted_quarter", "in_book", "least_alpha")),
    "clusters", "in_evidence", "waiting", "alerts_changed",
]  # fmt: skip


def rule_row(rule: RuleReview) -> dict[str, Any]:
    """A rule's line in ``rules.csv``."""
    row: dict[str, Any] = {
        "rule": rule.id,
        "combination": rule.name,
        "target": rule.target,
        "stratum": rule.stratum,
        "status_before": rule.status_before,
        "proposed": rule.status,
        "status_after": rule.status_after,
        "settled": rule.settled,
        "reasons": "; ".join(rule.reasons),
        "adopted": rule.adopted,
        "promise": rule.promise,
        "keep_above": rule.keep_above,
        "clusters": rule.clusters,
        "in_evidence": rule.in_evidence,
        "waiting": rule.waiting,
        "alerts_changed": "; ".join(rule.marks),
    }
    for name, span in (
        ("quarter", rule.this_quarter), ("year", rule.last_year), ("since", rule.since),
    ):  # fmt: skip
        row |= _spread(name, span)
    for name, evidence in (("works", rule.works), ("broken", rule.broken)):
        row |= _spread(name, evidence)
    return row


def _spread(name: str, part: Span | Evidence | None) -> dict[str, Any]:
    if part is None:
        return {}
    return {f"{name}_{key}": value for key, value in vars(part).items()}


def _frame(rows: Iterable[dict[str, Any]], columns: list[str]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=columns)
