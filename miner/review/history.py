"""What a ledger already says of a book's rules: adoption, outcomes, tests; and what is new to it.

The first record of a (rule, quarter) stands. A quarter is on record when a review of the rule says
it was looked at, with or without triggers.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from miner.errors import SettingsError, explain
from miner.ledger import Entry, Item
from miner.review.quarters import last_day
from miner.review.records import Revision, Trigger
from miner.rule_book import BookRule, RuleBook
from miner.sequential.online import Tested

KINDS = ("hunt", "rule", "outcome", "review", "hypothesis", "decision")
SAME_RATE = 0.01
PLACES = 10  # decimals kept of a rate


@dataclass(frozen=True)
class Decision:
    """A status that a quarter's accepted review gave a rule; ``date`` is when it was entered."""

    quarter: str
    before: str
    after: str
    who: str
    date: str


@dataclass
class RuleHistory:
    """What the ledger says of one rule, up to a quarter; decisions of all quarters.

    Attributes
    ----------
    first_day : date of its first entry of any kind
    said : body of its latest "rule" entry
    adopted : date that an entry gives for its adoption, the first one
    on_record : quarters that were looked at
    outcomes : recorded triggers, by quarter
    reviews : latest review of each quarter
    decisions : in the order they were entered
    """

    first_day: str | None = None
    said: Mapping[str, Any] | None = None
    adopted: str | None = None
    on_record: set[str] = field(default_factory=set)
    outcomes: dict[str, list[Trigger]] = field(default_factory=dict)
    reviews: dict[str, Mapping[str, Any]] = field(default_factory=dict)
    decisions: list[Decision] = field(default_factory=list)


@dataclass
class History:
    """What the ledger says of all rules, and the online procedure's tests in their order.

    ``hunted``: quarters whose window was hunted; ``last_reviewed``: the latest quarter of a review.
    """

    rules: dict[str, RuleHistory] = field(default_factory=dict)
    tested: list[Tested] = field(default_factory=list)
    tested_rules: dict[str, Tested] = field(default_factory=dict)
    test_quarter: dict[str, str] = field(default_factory=dict)
    procedures: set[str] = field(default_factory=set)
    hunted: set[str] = field(default_factory=set)
    last_reviewed: str = ""

    def of(self, rule: str) -> RuleHistory:
        """One rule's, empty where the ledger does not know it."""
        return self.rules.get(rule) or RuleHistory()


def read_history(entries: Iterable[Entry], quarter: str) -> History:
    """Sort entries by rule; of outcomes and reviews only those of quarters up to ``quarter``.

    All tests count, whatever their quarter: what a later review spent is spent.
    """
    history = History()
    for entry in entries:
        if entry.kind == "hunt" and entry.quarter is not None:
            history.hunted.add(entry.quarter)
        if entry.rule is None or entry.kind not in KINDS:
            continue
        if entry.kind == "hypothesis":
            test = Tested(
                float(entry.body["p"]), float(entry.body["level"]), bool(entry.body["rejected"])
            )
            history.tested.append(test)
            history.procedures.add(entry.body["procedure"])
            history.tested_rules.setdefault(entry.rule, test)
            history.test_quarter.setdefault(entry.rule, entry.quarter or "")
            continue
        mine = history.rules.setdefault(entry.rule, RuleHistory())
        mine.first_day = mine.first_day or entry.stamp[:10]
        if entry.kind == "rule":
            mine.said = entry.body
            mine.adopted = mine.adopted or entry.body.get("adopted")
        if entry.kind == "decision":
            mine.decisions.append(
                Decision(entry.quarter or "", entry.body["before"], entry.body["after"],
                         entry.who, entry.stamp[:10])
            )  # fmt: skip
        if entry.kind == "review":
            history.last_reviewed = max(history.last_reviewed, entry.quarter or "")
        if entry.quarter is None or entry.quarter > quarter:
            continue
        if entry.kind == "outcome":
            mine.on_record.add(entry.quarter)
            mine.outcomes.setdefault(entry.quarter, []).append(trigger_of(entry))
        elif entry.kind == "review":
            mine.on_record |= {q for q in entry.body.get("looked_at", ()) if q <= quarter}
            mine.reviews[entry.quarter] = entry.body
    return history


def trigger_of(entry: Entry) -> Trigger:
    """A recorded trigger."""
    body = entry.body
    return Trigger(
        entry.quarter or "",
        body["entity"],
        body["session"],
        body["close"],
        body["hit"],
        float(body["expected"]),
        body.get("peer", ""),
    )


def outcome_item(rule: str, trigger: Trigger) -> Item:
    """A trigger as an entry to be."""
    body = {
        "entity": trigger.entity,
        "session": trigger.session,
        "close": trigger.close,
        "hit": trigger.hit,
        "expected": trigger.expected,
        "peer": trigger.peer,
    }
    return Item("outcome", rule, trigger.quarter, body)


def adoption(rule: BookRule, book: RuleBook, mine: RuleHistory, quarter_start: str) -> str:
    """The first date from which a rule's triggers count.

    The day after the holdout that its promise comes from; for a rule written by hand the date of
    its first entry in the ledger, and where it has none the quarter's first.

    Raises
    ------
    SettingsError : the book's date of a holdout is none
    """
    if rule.run is not None and rule.run in book.run:
        text = book.run[rule.run].holdout_to
        try:
            day = dt.date.fromisoformat(text)
        except ValueError:
            raise SettingsError(
                explain(
                    "rule book", f"run.{rule.run}.holdout_to", "be a date", f'"{text}"',
                    "Write it as 2025-06-30.",
                )
            ) from None  # fmt: skip
        return str(day + dt.timedelta(days=1))
    return mine.adopted or mine.first_day or quarter_start


def merged(
    mine: RuleHistory, computed: Mapping[str, list[Trigger]], quarters: Sequence[str], adopted: str
) -> tuple[dict[str, list[Trigger]], list[Revision]]:
    """Triggers since adoption by quarter, the ledger's where it has the quarter on record, and
    what is different in those now.

    Parameters
    ----------
    computed : triggers found now, by quarter; a quarter that is not there could not be computed
    quarters : names of the quarters since adoption
    """
    found: dict[str, list[Trigger]] = {}
    revisions = []
    for quarter in quarters:
        now = [t for t in computed.get(quarter, ()) if t.session >= adopted]
        if quarter not in mine.on_record:
            found[quarter] = now
            continue
        then = [t for t in mine.outcomes.get(quarter, ()) if t.session >= adopted]
        found[quarter] = then
        if quarter in computed:
            revision = compared(quarter, then, now)
            if revision is not None:
                revisions.append(revision)
    return found, revisions


def compared(quarter: str, then: Sequence[Trigger], now: Sequence[Trigger]) -> Revision | None:
    """How a quarter's triggers differ from those on record; None where they do not."""
    old = {(t.entity, t.session): t for t in then}
    new = {(t.entity, t.session): t for t in now}
    both = old.keys() & new.keys()
    revision = Revision(
        quarter,
        len(new.keys() - old.keys()),
        len(old.keys() - new.keys()),
        sum(old[key].hit != new[key].hit for key in both),
        sum(abs(old[key].expected - new[key].expected) > SAME_RATE for key in both),
    )
    has_any = revision.appeared or revision.vanished or revision.changed or revision.rates
    return revision if has_any else None


def start_of(quarter: str) -> str:
    """The first date of a quarter, as text."""
    return str(dt.date(int(quarter[:4]), 3 * int(quarter[5]) - 2, 1))


def quarters_between(first: str, last: str) -> list[str]:
    """Names of the quarters from one to another, both included; empty where the first is later."""
    names = []
    while first <= last:
        names.append(first)
        after = last_day(first) + dt.timedelta(days=1)
        first = f"{after.year}Q{(after.month + 2) // 3}"
    return names


def quarter_name(date: str) -> str:
    """The quarter a date lies in."""
    return f"{date[:4]}Q{(int(date[5:7]) + 2) // 3}"
