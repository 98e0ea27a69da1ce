"""The quarterly review: a rule book against what happened since, and what the ledger remembers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path

from miner.assemble import assemble
from miner.errors import SettingsError, explain
from miner.ledger import Item, Turn, has_ledger, login_name, open_ledger
from miner.ledger.kinds import check_text
from miner.ledger.making import hunt_item
from miner.review import folder as review_folder
from miner.review.drafting import draft_of, in_book
from miner.review.entries import decided, reviewed
from miner.review.fitting import check_fits
from miner.review.history import KINDS, History, quarter_name, read_history
from miner.review.looking import Seen, look
from miner.review.new_rules import put_to_test
from miner.review.quarters import quarter_to_review
from miner.review.records import ListedRule, Review, RuleReview, Trigger, Workload
from miner.review.remarks import remarks
from miner.review.settling import settled
from miner.rule_book import read_rule_book, write_rule_book
from miner.settings import Study, load_study, redact_url
from miner.workers import Progress, n_default, silent

BEFORE = ("rule", "hypothesis", "decision")  # what looking needs to know


def review(
    book: str | Path,
    study: Study | str | Path,
    quarter: str,
    ledger: str | Path,
    output: str | Path | None = None,
    *,
    accept: bool = False,
    dry_run: bool = False,
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
    dry_run : enter nothing in the ledger, which need not be there
    who, why : who does this, by default the login name, and the reason
    with_hunt : hunt the window that ends with the quarter, too

    Raises
    ------
    InputError : the settings, a table, the book or the ledger cannot be used, or an entry of the
        ledger is not as it was written
    """
    if accept and dry_run:
        rule, found = "be either accepted or a dry run", "both"
        raise SettingsError(explain("review", "proposals", rule, found))
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
    check_fits(inputs.panel, rule_book, inputs.study.name)
    if dry_run:
        history = past(ledger, chosen.name)
        seen = look(inputs, rule_book, chosen, history, with_hunt, n_workers, progress)
        result = replace(
            conclude(seen, history, desk, accept=False)[0], unrecorded="a dry run: nothing recorded"
        )
    else:
        with open_ledger(ledger) as opened:
            known = read_history(opened.entries(kinds=BEFORE), chosen.name)
            seen = look(inputs, rule_book, chosen, known, with_hunt, n_workers, progress)
            progress("weighing")
            with opened.exclusive() as turn:
                turn.verify().raise_if_broken(opened.label)
                result = recorded(seen, turn, desk, accept)
    if output is not None:
        progress("writing")
        review_folder.write(result, Path(output), replace_output)
    return result


def past(ledger: str | Path, quarter: str) -> History:
    """What a ledger says, none yet included.

    Raises
    ------
    LedgerError : an entry is not as it was written
    """
    if not has_ledger(ledger):
        return History()
    with open_ledger(ledger, read_only=True) as opened:
        opened.verify().raise_if_broken(opened.label)
        return read_history(opened.entries(kinds=KINDS), quarter)


@dataclass(frozen=True)
class Desk:
    """Whose review it is, and of which book and ledger."""

    book: Path
    ledger: str
    who: str
    why: str


def recorded(seen: Seen, turn: Turn, desk: Desk, accept: bool) -> Review:
    """Weigh and propose with the ledger held, and record it; with ``accept``, carry it out."""
    history = read_history(turn.entries(kinds=KINDS), seen.quarter.name)
    result, items = conclude(seen, history, desk, accept)
    entries = turn.append(items, who=desk.who, why=desk.why) if items else ()
    if accept:
        set_statuses(
            desk.book,
            {
                one.id: (one.status_before, one.status_after)
                for one in result.rules
                if one.status_after != one.status_before and not one.settled
            },
        )
    return replace(result, entries=(entries[0].number, entries[-1].number) if entries else None)


def conclude(
    seen: Seen, history: History, desk: Desk, accept: bool
) -> tuple[Review, Sequence[Item]]:
    """The review with what it would enter in the ledger."""
    settings = seen.inputs.study.review
    quarter = seen.quarter.name
    items: list[Item] = []
    drafts = []
    for rule, computed in zip(seen.rules, seen.closed, strict=True):
        draft, new = draft_of(seen, rule, computed, history)
        drafts.append(draft)
        items += new
    reviews = in_book([draft.review for draft in drafts], drafts, settings.alpha)
    now = {rule.id: rule.status for rule in read_rule_book(desk.book).rule}
    reviews = [
        settled(one, history.of(one.id), quarter, seen.status_now[one.id],
                now.get(one.id, seen.status_now[one.id]), accept)
        for one in reviews
    ]  # fmt: skip
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
    unrecorded = ""
    if seen.first_adopted is not None and quarter_name(seen.first_adopted) > quarter:
        unrecorded = f"no rule of the book was adopted yet (first: {seen.first_adopted})"
        items = []
    dates = seen.inputs.calendar.dates
    result = Review(
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
        warnings=tuple(remarks(seen, history, drafts, reviews, accept)),
        entries=None,
        is_accepted=accept,
        unrecorded=unrecorded,
    )
    return result, items


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
