"""Writes a rule book as TOML with comments, one key a line, so that two books can be compared."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from miner import placing
from miner.errors import OutputError, explain

from .records import DIGITS, BookRule, RuleBook, RunOrigin
from .words import rule_words

_BARE = re.compile(r"^[A-Za-z0-9_-]+$")

HEADER = """\
# Rule book: combinations of alerts that came before events, with their evidence.
#
# Yours to change: status (candidate, live, watch or retired) and note. A scan passes over retired
# rules. To add a rule by hand, write a [[rule]] with target, combination, lookback, horizon and
# rest; its id is filled in. The id belongs to what a rule says: change that and it is another rule.
#
# Research, not advice. Alerts ahead of corporate events can reflect leaked information: involve
# compliance before acting on a rule. Local rules and licensed practice come first.
"""
_SESSIONS = "# Which session a stamp belongs to: as in the study the rules came from."
_SPANS = (
    "# Who belongs where and what is covered: as in the study. Paths are relative to this file."
)
_RUN = "# Where rules came from: the run's split, and SHA-256 of its rules and of what it read."
_COMMENTS = {
    "precision": "share of triggers followed by the event, in the holdout",
    "precision_low": "95 % interval",
    "expected": "what the same triggers would show if alerts said nothing",
    "lookback": "sessions within which all the alerts have to come",
    "horizon": "sessions within which the event has to follow",
    "rest": "sessions between two triggers on an entity",
}


def write_rule_book(book: RuleBook, path: str | Path, *, replace: bool = False) -> None:
    """Write a rule book; it appears whole or not at all.

    Raises
    ------
    OutputError : the file exists and may not be replaced, or its place cannot be written
    """
    path = Path(path)
    check_free(path, replace)
    write_whole(path, "\n".join(_lines(book)) + "\n")


def write_whole(path: Path, text: str) -> None:
    """Write a file that appears whole or not at all, over one that is there.

    Raises
    ------
    OutputError : it cannot be written; what was there is there
    """
    try:
        path = path.resolve()
        with placing.aside(path) as aside:
            (aside / path.name).write_text(text, encoding="utf-8", newline="\n")
            placing.put_files(aside, path.parent)
    except OSError as error:
        found = f"the system's error: {error.strerror or error}"
        advice = "Free some space or name a file elsewhere."
        raise OutputError(explain("output", str(path), "be writable", found, advice)) from error


def check_free(path: Path, replace: bool) -> None:
    """Refuse early what could not be written at the end.

    Raises
    ------
    OutputError : the file exists and may not be replaced
    """
    if path.exists() and not replace:
        raise OutputError(
            explain(
                "output",
                str(path),
                "not exist yet",
                "a file that does",
                "Name another file, or allow replacing this one: --replace, in Python "
                "replace=True.",
            )
        )


def _lines(book: RuleBook) -> Iterator[str]:
    yield HEADER
    yield f"format = {book.format}"
    yield ""
    yield _SESSIONS
    yield from _table("sessions", book.sessions)
    if book.alerts:
        yield from _table("alerts", book.alerts)
    if book.groups is not None or book.coverage is not None:
        yield _SPANS
    for name in ("groups", "coverage"):
        if getattr(book, name) is not None:
            yield from _table(name, getattr(book, name))
    if book.history is not None:
        yield "# The triggers so far, which a scan tells of."
        yield from _table("history", book.history.model_dump())
    if book.run:
        yield _RUN
    for name, run in book.run.items():
        yield from _run(name, run)
    for rule in book.rule:
        yield from _rule(rule)


def _table(
    name: str, values: dict[str, Any], comments: dict[str, str] | None = None
) -> Iterator[str]:
    yield f"[{name}]"
    for key, value in values.items():
        if value is not None and value != {}:
            note = (comments or {}).get(key)
            yield f"{_key(key)} = {toml(value)}" + (f"  # {note}" if note else "")
    yield ""


def _run(name: str, run: RunOrigin) -> Iterator[str]:
    values = run.model_dump()
    inputs = values.pop("inputs")
    yield from _table(f"run.{_key(name)}", values)
    yield from _table(f"run.{_key(name)}.inputs", inputs)


def _rule(rule: BookRule) -> Iterator[str]:
    for line in rule_words(rule):
        yield f"# {line}".rstrip()
    values = rule.model_dump()
    parts = {name: values.pop(name) for name in ("discovery", "holdout", "lead", "workload")}
    first, *rest = _table("rule", values, _COMMENTS)
    yield f"[{first}]"
    yield from rest
    for name, part in parts.items():
        if part is not None:
            yield from _table(f"rule.{name}", part)


def _key(key: str) -> str:
    return key if _BARE.match(key) else toml(key)


def toml(value: Any) -> str:
    """A value as TOML writes it: text, true or false, numbers to six digits, lists, tables."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        # JSON's escapes are TOML's; of what must be escaped it only leaves DEL as it is
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(f"no number a rule book could hold: {value}")
        text = f"{value:.{DIGITS}g}"
        return text if any(mark in text for mark in ".e") else f"{text}.0"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_key(k)} = {toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    return str(value)
