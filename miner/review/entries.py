"""What a review enters in the ledger beyond outcomes, and whether the ledger has it already."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from miner.ledger import Item
from miner.ledger.making import rule_item
from miner.review.history import RuleHistory
from miner.review.records import RuleReview
from miner.rule_book import BookRule


def taken_up(rule: BookRule, adopted: str, quarter: str, mine: RuleHistory) -> Iterator[Item]:
    """A rule, where the ledger does not know it or knows another promise or adoption."""
    item = rule_item(rule, quarter=quarter)
    body = {**item.body, "adopted": adopted}
    said = mine.said
    keys = ("promise", "adopted")
    if said is None or any(said.get(key) != body[key] for key in keys):
        yield Item(item.kind, item.rule, item.quarter, body)


def reviewed(
    one: RuleReview, marks_now: Sequence[str], quarter: str, mine: RuleHistory
) -> Iterator[Item]:
    """A rule's review, where the latest one of the quarter does not say the same."""
    since = one.since
    if since is None:
        return
    has_bounds = since.low is not None and since.high is not None
    body: dict[str, Any] = {
        "proposed": one.status,
        "reasons": list(one.reasons),
        "e_works": one.works.e,
        "e_promise": None if one.broken is None else one.broken.e,
        "triggers": since.triggers,
        "hits": since.hits,
        "expected_hits": since.expected_hits,
        "interval": [since.low, since.high] if has_bounds else None,
        "adopted": one.adopted,
        "keep_above": one.keep_above,
        "marks_now": list(marks_now),
        "looked_at": [line.quarter for line in one.quarters],
    }
    if not _says(mine.reviews.get(quarter), body):
        yield Item("review", one.id, quarter, body)


def decided(one: RuleReview, quarter: str) -> Iterator[Item]:
    """The new status of a rule, where it has one."""
    if one.status_after != one.status_before and not one.settled:
        body = {"before": one.status_before, "after": one.status_after, "proposed": one.status}
        yield Item("decision", one.id, quarter, body)


def _says(said: Mapping[str, Any] | None, body: Mapping[str, Any]) -> bool:
    return said is not None and all(said.get(key) == value for key, value in body.items())
