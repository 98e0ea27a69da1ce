"""What a reader of a review has to be told besides its numbers."""

from __future__ import annotations

from collections.abc import Sequence

from miner.review.drafting import Draft
from miner.review.fitting import unknown_names
from miner.review.history import History, quarter_name
from miner.review.looking import Seen
from miner.review.records import RuleReview


def remarks(
    seen: Seen,
    history: History,
    drafts: Sequence[Draft],
    reviews: Sequence[RuleReview],
    accept: bool,
) -> list[str]:
    """Warnings of the study, and what a rule's past, its words or its tests leave open."""
    found = list(seen.inputs.study.warnings)
    settings = seen.inputs.study.review
    for name, count in unknown_names(seen.inputs.panel, seen.rules).items():
        rules = "a rule of the book has" if count == 1 else f"{count} rules of the book have"
        found.append(
            f"the study does not know the {name} by the quarter's end: {rules} no triggers."
        )
    if accept:
        found += [
            f"{one.name} ({one.stratum}) is proposed to {one.status} but was {one.settled}."
            for one in reviews
            if one.settled.startswith("decided on")
        ]
        if history.last_reviewed > seen.quarter.name:
            found.append(
                f"{history.last_reviewed} was reviewed already: what is accepted here rests on an "
                "older quarter."
            )
    for rule, draft in zip(seen.rules, drafts, strict=True):
        mine = history.of(rule.id)
        if rule.run is None and mine.adopted is None:
            found.append(
                f"{rule.name} ({rule.stratum}) was written by hand: its triggers count from "
                f"{draft.adopted} on. If it was written with that quarter's data in view, they "
                "are no test of it."
            )
        if mine.said is not None and mine.said.get("promise") != rule.precision:
            found.append(
                f"{rule.name} ({rule.stratum}): the book promises {rule.precision}, the ledger "
                f"says {mine.said.get('promise')}. Evidence is against the book's promise: one "
                "that is changed after its triggers are seen is not tested by them."
            )
        seen_from = draft.review.quarters[0].quarter if draft.review.quarters else None
        if seen_from is not None and seen_from > quarter_name(draft.adopted):
            found.append(
                f"{rule.name} ({rule.stratum}): adopted on {draft.adopted}, but what closed before "
                f"{seen_from} is neither in the study's sessions nor in the ledger."
            )
        if draft.weighed is not None and draft.weighed.since.triggers:
            begin = str(seen.inputs.calendar.dates[0])
            if draft.review.triggers[0].session < begin:
                found.append(
                    f"{rule.name} ({rule.stratum}): the ledger holds triggers from before the "
                    f"study's first session, {begin}; they are placed by weekdays."
                )
    if seen.found is not None and seen.found.not_looked_for:
        n = len(seen.found.not_looked_for)
        found.append(
            f"{n} rule{'s' * (n != 1)} of the book have other windows or another target than the "
            "study's: the hunt did not look for them."
        )
    others = {p for p in history.procedures if p != settings.procedure}
    if others:
        found.append(
            f"the ledger holds tests by {', '.join(sorted(others))}; levels of "
            f"{settings.procedure} are only right for a history of its own."
        )
    return found
