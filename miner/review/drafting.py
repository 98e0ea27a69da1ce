"""One rule's review: its triggers with the ledger's, weighed, and what to do about it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from miner.ledger import Item
from miner.review.entries import taken_up
from miner.review.evidence import Ground, Terms, Weighed, weigh
from miner.review.history import (
    History,
    adoption,
    merged,
    outcome_item,
    quarter_name,
    quarters_between,
    start_of,
)
from miner.review.looking import Seen
from miner.review.outcomes import wait_of
from miner.review.proposals import propose
from miner.review.quarters import last_day, quarters_of, session_on
from miner.review.records import Evidence, RuleReview, Trigger
from miner.rule_book import BookRule
from miner.sequential.ebh import e_bh, e_bh_adjusted

ALONE = (
    "would not stand once all rules of the book are looked at at once (e-BH): one of many may get "
    "so far by bad luck"
)


@dataclass(frozen=True)
class Draft:
    """A rule's review before the whole book is looked at; ``weighed`` None before adoption."""

    review: RuleReview
    weighed: Weighed | None
    adopted: str
    marks_now: tuple[str, ...]


def draft_of(
    seen: Seen, rule: BookRule, computed: Mapping[str, list[Trigger]], history: History
) -> tuple[Draft, list[Item]]:
    """A rule's review, and the entries for what the ledger does not hold of it yet."""
    settings, quarter = seen.inputs.study.review, seen.quarter.name
    mine = history.of(rule.id)
    adopted = adoption(rule, seen.book, mine, start_of(quarter))
    computed = _whole_quarters(seen, computed, adopted)
    since = quarters_between(quarter_name(adopted), quarter)
    names = [name for name in since if name in computed or name in mine.on_record]
    items = list(taken_up(rule, adopted, quarter, mine))
    marks_now = tuple(_marks_now(seen, rule))
    marks = (*marks_now, *_marks_before(mine.reviews, names[:-1], marks_now))
    promise = rule.precision
    keep_above = None if not promise else _least(rule, promise) * settings.keep_share
    if not names:
        early = _not_yet(rule, adopted, promise, keep_above, marks)
        return Draft(early, None, adopted, marks_now), items
    triggers, revisions = merged(mine, computed, names, adopted)
    is_old = {name: name in mine.on_record for name in names}
    items += [
        outcome_item(rule.id, trigger)
        for name in names
        if not is_old[name]
        for trigger in triggers[name]
    ]
    weighed = weigh(
        triggers,
        {name: "ledger" if is_old[name] else "now" for name in names},
        _ground(seen, rule, triggers, names),
        Terms(keep_above, rule.expected, settings.alpha, settings.restart_quarters,
              settings.hang_together),
    )  # fmt: skip
    status, reasons = propose(weighed, settings, keep_above, marks, revisions)
    review = RuleReview(
        **_said(rule, adopted, promise, keep_above, marks),
        this_quarter=weighed.this_quarter,
        last_year=weighed.last_year,
        since=weighed.since,
        works=weighed.works,
        broken=weighed.broken,
        clusters=weighed.clusters,
        in_evidence=weighed.in_evidence,
        waiting=weighed.waiting,
        status=status,
        reasons=reasons,
        quarters=weighed.lines,
        evidence=weighed.points,
        triggers=tuple(t for name in names for t in triggers[name]),
        revisions=tuple(revisions),
    )
    return Draft(review, weighed, adopted, marks_now), items


def _whole_quarters(
    seen: Seen, computed: Mapping[str, list[Trigger]], adopted: str
) -> dict[str, list[Trigger]]:
    """Without an earlier quarter in which the study's calendar begins, where the rule is older:
    what it did before that quarter's first session cannot be seen."""
    dates = seen.inputs.calendar.dates
    begin = str(dates[0])
    is_cut = adopted < begin and begin != start_of(quarter_name(begin))
    return {
        name: mine
        for name, mine in computed.items()
        if not (is_cut and name == quarter_name(begin)) or name == seen.quarter.name
    }


def _said(
    rule: BookRule,
    adopted: str,
    promise: float | None,
    keep_above: float | None,
    marks: tuple[str, ...],
) -> dict[str, Any]:
    return {
        "id": rule.id,
        "name": rule.name,
        "target": rule.target,
        "stratum": rule.stratum,
        "combination": tuple(rule.combination),
        "lookback": rule.lookback,
        "horizon": rule.horizon,
        "status_before": rule.status,
        "status_after": rule.status,
        "note": rule.note,
        "adopted": adopted,
        "promise": promise,
        "keep_above": keep_above,
        "expected_then": rule.expected,
        "marks": marks,
    }


def _least(rule: BookRule, promise: float) -> float:
    """The precision to hold a rule to: its promise, less where hardly a trigger missed.

    No more than (hits + 1) / (triggers + 2) of its holdout (Laplace's rule of succession): a
    promise of 100 % from twenty triggers should not be broken by the first miss.
    """
    if rule.holdout is None:
        return promise
    return min(promise, (rule.holdout.hits + 1) / (rule.holdout.triggers + 2))


def _not_yet(
    rule: BookRule,
    adopted: str,
    promise: float | None,
    keep_above: float | None,
    marks: tuple[str, ...],
) -> RuleReview:
    none = Evidence(1.0, 1.0, None, 1.0, 1.0, None, False, 1.0)
    reason = f"its triggers count from {adopted} on, after this quarter"
    return RuleReview(
        **_said(rule, adopted, promise, keep_above, marks),
        this_quarter=None,
        last_year=None,
        since=None,
        works=none,
        broken=None if keep_above is None else none,
        clusters=0,
        in_evidence=0,
        waiting=0,
        status="too early",
        reasons=(reason, *(f"alerts changed: {mark}" for mark in marks)),
        quarters=(),
        evidence=(),
        triggers=(),
        revisions=(),
    )


def _ground(
    seen: Seen,
    rule: BookRule,
    triggers: Mapping[str, list[Trigger]],
    names: Sequence[str],
) -> Ground:
    dates = seen.inputs.calendar.dates
    here = {q.name: q.last for q in quarters_of(dates)}
    last = {
        name: here[name] if name in here else session_on(dates, str(last_day(name)))
        for name in names
    }
    days = {t.session for mine in triggers.values() for t in mine}
    wait = rule.horizon + wait_of(seen.inputs.panel, rule.target, seen.inputs.study.review.settle)
    return Ground({day: session_on(dates, day) for day in days}, last, dates, rule.horizon, wait)


def _marks_now(seen: Seen, rule: BookRule) -> Iterator[str]:
    """How alerts of a rule changed."""
    yield from (change.words for change in seen.moved.changes if change.type in rule.combination)
    for kind in rule.combination:
        if kind not in seen.inputs.panel.type_names:
            yield f"{kind} is not in the log"


def _marks_before(
    reviews: Mapping[str, Mapping[str, Any]], names: Sequence[str], marks_now: Sequence[str]
) -> Iterator[str]:
    """What earlier reviews since the rule's adoption said of its alerts."""
    told = set(marks_now)
    for name in names:
        for words in reviews.get(name, {}).get("marks_now", ()):
            if words not in told:
                told.add(words)
                yield f"{words} (seen in {name})"


def in_book(
    reviews: Sequence[RuleReview], drafts: Sequence[Draft], alpha: float
) -> list[RuleReview]:
    """The reviews with what e-BH over the whole book says of each piece of evidence."""
    works: dict[str, Evidence] = {}
    broken: dict[str, Evidence] = {}
    for found, part in (
        (works, [(d.review.id, d.review.works, d.weighed.log_works)
                 for d in drafts if d.weighed is not None]),
        (broken, [(d.review.id, d.review.broken, d.weighed.log_broken)
                  for d in drafts if d.weighed is not None and d.review.broken is not None]),
    ):  # fmt: skip
        if not part:
            continue
        log_e = np.array([log for _, _, log in part], dtype=float)
        stands, least = e_bh(log_e, alpha=alpha), e_bh_adjusted(log_e)
        for (rule, evidence, _), is_in, level in zip(part, stands, least, strict=True):
            if evidence is not None:
                found[rule] = replace(evidence, in_book=bool(is_in), least_alpha=float(level))
    return [
        _told_alone(
            replace(one, works=works.get(one.id, one.works), broken=broken.get(one.id, one.broken))
        )
        for one in reviews
    ]


def _told_alone(one: RuleReview) -> RuleReview:
    """With a reason more where a retirement is the single rule's, not the whole book's."""
    if one.status != "retire" or one.broken is None or one.broken.in_book:
        return one
    return replace(one, reasons=(*one.reasons, ALONE))
