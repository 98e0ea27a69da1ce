"""Rules in plain words. Formats; computes no statistic."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from typing import Any

from .differences import BookDiff
from .records import STATUSES, BookRule, RuleBook

WIDTH = 96
CAUTIONS = (
    "Research, not advice: past precision does not promise any to come. Alerts ahead of corporate "
    "events can reflect leaked information: involve compliance before acting on a rule. Local "
    "rules and licensed practice come first."
)


def rule_words(rule: BookRule) -> Iterator[str]:
    """One rule as a few sentences, wrapped."""
    where = "" if rule.stratum == "all" else f" ({rule.stratum})"
    names = _listed(rule.combination)
    seen = f"{names} {'have all been' if len(rule.combination) > 1 else 'has been'} seen"
    text = (
        f"When {seen} on a name{where} within {_sessions(rule.lookback)}, look for "
        f'"{rule.target}" within the next {_sessions(rule.horizon)}.'
    )
    held = rule.holdout
    if held is not None and held.triggers and rule.precision is not None:
        text += f" It followed {_share(rule.precision)} of {held.triggers} later triggers"
        if rule.precision_low is not None and rule.precision_high is not None:
            text += f" ({_share(rule.precision_low)} to {_share(rule.precision_high)})"
        text += (
            f"; {_share(rule.expected)} was to be expected." if rule.expected is not None else "."
        )
    elif rule.discovery is not None:
        text += (
            f" It followed {rule.discovery.hits} of {rule.discovery.triggers} triggers it was "
            "found on; none came later to test it."
        )
    else:
        text += " No evidence: written by hand."
    if rule.lead is not None and rule.lead.hits:
        text += f" Half of the events came within {_sessions(rule.lead.median)} of the trigger."
    if rule.workload is not None:
        text += f" It calls {rule.workload.triggers_a_month:.2g} times a month."
    if rule.sharpens is not None:
        text += f" Sharpens {rule.sharpens}."
    if rule.verdict is not None:
        text += f" {rule.verdict.capitalize()}."
    yield from textwrap.wrap(text, WIDTH, break_long_words=False, break_on_hyphens=False)


def book_lines(book: RuleBook) -> Iterator[str]:
    """A whole book on the screen: how many rules of each status, then each in words."""
    counts = [f"{n} {status}" for status in STATUSES if (n := len(book.rules_with([status])))]
    yield f"{len(book.rule)} rules: {', '.join(counts) or 'none'}"
    for name, run in book.run.items():
        yield (
            f"run {name}: {run.study}, found to {run.discovery_to}, tested {run.holdout_from} to "
            f"{run.holdout_to}"
        )
    for rule in book.rule:
        yield ""
        yield f"{rule.id}  {rule.status}  {rule.name} -> {rule.target} ({rule.stratum})"
        yield from (f"  {line}" for line in rule_words(rule))
        if rule.note:
            yield from textwrap.wrap(
                f"Note: {rule.note}", WIDTH, initial_indent="  ", subsequent_indent="  "
            )
    yield ""
    yield from textwrap.wrap(CAUTIONS, WIDTH)


def diff_lines(diff: BookDiff) -> Iterator[str]:
    """What changed, one line a rule added or removed and one a value changed."""
    if diff.is_empty:
        yield "The two books hold the same rules."
        return
    for sign, rules in (("+", diff.added), ("-", diff.removed)):
        for rule in rules:
            yield f"{sign} {rule.id}  {rule.status}  {rule.name} -> {rule.target} ({rule.stratum})"
    last = None
    for rule, key, old, new in diff.changed:
        if rule.id != last:
            yield f"~ {rule.id}  {rule.name} -> {rule.target} ({rule.stratum})"
            last = rule.id
        yield f"    {key}: {_value(old)} -> {_value(new)}"


def _value(value: Any) -> str:
    if value is None:
        return "nothing"
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _sessions(n: float) -> str:
    return f"{n:g} session" + ("" if n == 1 else "s")


def _share(share: float) -> str:
    return f"{100 * share:.{0 if share >= 0.1 or share == 0 else 1}f}%"
