"""Which column of a file stands for which of the table's own columns."""

from __future__ import annotations

import difflib
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import pyarrow as pa

from ..errors import TableError, explain
from .names import is_name_type
from .numbers import is_number_type
from .stamps import is_time_type


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
    repeated = [name for name, count in Counter(header).items() if count > 1 and name]
    if repeated:
        advice = "Rename or remove all but one."
        raise TableError(
            explain(where, "header", "name every column once", _list(repeated), advice)
        )
    here = set(header)
    problems = []
    for column in dict.fromkeys((*wanted.columns, *wanted.renamed)):
        name = wanted.in_file(column)
        if name in here:
            continue
        is_needed = column not in wanted.optional or column in wanted.renamed
        # a column that differs in case or blanks only is surely meant, never to be passed over
        alike = [other for other in header if other.strip().casefold() == name.casefold()]
        if is_needed or alike:
            advice = _advice(column, alike or difflib.get_close_matches(name, header, 1), header)
            rule = f"be there for table [{wanted.table}]"
            problems.append(
                explain(where, f"column {name}", rule, f"columns {_list(header)}", advice)
            )
    if problems:
        raise TableError("\n".join(problems))
    return {c: wanted.in_file(c) for c in wanted.columns if wanted.in_file(c) in here}


def check_types(
    kinds: Mapping[str, pa.DataType], matched: Mapping[str, str], wanted: Wanted, where: str
) -> None:
    """Check that names are text or whole numbers, times are text, dates or timestamps, and
    numbers are numbers or text.

    `kinds` is by name in the file. Raises `TableError`, all wrong columns at once.
    """
    rules: tuple[tuple[tuple[str, ...], Callable[[pa.DataType], bool], str], ...] = (
        (wanted.names, is_name_type, "hold text or whole numbers"),
        (wanted.times, is_time_type, "hold dates, timestamps or ISO 8601 text"),
        (wanted.numbers, is_number_type, "hold numbers"),
    )
    problems = [
        explain(where, f"column {matched[column]}", rule, str(kinds[matched[column]]))
        for columns, is_right, rule in rules
        for column in columns
        if column in matched and not is_right(kinds[matched[column]])
    ]
    if problems:
        raise TableError("\n".join(problems))


def _advice(column: str, near: Sequence[str], header: Sequence[str]) -> str:
    if len(header) == 1 and any(mark in header[0] for mark in ";\t|"):
        return "Separate the columns by commas."
    name = near[0] if near else "its name in the file"
    return f'Rename it in the file, or write columns = {{{column} = "{name}"}}.'


def _list(names: Sequence[str]) -> str:
    shown = ", ".join(f"`{name}`" for name in names[:20])
    return f"{shown} and {len(names) - 20} more" if len(names) > 20 else shown
