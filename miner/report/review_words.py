"""A review's numbers and verdicts as people read them."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from miner.report.words import NOTHING, count, listed, some

Row = dict[str, Any]

URGENCY = ("retire", "watch", "too early", "keep")
HANGING = {
    "peers": "same peer group, within one horizon",
    "dates": "any entities, within one horizon",
    "entity": "same entity, within one horizon",
    "quarter": "same quarter",
}
BOOK_STATUS = {"retire": "retired", "watch": "watch", "keep": "live"}


def evidence_text(e: float | None) -> str:
    """Evidence with no more digits than it deserves."""
    if e is None:
        return NOTHING
    if e >= 1000:
        return "over 1,000"
    if 0 < e < 1e-3:
        mantissa, power = f"{e:.0e}".split("e")
        return f"{mantissa}e{int(power)}"
    return f"{e:.0f}" if e >= 10 else f"{e:.2g}"


def lead_words(review: Row) -> str:
    """The review in a sentence."""
    if not review["rules"]:
        return "The book holds no rule to review."
    n, counts = len(review["rules"]), review["counts"]
    parts = [
        f"{'too early to say for' if status == 'too early' else status} {count(counts[status])}"
        for status in URGENCY
        if counts.get(status)
    ]
    return f"Of {some(n, 'rule')} reviewed: {listed(parts)}."


def quiet_words(review: Row) -> str | None:
    """That nothing calls for a decision; None where something does."""
    hunt = review["hunt"]
    if (
        any(rule["status"] in ("retire", "watch") or rule["marks"] for rule in review["rules"])
        or any(rule["fate"] == "new" for rule in (hunt["rules"] if hunt else []))
        or review["inputs"]["changes"]
    ):
        return None
    parts = ["no promise is in doubt", "no input moved", *(["no new rule turned up"] * bool(hunt))]
    return f"Nothing calls for a decision: {listed(parts)}."


def distrust(review: Row) -> Iterator[str]:
    """What to be wary of besides the warnings, a sentence each."""
    few = sum(bool(rule["last_year"] and rule["last_year"]["is_few"]) for rule in review["rules"])
    if few:
        yield (
            f"{some(few, 'rule')} with triggers in fewer than ten clusters over the last year: do "
            "not lean on those intervals."
        )
    waiting = sum(rule["waiting"] for rule in review["rules"])
    if waiting:
        yield (
            f"{some(waiting, 'trigger')} closed so late that others could still join them: counted "
            "in precision, not in the evidence yet."
        )
    retired = [rule["broken"] for rule in review["rules"] if rule["status"] == "retire"]
    alone = sum(bool(one) and not one["in_book"] for one in retired)
    if alone:
        yield (
            f"Of the rules to retire, {count(alone)} would not stand once all rules of the book "
            "are looked at at once (e-BH): one of many may get so far by bad luck."
        )
