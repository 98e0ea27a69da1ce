"""On which line of a csv a row stands: quoted newlines and blank lines part rows from lines.

Only asked for when there is something to report, since it reads the file again.
"""

from __future__ import annotations

import csv
import gzip
import io
import zlib
from collections.abc import Collection, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO, cast

LONGEST_FIELD = 1 << 30


def unpacked(path: Path) -> BinaryIO:
    """Open a csv or csv.gz for its bytes."""
    if path.name.lower().endswith(".gz"):
        return cast(BinaryIO, gzip.open(path))
    return path.open("rb")


@contextmanager
def long_fields() -> Iterator[None]:
    """Let the standard library's csv reader read long fields; its limit is the whole process's."""
    before = csv.field_size_limit(LONGEST_FIELD)
    try:
        yield
    finally:
        csv.field_size_limit(before)


def is_csv(path: Path) -> bool:
    """Tell whether a file is read as a csv."""
    return path.name.lower().endswith((".csv", ".csv.gz"))


def lines_of_rows(path: Path, rows: Collection[int]) -> dict[int, int]:
    """Return row -> the line it begins on, for rows of a csv counted from 1 below the header.

    Lines count from 1. Empty where the file is no csv or can no longer be read that far.
    """
    found: dict[int, int] = {}
    if not rows or not is_csv(path):
        return found
    wanted, last = set(rows), max(rows)
    try:
        with (
            long_fields(),
            unpacked(path) as file,
            io.TextIOWrapper(file, "utf-8-sig", errors="replace", newline="") as text,
        ):
            reader, row, line = csv.reader(text), -1, 1
            for fields in reader:
                if fields:  # a blank line is no row
                    row += 1
                    if row in wanted:
                        found[row] = line
                    if row >= last:
                        break
                line = reader.line_num + 1
    except (OSError, EOFError, csv.Error, zlib.error):
        return found
    return found
