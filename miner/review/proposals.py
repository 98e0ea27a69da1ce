"""What to do about a rule, from its numbers, with reasons in words."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from miner.review.evidence import Weighed
from miner.review.records import Revision, Span, Status
from miner.settings import ReviewSettings

BOOK_STATUS: dict[Status, str] = {"retire": "retired", "watch": "watch", "keep": "live"}


def propose(
    weighed: Weighed,
    settings: ReviewSettings,
    keep_above: float | None,
    marks: Sequence[str],
    revisions: Sequence[Revision],
) -> tuple[Status, tuple[str, ...]]:
    """The proposal for a rule with its reasons, the deciding one first.

    ``keep_above`` is what its precision must not be below, None without a promise.
    """
    retire_at = 1 / settings.alpha
    since, broken = weighed.since, weighed.broken
    e = 0.0 if broken is None else broken.e
    has_no_lift = does_not_beat(weighed.last_year)
    reasons = []
    status: Status
    if since.triggers < settings.min_triggers:
        status = "too early"
        reasons.append(
            f"{_n(since.triggers, 'trigger')} since adoption, fewer than {settings.min_triggers}"
        )
    elif e >= retire_at:
        status = "retire"
    elif e >= settings.watch_at or has_no_lift:
        status = "watch"
    else:
        status = "keep"
    if broken is not None and keep_above is not None:
        if e >= settings.watch_at:
            what = "the promise is broken" if e >= retire_at else "the promise is in doubt"
            reasons.append(
                f"{what}: evidence {number(e)} that precision is below {percent(keep_above)} "
                f"(watch at {settings.watch_at:g}, retire at {retire_at:g})"
            )
        elif broken.e_highest >= retire_at:
            reasons.append(
                f"evidence that the promise is broken had reached {number(broken.e_highest)} by "
                f"{broken.highest_quarter} and is {number(e)} now"
            )
    if has_no_lift and status != "too early":
        reasons.append(_no_lift(weighed.last_year))
    if status == "keep":
        reasons.insert(0, _kept(weighed, keep_above))
    if broken is None:
        reasons.append("the book promises no precision, so that no promise could be tested")
    reasons += [f"alerts changed: {mark}" for mark in marks]
    reasons += [revision_words(revision) for revision in revisions]
    return status, tuple(reasons)


def does_not_beat(span: Span) -> bool:
    """Whether a stretch's interval covers the expected rate, or lies below it."""
    if not span.triggers or span.low is None:
        return False
    return span.low <= span.expected_hits / span.triggers


def _kept(weighed: Weighed, keep_above: float | None) -> str:
    since = weighed.since
    expected = since.expected_hits / since.triggers
    text = (
        f"{since.hits} of {since.triggers} triggers hit since adoption "
        f"({percent(since.precision or 0.0)}, {percent(expected)} expected)"
    )
    if keep_above is not None and weighed.broken is not None:
        text += (
            f"; evidence {number(weighed.broken.e)} that precision is below {percent(keep_above)}"
        )
    return text


def _no_lift(year: Span) -> str:
    low, high = percent(year.low or 0.0), percent(year.high or 0.0)
    expected = percent(year.expected_hits / year.triggers)
    stretch = (
        year.last_quarter
        if year.first_quarter == year.last_quarter
        else f"{year.first_quarter} to {year.last_quarter}"
    )
    is_below = (year.high or 0.0) < year.expected_hits / year.triggers
    verdict = "worse than" if is_below else "not yet shown to be better than"
    return (
        f"{year.hits} of {year.triggers} triggers hit in {stretch}, interval {low} to {high}: "
        f"{verdict} the {expected} expected"
    )


def revision_words(revision: Revision) -> str:
    """How a quarter's log was revised, in words."""
    parts = list(_revised(revision))
    return (
        f"the log was revised: {revision.quarter} now has {', '.join(parts)}; the ledger's record "
        "stands"
    )


def _revised(revision: Revision) -> Iterator[str]:
    if revision.appeared:
        yield f"{_n(revision.appeared, 'trigger')} more"
    if revision.vanished:
        yield f"{_n(revision.vanished, 'trigger')} less"
    if revision.changed:
        yield f"another outcome of {_n(revision.changed, 'trigger')}"
    if revision.rates:
        yield f"another expected rate of {_n(revision.rates, 'trigger')}"


def percent(share: float) -> str:
    """A share in words."""
    return f"{100 * share:.{0 if share >= 0.1 or share == 0 else 1}f}%"


def number(e: float) -> str:
    """Evidence in words: two digits are more than it deserves."""
    if e >= 1000:
        return "over 1,000"
    return f"{e:.0f}" if e >= 10 else f"{e:.1f}" if e >= 0.1 else f"{e:.0e}" if e else "0"


def _n(count: int, thing: str) -> str:
    return f"{count} {thing}" + ("" if count == 1 else "s")
