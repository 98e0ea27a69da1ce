"""Which column of a file stands for which of the table's own columns."""

from __future__ import annotations

import difflib
import re
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import pyarrow as pa

from ..errors import TableError, explain
from .names import is_name_type
from .numbers import is_number_type
from .stamps import is_time_type

_LEAST_LIKENESS = 0.7
_LONGEST_SHOWN = 80
_TIME = re.compile(r"\d{4}-\d{2}-\d{2}|\d{1,4}/\d{1,2}/\d{1,4}")


@dataclass(frozen=True)
class Wanted:
    """The columns to read from a table, by the table's own names.

    renamed: own name -> name in the file, where they differ.
    """

    table: str
    names: tuple[str, ...]
    times: tuple[str, ...]
    optional: tuple[str, ...] = ()
    renamed: Mapping[str, str] = field(default_factory=dict)
    numbers: tuple[str, ...] = ()

    @property
    def columns(self) -> tuple[str, ...]:
        """Every wanted column, names first."""
        return self.names + self.times + self.numbers

    def in_file(self, column: str) -> str:
        """Return a column's name in the file."""
        return self.renamed.get(column, column)


def match_columns(header: Sequence[str], wanted: Wanted, where: str) -> dict[str, str]:
    """Return own name -> name in the file, for the wanted columns that are there.

    Raises `TableError` for repeated names and, all at once, for missing columns.
    """
    here = set(header)
    matched = {c: wanted.in_file(c) for c in wanted.columns if wanted.in_file(c) in here}
    if not matched and any(_TIME.match(name) for name in header):
        needed = [wanted.in_file(c) for c in wanted.columns if c not in wanted.optional]
        found = f"a first row that looks like data: {_list(header)}"
        advice = f"Put a line that names the columns above it: {','.join(needed)}"
        raise TableError(explain(where, "file", "have a header", found, f"{advice}."))
    if not matched and len(header) == 1 and any(mark in header[0] for mark in ";\t|"):
        rule, advice = "hold several columns", "Separate the columns by commas."
        raise TableError(explain(where, "header", rule, f"one, {_list(header)}", advice))
    repeated = [name for name, count in Counter(header).items() if count > 1 and name]
    if repeated:
        advice = "Rename or remove all but one."
        raise TableError(
            explain(where, "header", "name every column once", _list(repeated), advice)
        )
    free = [name for name in header if name not in matched.values()]
    problems = []
    for column in dict.fromkeys((*wanted.columns, *wanted.renamed)):
        name = wanted.in_file(column)
        if name in here:
            continue
        is_needed = column not in wanted.optional or column in wanted.renamed
        # a column that differs in case or blanks only is surely meant, never to be passed over
        alike = [other for other in free if other.strip().casefold() == name.strip().casefold()]
        if is_needed or alike:
            own = [column] if column in free else []
            near = (own or alike or difflib.get_close_matches(name, free, 1, _LEAST_LIKENESS))[:1]
            free = [other for other in free if other not in near]  # meant for one column only
            rule = f"be there for table [{wanted.table}]"
            found = f"columns {_list(header)}" if header else "no columns"
            advice = _advice(column, near)
            problems.append(explain(where, f"column {name}", rule, found, advice))
    if problems:
        raise TableError("\n".join(problems))
    return matched


def check_types(
    kinds: Mapping[str, pa.DataType], matched: Mapping[str, str], wanted: Wanted, where: str
) -> None:
    """Check that names are text or whole numbers, times are text, dates or timestamps, and
    numbers are numbers or text.

    `kinds` is by name in the file. Raises `TableError`, all wrong columns at once.
    """
    rules: tuple[
        tuple[tuple[str, ...], Callable[[pa.DataType], bool], str, Callable[[pa.DataType], str]],
        ...,
    ] = (
        (
            wanted.names,
            is_name_type,
            "hold text or whole numbers",
            lambda kind: "Write the names as text.",
        ),
        (wanted.times, is_time_type, "hold dates, timestamps or ISO 8601 text", _advice_on_times),
        (wanted.numbers, is_number_type, "hold numbers", lambda kind: "Write them as numbers."),
    )
    problems = [
        explain(
            where,
            f"column {matched[column]}",
            rule,
            str(kinds[matched[column]]),
            advice(kinds[matched[column]]),
        )
        for columns, is_right, rule, advice in rules
        for column in columns
        if column in matched and not is_right(kinds[matched[column]])
    ]
    if problems:
        raise TableError("\n".join(problems))


def _advice_on_times(kind: pa.DataType) -> str:
    if pa.types.is_integer(kind) or pa.types.is_floating(kind):
        return "Numbers that count from 1970 have to be turned into timestamps first."
    return "Write each as a date and a time of day."


def _advice(column: str, near: Sequence[str]) -> str:
    if list(near) == [column]:
        return f"The file has `{column}`: leave {column} out of columns."
    name = near[0] if near else "its name in the file"
    return f'Rename it in the file, or write columns = {{{column} = "{name}"}}.'


def _list(names: Sequence[str]) -> str:
    shown = ", ".join(f"`{_cut(name)}`" for name in names[:20])
    return f"{shown} and {len(names) - 20} more" if len(names) > 20 else shown


def _cut(name: str) -> str:
    return name if len(name) <= _LONGEST_SHOWN else f"{name[:_LONGEST_SHOWN]}..."
