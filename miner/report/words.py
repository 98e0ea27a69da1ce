"""Numbers and names as people read them. Knows no statistic."""

from __future__ import annotations

from datetime import date
from typing import Any

from markupsafe import Markup, escape

from miner.columns import JOINER

NOTHING = "–"

CAUTIONS = (
    "Research, not advice: past precision does not promise any to come. Alerts ahead of corporate "
    "events can reflect leaked information: involve compliance before acting on a rule. Local "
    "rules and licensed practice come first."
)


def percent(share: float | None) -> str:
    """A share as per cent, with more digits where it is small."""
    if share is None:
        return NOTHING
    digits = 0 if share >= 0.1 or share == 0 else 1 if share >= 0.01 else 2
    return f"{100 * share:.{digits}f}%"


def span(low: float | None, high: float | None) -> str:
    """An interval of shares."""
    return NOTHING if low is None or high is None else f"{percent(low)} to {percent(high)}"


def p_text(p: float | None) -> str:
    """A p-value to two digits; below 1e-300 only that is known."""
    if p is None:
        return NOTHING
    return "< 1e-300" if p <= 1e-300 else f"{p:.2g}"


def count(n: float | None) -> str:
    """A whole number with thousands marked."""
    return NOTHING if n is None else f"{n:,.0f}"


def number(x: float | None, digits: int = 1) -> str:
    """A number with fixed decimals; large ones without."""
    if x is None:
        return NOTHING
    return f"{x:,.0f}" if abs(x) >= 100 else f"{x:,.{digits}f}"


def short(x: float | None) -> str:
    """A number with no more digits than it has."""
    return NOTHING if x is None else f"{x:.3g}"


def level(share: float | None) -> str:
    """A level or a share of few things, with no more digits than it has."""
    return NOTHING if share is None else f"{100 * share:.3g}%"


def some(n: int, one: str, many: str = "") -> str:
    """ "1 rule", "2 rules", "no rules"."""
    return f"{count(n) if n else 'no'} {one if n == 1 else many or one + 's'}"


def listed(names: list[Any]) -> str:
    """ "a", "a and b", "a, b and c"."""
    words = [str(name) for name in names]
    return " and ".join([", ".join(words[:-1]), words[-1]]) if len(words) > 1 else "".join(words)


def day(text: str) -> str:
    """An ISO date as "5 Mar 2021"."""
    when = date.fromisoformat(text)
    return f"{when.day} {when:%b %Y}"


def name(text: str) -> Markup:
    """A name set apart, so that its writing direction cannot touch what stands around it."""
    safe = escape(text)
    return safe if text.isascii() else Markup("<bdi>{}</bdi>").format(safe)


def combination(text: str) -> Markup:
    """A combination, each of its types set apart."""
    return Markup(JOINER).join(name(part) for part in text.split(JOINER))


FILTERS = {
    "combination": combination,
    "count": count,
    "day": day,
    "level": level,
    "listed": listed,
    "name": name,
    "number": number,
    "p": p_text,
    "percent": percent,
    "short": short,
}
