"""What can be wrong with the settings: each section on its own, then sections together."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from pydantic import ValidationError

from ..errors import explain
from .sections import (
    OPTIONAL_SECTIONS,
    SECTIONS,
    TABLE_COLUMNS,
    GroupSettings,
    HoldoutSettings,
    Section,
    SessionSettings,
    TableSettings,
    TestingSettings,
    WindowSettings,
)
from .values import nearest, show

_TYPE_RULES = {
    "string_type": ("be text", "Put it in quotes."),
    "bool_type": ("be true or false", "Write one of the two, without quotes."),
    "tuple_type": ("be a list of texts", 'Write it as ["a", "b"].'),
    "dict_type": ("be a table of names", 'Write it as {entity = "name in the file"}.'),
}
# defaults that hang on other keys
_DERIVED = {"embargo": "lookback + horizon", "rest": "the horizon", "share": "0.3"}


@dataclass
class Problems:
    """The problems found so far: `lines` for the user, `keys` ("section.key") to skip later."""

    where: str
    lines: list[str] = field(default_factory=list)
    keys: set[str] = field(default_factory=set)

    def add(self, what: str, rule: str, found: str, advice: str = "") -> None:
        """Note one problem in the uniform wording."""
        self.lines.append(explain(self.where, what, rule, found, advice))

    def spare(self, *keys: str) -> bool:
        """Tell whether none of these keys, nor their sections, was found wrong."""
        return not any(key in self.keys or key.partition(".")[0] in self.keys for key in keys)


def read_section(name: str, raw: Any, problems: Problems) -> Section | None:
    """Check one section. Wrong keys are noted and left out, so that later checks see the rest.

    Returns None for an optional section that is not there, or one that cannot be used at all.
    """
    model = SECTIONS[name]
    if raw is None and name in OPTIONAL_SECTIONS:
        return None
    if raw is not None and not isinstance(raw, Mapping):
        problems.keys.add(name)
        advice = f"Write [{name}] on a line and its keys below it."
        problems.add(f"[{name}]", "be a table", show(raw), advice)
        return None
    given = {key: value for key, value in (raw or {}).items() if value is not None}
    try:
        return model.model_validate(given)
    except ValidationError as error:
        for issue in error.errors(include_url=False):
            # a default that hangs on a wrong key is no problem of its own
            if issue["type"] != "default_factory_not_called":
                problems.keys.add(f"{name}.{issue['loc'][0]}")
                _add_issue(name, issue, problems)
    try:
        return model.model_validate(
            {k: v for k, v in given.items() if problems.spare(f"{name}.{k}")}
        )
    except ValidationError:  # a key that has no default is missing or wrong
        problems.keys.add(name)
        return None


def _add_issue(name: str, issue: Any, problems: Problems) -> None:
    """Put one pydantic error into the user's words."""
    kind, value, context = issue["type"], issue["input"], issue.get("ctx", {})
    key = str(issue["loc"][0])
    path = ".".join(str(step + 1 if isinstance(step, int) else step) for step in issue["loc"])
    what = f"[{name}] {path}"
    if kind == "extra_forbidden":
        advice = nearest(key, SECTIONS[name].model_fields)
        problems.add(f"[{name}]", "hold known keys only", f"`{key}`", advice)
    elif kind == "missing":
        problems.add(what, "be given", "nothing", f'Write {key} = "{name}.csv" below [{name}].')
    elif kind == "rule":
        advice = context["advice"] or _default(name, key)
        problems.add(what, context["rule"], show(value), advice)
    elif kind == "literal_error":
        choices = re.findall(r"'([^']+)'", context["expected"])
        problems.add(what, f"be {context['expected']}", show(value), nearest(str(value), choices))
    else:
        rule, advice = _TYPE_RULES.get(kind, (f"be right ({issue['msg']})", ""))
        problems.add(what, rule, show(value), advice or _default(name, key))


def _default(name: str, key: str) -> str:
    """Return advice that holds for every key: what happens without it."""
    if key in _DERIVED:
        return f"Leave it out for the default, {_DERIVED[key]}."
    known = SECTIONS[name].model_fields.get(key)
    if known is None or known.is_required():
        return "Write a value."
    is_fixed = known.default_factory is None and known.default is not None
    return f"Leave it out for the default{f', {show(known.default)}' if is_fixed else ''}."


def check_table(name: str, table: TableSettings, problems: Problems) -> None:
    """Check what the keys of one table mean together."""
    if table.is_database and table.query is None and problems.spare(f"{name}.query"):
        advice = 'Write query = "select entity, ... from ...".'
        problems.add(f"[{name}] query", "be given with a database URL", "nothing", advice)
    if not table.is_database and table.query is not None:
        rule, advice = "be a database URL when a query is given", "Leave out query to read a file."
        problems.add(f"[{name}] source", rule, show(table.source), advice)
    known = TABLE_COLUMNS[name]
    labels = table.label_columns if isinstance(table, GroupSettings) else ()
    for label in labels:
        if label in known:
            advice = "Name a column such as a sector or a size band."
            problems.add(f"[{name}] strata, peers", "name label columns", f'"{label}"', advice)
    for column in table.columns:
        if column not in known + labels:
            rule, advice = "rename known columns only", nearest(column, known + labels)
            problems.add(f"[{name}] columns", rule, f"`{column}`", advice)
    twice = [file for file, count in Counter(table.columns.values()).items() if count > 1]
    if twice:
        rule, advice = "name every column of the file once", "Give each its own column."
        problems.add(f"[{name}] columns", rule, ", ".join(f'"{file}"' for file in twice), advice)


def check_sessions(sessions: SessionSettings, problems: Problems) -> None:
    """Check what the keys of [sessions] mean together."""
    if sessions.kind == "exchange" and sessions.close is not None:
        rule = f"not be given with the exchange code {sessions.calendar}"
        advice = "Leave it out: the exchange's own closes are used, early ones included."
        problems.add("[sessions] close", rule, show(sessions.close), advice)
    if sessions.start and sessions.end and sessions.start >= sessions.end:
        rule = f"be before the end {sessions.end}"
        problems.add(
            "[sessions] start", rule, str(sessions.start), "Are the two the wrong way round?"
        )


def check_holdout(
    holdout: HoldoutSettings, sessions: SessionSettings, windows: WindowSettings, problems: Problems
) -> None:
    """Check the holdout on its own and against the calendar and the windows."""
    if {"start", "share"} <= holdout.model_fields_set:
        problems.add("[holdout]", "have start or share", "both", "Leave one of them out.")
    first, advice = holdout.start, "Move one of the two, or write share = 0.3 instead."
    if first and sessions.start and first <= sessions.start:
        rule = f"be after the study's start {sessions.start}"
        problems.add("[holdout] start", rule, str(first), advice)
    if first and sessions.end and first > sessions.end:
        rule = f"not be after the study's end {sessions.end}"
        problems.add("[holdout] start", rule, str(first), advice)
    reach = windows.horizon + windows.lookback
    keys = ("windows.horizon", "windows.lookback", "holdout.embargo")
    if problems.spare(*keys) and holdout.embargo < reach:
        rule = f"be at least horizon + lookback = {reach}"
        advice = "Leave it out, or raise it: no alert and no event may be used on both sides."
        problems.add("[holdout] embargo", rule, str(holdout.embargo), advice)


def check_testing(testing: TestingSettings, problems: Problems) -> None:
    """Check that Westfall-Young is given enough draws for a p-value to reach `fdr`."""
    needed = math.ceil(round(1 / testing.fdr, 9)) - 1
    keys = ("testing.adjust", "testing.permutations", "testing.fdr")
    if (
        problems.spare(*keys)
        and testing.adjust == "westfall-young"
        and testing.permutations < needed
    ):
        rule = f"be at least {needed} with westfall-young at fdr = {testing.fdr:g}"
        advice = "With fewer no p-value can be small enough; the default is 2000."
        problems.add("[testing] permutations", rule, str(testing.permutations), advice)
