"""Plays the four quarters after the demo's hunt: rule book, ledger, and a review of each."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from miner.columns import POOLED
from miner.demo.cast import Fate
from miner.demo.later import QUARTERS, LaterTruth, write_later
from miner.ledger import open_ledger
from miner.ledger.recording import items_of_run, record_new
from miner.review import Review, review
from miner.rule_book.making import make_rule_book
from miner.summary import WIDTH
from miner.workers import Progress, silent

BOOK, LEDGER = "rules.toml", "ledger.db"
WHO = "demo"
RETIRED, ABSENT = "retired", "-"
MARKED = "!"


@dataclass(frozen=True)
class Year:
    """The four quarters, played."""

    truth: LaterTruth
    reviews: tuple[Review, ...]


def play_quarters(
    folder: Path,
    seed: int,
    *,
    n_workers: int,
    progress: Progress = silent,
) -> Year:
    """Adopt the rules of the hunt in ``folder/run``, and review them quarter by quarter.

    Tables, book, ledger and reviews are in ``folder/later``. Every review's proposals are
    accepted; the last one also hunts the window that ends with it.

    Raises
    ------
    OSError
        When a file cannot be written.
    """
    progress("inventing four more quarters")
    truth = write_later(folder, seed)
    home = truth.study.parent
    book, ledger = home / BOOK, home / LEDGER
    for earlier in (book, ledger, ledger.with_name(f"{LEDGER}-journal")):
        earlier.unlink(missing_ok=True)
    run = folder / "run"
    make_rule_book(run, book, folder / "study.toml", replace=True, n_workers=n_workers)
    with open_ledger(ledger) as opened:
        record_new(opened, items_of_run(run, book), who=WHO, why="adopted after the hunt")
    reviews = [
        review(
            book, truth.study, quarter, ledger, home / f"review-{quarter}",
            accept=True, who=WHO, with_hunt=quarter == QUARTERS[-1], replace_output=True,
            n_workers=n_workers, progress=progress,
        )
        for quarter in QUARTERS
    ]  # fmt: skip
    return Year(truth, tuple(reviews))


def year_lines(year: Year) -> Iterator[str]:
    """What became of the planted rules beside what the reviews proposed."""
    yield textwrap.fill(
        "Four quarters later (folder later): a review of the rule book at the end of each, "
        "proposals accepted.",
        WIDTH,
    )
    yield f"  {'':<6}{''.join(f'{quarter:<12}' for quarter in QUARTERS)}".rstrip()
    for fate in year.truth.fates:
        told = proposals(year, fate)
        should, is_right = RIGHT[fate.name]
        where = "" if fate.stratum == POOLED else f" ({fate.stratum})"
        yield f"  {year.truth.combination(fate)}{where}: {fate.name}, so {should}"
        verdict = "as it should" if is_right(told) else "not as it should"
        if set(told) == {ABSENT}:
            verdict = "not in the book"
        yield f"  {'':<6}{''.join(f'{one:<12}' for one in told)}{verdict}"
    last = year.reviews[-1]
    told_last = ""
    if last.hunt is not None:
        told_last = (
            f" Hunting again up to the end of {last.quarter} found {_fates(last)}; of "
            f"{last.hunt.tests_so_far} new tested, {last.hunt.found_so_far} were taken for real."
        )
    yield textwrap.fill(
        f"{MARKED}: marked, since {year.truth.redefined} came more often from "
        f"{year.truth.redefined_from} on, whatever the precision. Of "
        f"{len(year.reviews[0].rules)} rules, {_count(year, 'retire')} were retired.{told_last}",
        WIDTH,
    )


def proposals(year: Year, fate: Fate) -> tuple[str, ...]:
    """What each review proposed for the rule of a fate; "retired" once it was retired."""
    name = year.truth.combination(fate)
    told: list[str] = []
    for one in year.reviews:
        found = [r for r in one.rules if (r.name, r.stratum) == (name, fate.stratum)]
        if found:
            told.append(found[0].status + (MARKED if found[0].marks else ""))
        else:
            was_retired = bool(told) and told[-1].startswith("retire")
            told.append(RETIRED if was_retired else ABSENT)
    return tuple(told)


def _is_kept(told: Sequence[str]) -> bool:
    return set(told) == {"keep"}


def _is_watched_then_retired(told: Sequence[str]) -> bool:
    return "retire" in told and "watch" in told[: told.index("retire")]


def _is_retired_soon(told: Sequence[str]) -> bool:
    return "retire" in told[:3]


def _is_marked(told: Sequence[str]) -> bool:
    """In the second quarter, in which the alert was redefined, and ever after."""
    return all(one.endswith(MARKED) or one == RETIRED for one in told[1:])


RIGHT: dict[str, tuple[str, Callable[[Sequence[str]], bool]]] = {
    "holds": ("to be kept", _is_kept),
    "decays slowly": ("to be watched, then retired", _is_watched_then_retired),
    "dies at once": ("to be retired soon", _is_retired_soon),
    "an alert is redefined": ("to be marked from the second quarter on", _is_marked),
}


def _count(year: Year, status: str) -> int:
    return sum(rule.status == status for one in year.reviews for rule in one.rules)


def _fates(last: Review) -> str:
    fates = [rule.fate for rule in last.hunt.rules] if last.hunt else []
    return ", ".join(f"{fates.count(f)} {f}" for f in ("new", "explained", "persisting", "gone"))
