"""Reads a rule book, and says in which line what is wrong."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from miner.errors import SettingsError, explain
from miner.settings.paths import similar
from miner.settings.sections import SECTIONS
from miner.settings.toml_errors import toml_advice
from miner.settings.values import nearest, show

from .records import BookRule, RuleBook

_HEADER = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]\]?\s*(?:#.*)?$")
_KEY = re.compile(r"""^\s*("[^"]*"|'[^']*'|[A-Za-z0-9_-]+)\s*(?:\.|=)""")
_RULES = {
    "string_type": ("be text", "Put it in quotes."),
    "tuple_type": ("be a list of texts", 'Write it as ["a", "b"].'),
    "dict_type": ("be a table", "Write its keys below a heading of that name."),
    "model_type": ("be a table", "Write its keys below a heading of that name."),
    "missing": ("be given", "Add it; `miner rules` writes every key."),
}


def read_rule_book(path: str | Path) -> RuleBook:
    """Read and check a rule book.

    A rule without ``id`` gets the one that belongs to what it says.

    Raises
    ------
    SettingsError : one line per problem, each with the line of the file, all at once
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
        raw = tomllib.loads(text)
    except OSError as error:
        found = error.strerror or type(error).__name__
        raise SettingsError(
            explain(
                str(path),
                "file",
                "be a rule book",
                found,
                f"{similar(path, ('.toml',))}Check the path.",
            )
        ) from error
    except UnicodeDecodeError as error:
        raise SettingsError(
            explain(str(path), "file", "be UTF-8 text", "other bytes", "Save it as UTF-8.")
        ) from error
    except tomllib.TOMLDecodeError as error:
        advice = toml_advice(text, str(error))
        raise SettingsError(
            explain(str(path), "file", "be valid TOML", f"an error: {error}", advice)
        ) from error
    if not {"format", "rule"} & raw.keys():
        found = "a file with neither format nor rules" if raw else "an empty file"
        advice = "Name what `miner rules` wrote."
        raise SettingsError(explain(str(path), "file", "be a rule book", found, advice))
    lines = Lines(text)
    _fill_ids(raw)
    try:
        book = RuleBook.model_validate(raw)
    except ValidationError as error:
        found_lines = [_issue_line(path, lines, issue) for issue in error.errors(include_url=False)]
        raise SettingsError("\n".join(found_lines)) from None
    problems = _problems(path, lines, book)
    if problems:
        raise SettingsError("\n".join(problems))
    return book


class Lines:
    """Where things stand in a TOML file that has each key on a line of its own."""

    def __init__(self, text: str) -> None:
        self._line_of: dict[tuple[str | int, ...], int] = {}
        count: dict[tuple[str | int, ...], int] = {}
        section: tuple[str | int, ...] = ()
        for number, line in enumerate(text.splitlines(), start=1):
            header = _HEADER.match(line)
            if header:
                parts = tuple(part.strip().strip("\"'") for part in header[2].split("."))
                if header[1] == "[[":
                    index = count.get(parts, 0)
                    count[parts] = index + 1
                    section = (*parts, index)
                elif parts[:1] in count:  # a table of the last element of a list
                    section = (parts[0], count[parts[:1]] - 1, *parts[1:])
                else:
                    section = parts
                self._line_of.setdefault(section, number)
                continue
            key = _KEY.match(line)
            if key:
                self._line_of.setdefault((*section, key[1].strip("\"'")), number)

    def of(self, place: tuple[str | int, ...]) -> int:
        """Line of a key, or of the nearest table around it; 1 where there is none."""
        while place:
            if place in self._line_of:
                return self._line_of[place]
            place = place[:-1]
        return 1


def _fill_ids(raw: dict[str, Any]) -> None:
    rules = raw.get("rule")
    for rule in rules if isinstance(rules, list) else ():
        if isinstance(rule, dict) and "id" not in rule:
            try:
                rule["id"] = BookRule.model_validate({**rule, "id": "x"}).own_id
            except ValidationError:  # told of below, with everything else
                rule["id"] = "x"


def _issue_line(path: Path, lines: Lines, issue: Mapping[str, Any]) -> str:
    place, kind, value = tuple(issue["loc"]), issue["type"], issue["input"]
    context = issue.get("ctx", {})
    key = ".".join(str(part) for part in place if isinstance(part, str))
    where = f"{path}, line {lines.of(place)}"
    if kind == "extra_forbidden":
        return explain(where, key, "be a known key", "one that is not", "Correct or remove it.")
    if kind == "rule":
        return explain(where, key, context["rule"], show(value), context["advice"])
    if kind == "literal_error":
        choices = re.findall(r"'([^']+)'", context["expected"])
        advice = nearest(str(value), choices) if choices else ""
        return explain(where, key, f"be {context['expected']}", show(value), advice)
    rule, advice = _RULES.get(kind, (f"be right ({issue['msg']})", ""))
    return explain(where, key, rule, "nothing" if kind == "missing" else show(value), advice)


def _problems(path: Path, lines: Lines, book: RuleBook) -> list[str]:
    """What single values cannot show: ids that clash, counts and shares that cannot be."""
    found: list[str] = []
    seen: dict[str, int] = {}
    for i, rule in enumerate(book.rule):

        def add(
            key: str, rule_text: str, got: str, advice: str = "", at: tuple[str | int, ...] = ()
        ) -> None:
            where = f"{path}, line {lines.of(('rule', i, *at, key))}"  # noqa: B023
            found.append(explain(where, ".".join([*map(str, at), key]), rule_text, got, advice))

        if rule.id != rule.own_id:
            add(
                "id",
                f"be {rule.own_id}, which belongs to this target, stratum, combination and windows",
                f'"{rule.id}"',
                "A rule that says something else is another rule: remove its id and its evidence.",
            )
        if rule.id in seen:
            add("id", "be there once", f'"{rule.id}" again', f"See line {seen[rule.id]}.")
        seen.setdefault(rule.id, lines.of(("rule", i)))
        if rule.run is not None and rule.run not in book.run:
            add("run", "name a [run.NAME] of this book", f'"{rule.run}"')
        for part in ("discovery", "holdout"):
            findings = getattr(rule, part)
            if findings is not None and findings.hits > findings.triggers:
                more = f"{findings.hits} of {findings.triggers}"
                add("hits", "be at most the triggers", more, at=(part,))
        for key in ("precision", "precision_low", "precision_high", "expected"):
            value = getattr(rule, key)
            if value is not None and value > 1:
                add(key, "be a share from 0 to 1", f"{value:g}", "Write 44 % as 0.44.")
    for name in ("groups", "coverage"):
        section = getattr(book, name)
        if section is None:
            continue
        known = SECTIONS[name].model_fields
        for key in section:
            if key not in known:
                where = f"{path}, line {lines.of((name, key))}"
                found.append(
                    explain(where, f"{name}.{key}", "be a known key", "one that is not",
                            nearest(key, known))
                )  # fmt: skip
    return found
