"""Whether a study knows what the rules of a book are made of."""

from __future__ import annotations

from collections.abc import Iterable

from miner.columns import POOLED
from miner.errors import SettingsError, explain
from miner.panel import Panel
from miner.review.outcomes import is_known
from miner.rule_book import BookRule, RuleBook


def unknown_names(panel: Panel, rules: Iterable[BookRule]) -> dict[str, int]:
    """What a panel does not know, each in words ("target x"), with the number of rules it stops."""
    strata = {POOLED, *(() if panel.strata is None else panel.strata.names)}
    found: dict[str, int] = {}
    for rule in rules:
        for kind, name, known in (
            ("target", rule.target, panel.events),
            *(("alert type", kind, panel.type_names) for kind in rule.combination),
            ("stratum", rule.stratum, strata),
        ):
            if name not in known:
                found[f'{kind} "{name}"'] = found.get(f'{kind} "{name}"', 0) + 1
    return found


def check_fits(panel: Panel, book: RuleBook, study: str) -> None:
    """Refuse a study that none of a book's rules fits.

    Raises
    ------
    SettingsError : there are rules, and it knows the target, the types and the stratum of none
    """
    if not book.rule or any(is_known(panel, rule) for rule in book.rule):
        return
    names = ", ".join(unknown_names(panel, book.rule))
    rule = "know the target, the alert types and the stratum of at least one rule of the book"
    raise SettingsError(
        explain("study", study, rule, f"none; it does not know {names}", "Is it the book's study?")
    )
