"""What `miner review` prints: the book at a glance, then what to do. Formats; computes nothing."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator

from miner.columns import POOLED
from miner.review.proposals import BOOK_STATUS, number, percent
from miner.review.records import Review, RuleReview, Span

WIDTH = 100
LABEL = 14
WIDTHS = (10, 7, 9, 12, 9, 9, 8)
CAUTIONS = (
    "Research, not advice: past precision does not promise any to come. A proposal is a reason to "
    "look, not an order. Alerts ahead of corporate events can reflect leaked information: involve "
    "compliance before acting on a rule. Local rules and licensed practice come first."
)


def review_lines(review: Review) -> Iterator[str]:
    """One screen: the quarter, proposals, one entry a rule, new rules, moved inputs."""
    yield _wrapped(
        f"{review.book}, {review.quarter} ({review.first} to {review.last}): "
        f"{len(review.rules)} rule{'s' * (len(review.rules) != 1)} reviewed, "
        f"{len(review.retired)} retired earlier"
    )
    yield ""
    counts = [f"{n} {status}" for status, n in review.counts.items() if n]
    yield _entry("Proposed", ", ".join(counts) or "nothing")
    if review.is_accepted:
        yield _entry("Carried out", _carried_out(review))
    yield from _ledger_text(review)
    yield from _workload_text(review)
    if review.rules:
        yield ""
        yield (
            "Rules: hits of closed triggers this quarter and since adoption, share expected, and "
            "evidence"
        )
        yield (
            f"(e-values: above {review.watch_at:g} watch, from {1 / review.alpha:g} retire) that "
            "they still work and that their promise is broken"
        )
        yield _columns(
            "", ("quarter", "since", "share", "95% holds", "expected", "works", "broken")
        )
        for rule in review.rules:
            yield from _rule_text(rule)
    yield from _hunt_text(review)
    yield from _inputs_text(review)
    if review.warnings:
        yield ""
        for warning in review.warnings:
            yield _wrapped(warning, "! ", "  ")
    yield ""
    yield textwrap.fill(CAUTIONS, WIDTH)


def _ledger_text(review: Review) -> Iterator[str]:
    if review.unrecorded:
        yield _entry("Ledger", review.unrecorded)
    elif review.entries is None:
        yield _entry("Ledger", f"nothing new: {review.ledger} had all of this already")
    else:
        first, last = review.entries
        count = last - first + 1
        yield _entry(
            "Ledger",
            f"{count:,} {'entry' if count == 1 else 'entries'} recorded in {review.ledger} "
            f"({first} to {last}); the first record of a quarter stands",
        )
    if not review.is_accepted:
        changed = [rule for rule in review.rules if rule.status in BOOK_STATUS and not rule.settled
                   and BOOK_STATUS[rule.status] != rule.status_before]  # fmt: skip
        if changed:
            names = ", ".join(f"{rule.id} {BOOK_STATUS[rule.status]}" for rule in changed)
            yield _entry("", f"--accept would set: {names}")


def _carried_out(review: Review) -> str:
    changed = [one for one in review.rules if one.status_after != one.status_before]
    done = [f"{one.id} {one.status_after}" for one in changed if not one.settled]
    if done:
        return ", ".join(done)
    stands = dict.fromkeys(one.settled for one in review.rules if one.settled)
    return ": ".join(["nothing to carry out", *(["; ".join(stands)] if stands else [])])


def _workload_text(review: Review) -> Iterator[str]:
    mine = [row for row in review.workload if row.quarter == review.quarter]
    for row in mine:
        yield _entry(
            "Closed",
            f"{row.triggers:,} triggers of {row.rules} rules on {row.calls:,} calls; {row.hits:,} "
            f"hit, {row.expected_hits:.1f} expected if alerts said nothing",
        )


def _columns(label: str, cells: tuple[str, ...]) -> str:
    numbers = "".join(f"  {cell:>{w}}" for cell, w in zip(cells, WIDTHS, strict=True))
    return f"  {label:<10}{numbers}".rstrip()


def _rule_text(rule: RuleReview) -> Iterator[str]:
    where = "" if rule.stratum == POOLED else f" ({rule.stratum})"
    yield _wrapped(
        f"{rule.id}  {rule.name} -> {rule.target}{where}, {rule.status_before}", "", "    "
    )
    since = rule.since
    if since is None or rule.this_quarter is None:
        yield _columns(rule.status, ("-",) * len(WIDTHS))
    else:
        expected = percent(since.expected_hits / since.triggers) if since.triggers else "-"
        yield _columns(
            rule.status,
            (
                f"{rule.this_quarter.hits} of {rule.this_quarter.triggers}",
                f"{since.hits} of {since.triggers}",
                _share(since.precision),
                _interval(since),
                expected,
                _evidence(rule.works.e),
                "-" if rule.broken is None else _evidence(rule.broken.e),
            ),
        )
    indent = " " * 14
    promise = "" if rule.promise is None else f"promise {percent(rule.promise)}; "
    told = [*rule.reasons, *([rule.settled] if rule.settled else [])]
    yield _wrapped(promise + "; ".join(told), indent, indent)


def _share(share: float | None) -> str:
    return "-" if share is None else percent(share)


def _evidence(e: float) -> str:
    return number(e).replace("over ", ">")


def _interval(span: Span) -> str:
    if span.low is None or span.high is None:
        return "-"
    return f"{percent(span.low)} to {percent(span.high)}"


def _hunt_text(review: Review) -> Iterator[str]:
    hunt = review.hunt
    if hunt is None:
        return
    yield ""
    by_fate = {fate: [r for r in hunt.rules if r.fate == fate]
               for fate in ("new", "persisting", "explained", "gone")}  # fmt: skip
    yield _entry(
        "Hunt again",
        f"{hunt.first} to {hunt.last}, held out from {hunt.holdout_first}: "
        + ", ".join(f"{len(rules)} {fate}" for fate, rules in by_fate.items())
        + f"; {hunt.tests_so_far} new rules tested so far over all reviews, {hunt.found_so_far} "
        f"taken ({hunt.procedure} at {percent(hunt.alpha)})",
    )
    for fate in ("new", "explained", "gone"):
        for rule in by_fate[fate]:
            held = (
                ""
                if not rule.holdout_triggers
                else f", holdout {rule.holdout_hits} of {rule.holdout_triggers}"
            )
            mark = "+" if rule.is_rejected else {"new": "?", "explained": "=", "gone": "-"}[fate]
            yield _wrapped(
                f"{fate}: {rule.name} -> {rule.target} ({rule.stratum}){held}; {rule.reason}",
                f"  {mark} ", "    ",
            )  # fmt: skip


def _inputs_text(review: Review) -> Iterator[str]:
    inputs = review.inputs
    yield ""
    joined = sum(entity.change == "joined" for entity in inputs.entities)
    yield _entry(
        "Inputs",
        f"{len(inputs.changes)} changes of alert types ({inputs.types_tested} tested for a change "
        f"of level, any false alarm in {percent(inputs.false_alarm_rate)} of reviews); {joined} "
        f"entities joined, {len(inputs.entities) - joined} left",
    )
    for change in inputs.changes:
        yield _wrapped(change.words, "  ~ ", "    ")


def _entry(label: str, text: str) -> str:
    return _wrapped(text, f"{label:<{LABEL}}", " " * LABEL)


def _wrapped(text: str, first: str = "", rest: str = "") -> str:
    return textwrap.fill(_plain(text), WIDTH, initial_indent=first, subsequent_indent=rest)


def _plain(text: str) -> str:
    """Names come from tables: nothing in them may steer a terminal."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)
