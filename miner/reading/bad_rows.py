"""Rows that cannot be read: all reported at once, or set aside with their reason."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa

from ..errors import TableError, explain, printable
from .line_numbers import lines_of_rows
from .sources import Chunk

SET_ASIDE_COLUMNS = ["table", "file", "row", "column", "value", "reason"]
_MOST_SHOWN = 20
_LONGEST_VALUE = 80


def set_aside_frame(records: list[tuple[str, str, int, str, str, str]]) -> pd.DataFrame:
    """Return rows set aside as a table: text, except `row`, int64 counted from 1."""
    frame = pd.DataFrame(records, columns=SET_ASIDE_COLUMNS)
    return frame.astype({name: "int64" if name == "row" else "str" for name in SET_ASIDE_COLUMNS})


@dataclass(frozen=True)
class Fault:
    """What is wrong in one column of a chunk.

    column: its name in the file; values: all of them [n]; is_bad: bool [n];
    reason: tells why a value is bad, as in "is empty".
    """

    column: str
    values: pa.Array
    is_bad: np.ndarray
    reason: Callable[[str | None], str]


@dataclass
class BadRows:
    """Collects the cells of one table that cannot be read.

    With `keep` every row's first such cell is remembered, else only as many as are shown.
    """

    table: str
    keep: bool
    count: int = 0
    _cells: list[tuple[str, str, int, str, str, str]] = field(default_factory=list)

    def add(self, chunk: Chunk, faults: list[Fault]) -> None:
        """Note a chunk's bad cells."""
        rows = np.concatenate([np.flatnonzero(fault.is_bad) for fault in faults])
        order = np.repeat(np.arange(len(faults)), [fault.is_bad.sum() for fault in faults])
        self.count += len(rows)
        by_row = np.lexsort((order, rows))
        if self.keep:
            rows_sorted = rows[by_row]
            by_row = by_row[np.diff(rows_sorted, prepend=-1) > 0]
        else:
            by_row = by_row[: _MOST_SHOWN - len(self._cells)]
        for k in by_row:
            fault, row = faults[order[k]], int(rows[k])
            value = _text(fault.values[row])
            cell = (fault.column, (value or "")[:_LONGEST_VALUE], fault.reason(value))
            self._cells.append((self.table, chunk.file, chunk.first_row + row, *cell))

    def refuse_any(self, paths: Mapping[str, Path]) -> None:
        """Raise `TableError` listing the first cells and their number, unless they are kept.

        paths: file, as rows name it -> where it is, to look up lines.
        """
        if self.keep or not self.count:
            return
        rows_of: dict[str, set[int]] = {}
        for _, file, row, *_ in self._cells:
            rows_of.setdefault(file, set()).add(row)
        line_of = {
            (file, row): f" (line {line})"
            for file, rows in rows_of.items()
            if file in paths
            for row, line in lines_of_rows(paths[file], rows).items()
        }
        lines = [
            printable(f'  {file}, row {row}, column {column}: "{value}" {reason}')
            + line_of.get((file, row), "")
            for _, file, row, column, value, reason in self._cells
        ]
        if self.count > len(lines):
            lines.append(f"  and {self.count - len(lines)} more")
        found = "1 cell that is not" if self.count == 1 else f"{self.count} cells that are not"
        advice = (
            'Correct them, or write bad_rows = "set-aside" to leave such rows out and list them. '
            "Rows count from 1 below the header."
        )
        text = explain(f"[{self.table}]", "rows", "be readable", found, advice)
        raise TableError("\n".join([text, *lines]))

    def frame(self) -> pd.DataFrame:
        """Return the rows set aside."""
        return set_aside_frame(self._cells if self.keep else [])


def _text(value: pa.Scalar) -> str | None:
    try:
        plain = value.as_py()
    except UnicodeDecodeError:  # text of a damaged file
        plain = value.cast(pa.binary()).as_py()
    except (OverflowError, ValueError):  # a timestamp beyond what Python's own can hold
        plain = value.cast(pa.int64()).as_py()
    if isinstance(plain, bytes):
        return plain.decode("utf-8", "replace")
    return None if plain is None else str(plain)
