"""What a review computes from the inputs, before the ledger is held: the part that takes time."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from miner.assemble import Inputs
from miner.review.cutting import cut_inputs
from miner.review.history import (
    PLACES,
    History,
    adoption,
    quarter_name,
    start_of,
)
from miner.review.moved_inputs import moved_inputs
from miner.review.new_rules import Found, hunt_window
from miner.review.outcomes import Closed, closed_triggers
from miner.review.quarters import Quarter, quarters_of
from miner.review.records import MovedInputs, Trigger
from miner.review.settling import status_then
from miner.rule_book import BookRule, RuleBook
from miner.workers import Progress, silent

TESTED = ("candidate", "live", "watch")


@dataclass(frozen=True)
class Seen:
    """Everything a review computes from the inputs, before the ledger is asked.

    Attributes
    ----------
    inputs : cut at the quarter's end
    book : with the statuses from before the quarter's own decisions and later ones
    status_now : the book's statuses as they are
    first_adopted : the first date from which a rule of ``rules`` counts, None without rules
    closed : triggers of each rule of ``rules``, by quarter, of ``quarters``
    """

    inputs: Inputs
    book: RuleBook
    status_now: Mapping[str, str]
    first_adopted: str | None
    rules: tuple[BookRule, ...]
    quarter: Quarter
    quarters: tuple[Quarter, ...]
    closed: tuple[dict[str, list[Trigger]], ...]
    found: Found | None
    moved: MovedInputs


def look(
    inputs: Inputs,
    book: RuleBook,
    quarter: Quarter,
    history: History,
    with_hunt: bool,
    n_workers: int,
    progress: Progress = silent,
) -> Seen:
    """Compute what takes time: outcomes since adoption, moved inputs, the window's hunt."""
    early = cut_inputs(inputs, quarter.last + 1)
    status_now = {rule.id: rule.status for rule in book.rule}
    book = _as_it_was(book, history, quarter.name)
    rules = book.rules_with(TESTED)
    begin = start_of(quarter.name)
    adopted = [adoption(rule, book, history.of(rule.id), begin) for rule in rules]
    first = min(adopted, default=begin)
    quarters = tuple(
        q
        for q in quarters_of(early.calendar.dates)
        if q.name >= min(quarter_name(first), quarter.name)
    )
    closed = closed_triggers(
        early.panel,
        rules,
        quarters,
        settle=inputs.study.review.settle,
        n_workers=n_workers,
        progress=progress,
    )
    named = tuple(_named(early, one, quarters) for one in closed)
    progress("inputs that moved")
    moved = moved_inputs(early, quarter)
    found = None
    if with_hunt and quarter_name(first) <= quarter.name:
        found = hunt_window(early, book, n_workers=n_workers, progress=progress)
    return Seen(
        early, book, status_now, min(adopted, default=None), rules, quarter, quarters, named,
        found, moved,
    )  # fmt: skip


def _as_it_was(book: RuleBook, history: History, quarter: str) -> RuleBook:
    """The book with the statuses from before what was decided on a quarter and on later ones."""
    rules = tuple(
        rule.model_copy(update={"status": status_then(history.of(rule.id), quarter, rule.status)})
        for rule in book.rule
    )
    return book.model_copy(update={"rule": rules})


def _named(inputs: Inputs, closed: Closed, quarters: Sequence[Quarter]) -> dict[str, list[Trigger]]:
    """Triggers as records, by quarter, every quarter there."""
    panel, dates = inputs.panel, inputs.calendar.dates.astype(str)
    found: dict[str, list[Trigger]] = {quarter.name: [] for quarter in quarters}
    for e, t, g, c, q, hit, rate in zip(
        closed.entity.tolist(),
        closed.session.tolist(),
        closed.peer.tolist(),
        closed.close.tolist(),
        closed.quarter.tolist(),
        closed.is_hit.tolist(),
        closed.rate.tolist(),
        strict=True,
    ):
        name = quarters[q].name
        found[name].append(
            Trigger(
                name, panel.entity_names[e], str(dates[t]), str(dates[c]), hit,
                round(min(max(rate, 0.0), 1.0), PLACES), panel.peers.names[g],
            )
        )  # fmt: skip
    return found
