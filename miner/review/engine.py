"""The quarterly review: a rule book against what happened since, and what the ledger remembers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path

from miner.assemble import assemble
from miner.ledger import Item, Turn, login_name, open_ledger
from miner.ledger.kinds import check_text
from miner.ledger.making import hunt_item
from miner.review import folder as review_folder
from miner.review.drafting import draft_of, in_book
from miner.review.entries import decided, reviewed
from miner.review.history import KINDS, read_history
from miner.review.looking import Seen, look
from miner.review.new_rules import put_to_test
from miner.review.proposals import BOOK_STATUS
from miner.review.quarters import quarter_to_review
from miner.review.records import ListedRule, Review, RuleReview, Trigger, Workload
from miner.review.remarks import remarks
from miner.rule_book import read_rule_book, write_rule_book
from miner.settings import Study, load_study, redact_url
from miner.workers import Progress, n_default, silent


def review(
    book: str | Path,
    study: Study | str | Path,
    quarter: str,
    ledger: str | Path,
    output: str | Path | None = None,
    *,
    accept: bool = False,
    who: str | None = None,
    why: str = "quarterly review",
    with_hunt: bool = True,
    replace_output: bool = False,
    n_workers: int | None = None,
    progress: Progress = silent,
) -> Review:
    """Review the rules of a book at the end of a quarter, and record what was seen in the ledger.

    Nothing later than the quarter's last session is looked at. What the ledger already holds of a
    rule's quarter stands; reviewing a quarter again adds nothing to the evidence.

    Parameters
    ----------
    book : path of the rule book
    study : settings, or the path of a settings file
    quarter : calendar quarter, as "2025Q3"
    ledger : path of a SQLite file or a database URL; made if it is not there
    output : folder to write; it appears whole or not at all. None writes nothing
    accept : carry the proposals out: into the ledger and into the book's statuses
    who, why : who does this, by default the login name, and the reason
    with_hunt : hunt the window that ends with the quarter, too

    Raises
    ------
    InputError : the settings, a table, the book or the ledger cannot be used
    """
    book_path = Path(book)
    if output is not None:
        review_folder.check_free(Path(output), replace_output)
    rule_book = read_rule_book(book_path)
    if not isinstance(study, Study):
        study = load_study(study)
    n_workers = n_workers or n_default()
    desk = Desk(book_path, str(ledger), login_name() if who is None else who, why)
    check_text(desk.who, "review", "who")
    check_text(desk.why, "review", "why")
    inputs = assemble(study, progress)
    chosen = quarter_to_review(quarter, study, inputs.calendar)
    with open_ledger(ledger) as opened:
        seen = look(inputs, rule_book, chosen, opened, with_hunt, n_workers, progress)
        progress("weighing")
        with opened.exclusive() as turn:
            result = conclude(seen, turn, desk, accept)
    if output is not None:
        progress("writing")
        review_folder.write(result, Path(output), replace_output)
    return result


@dataclass(frozen=True)
class Desk:
    """Whose review it is, and of which book and ledger."""

    book: Path
    ledger: str
    who: str
    why: str


def conclude(seen: Seen, turn: Turn, desk: Desk, accept: bool) -> Review:
    """Weigh and propose with the ledger held, and record it; with ``accept``, carry it out."""
    settings = seen.inputs.study.review
    quarter = seen.quarter.name
    history = read_history(turn.entries(kinds=KINDS), quarter)
    items: list[Item] = []
    drafts = []
    for rule, computed in zip(seen.rules, seen.closed, strict=True):
        draft, new = draft_of(seen, rule, computed, history)
        drafts.append(draft)
        items += new
    reviews = in_book([draft.review for draft in drafts], drafts, settings.alpha)
    if accept:
        reviews = [
            replace(one, status_after=BOOK_STATUS.get(one.status, one.status_before))
            for one in reviews
        ]
    for one, draft in zip(reviews, drafts, strict=True):
        items += reviewed(one, draft.marks_now, quarter, history.of(one.id))
    hunt = None
    if seen.found is not None:
        hunt, tests = put_to_test(seen.found, history, settings, quarter)
        if tests or quarter not in history.hunted:
            items.append(hunt_item(seen.found.record, seen.found.ids, quarter))
        items += tests
    for one in reviews:
        items += decided(one, quarter)
    entries = turn.append(items, who=desk.who, why=desk.why) if items else ()
    if accept:
        changed = [one for one in reviews if one.status_after != one.status_before]
        set_statuses(desk.book, {o.id: (o.status_before, o.status_after) for o in changed})
    dates = seen.inputs.calendar.dates
    return Review(
        study=seen.inputs.study.name,
        book=desk.book.name,
        ledger=redact_url(desk.ledger),
        quarter=quarter,
        first=str(dates[seen.quarter.first]),
        last=str(dates[seen.quarter.last]),
        sessions=len(dates),
        program=version("combination-signal-miner"),
        who=desk.who,
        why=desk.why,
        alpha=settings.alpha,
        keep_share=settings.keep_share,
        watch_at=settings.watch_at,
        min_triggers=settings.min_triggers,
        restart_quarters=settings.restart_quarters,
        hang_together=settings.hang_together,
        counts={
            status: sum(one.status == status for one in reviews)
            for status in ("retire", "watch", "keep", "too early")
        },
        rules=tuple(reviews),
        retired=tuple(
            ListedRule(rule.id, rule.name, rule.target, rule.stratum, rule.note)
            for rule in seen.book.rules_with(["retired"])
        ),
        workload=tuple(workload(reviews)),
        hunt=hunt,
        inputs=seen.moved,
        warnings=tuple(remarks(seen, history, drafts)),
        entries=(entries[0].number, entries[-1].number) if entries else None,
        is_accepted=accept,
    )


def set_statuses(path: Path, changes: Mapping[str, tuple[str, str]]) -> None:
    """Give rules of a book new statuses, everything else as it stands in the file now.

    Parameters
    ----------
    changes : by rule, the status it had and the new one; a rule that has another by now keeps it

    Raises
    ------
    InputError : the book cannot be read or written
    """
    book = read_rule_book(path)
    rules = tuple(
        rule.model_copy(update={"status": changes[rule.id][1]})
        if rule.id in changes and rule.status == changes[rule.id][0]
        else rule
        for rule in book.rule
    )
    if rules != book.rule:
        write_rule_book(book.model_copy(update={"rule": rules}), path, replace=True)


def workload(reviews: Sequence[RuleReview]) -> list[Workload]:
    """The book's calls by quarter; a session on which several rules call one entity is one call."""
    triggers: dict[str, list[tuple[str, Trigger]]] = {}
    for one in reviews:
        for trigger in one.triggers:
            triggers.setdefault(trigger.quarter, []).append((one.id, trigger))
    return [
        Workload(
            quarter,
            len({rule for rule, _ in mine}),
            len(mine),
            len({(t.entity, t.session) for _, t in mine}),
            sum(t.hit for _, t in mine),
            sum(t.expected for _, t in mine),
        )
        for quarter, mine in sorted(triggers.items())
    ]
