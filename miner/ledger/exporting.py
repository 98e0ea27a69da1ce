"""A whole ledger as csv or JSON, line by line.

JSON (``format`` 1): ``entries``, a list of objects with every field of an entry, hashes included;
whoever reads it can check the chain (see ``chain``). csv: one row an entry, ``body`` as JSON text.
A cell that a spreadsheet could take for a formula has an apostrophe before it, so csv is for people
and JSON for programs.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Iterator
from pathlib import Path

from miner import placing
from miner.errors import OutputError, explain
from miner.rule_book.writing import check_free

from .chain import canonical
from .records import Entry
from .schema import COLUMNS

FORMAT = 1
FORMS = ("csv", "json")
FORMULA = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")


def export_lines(entries: Iterable[Entry], form: str) -> Iterator[str]:
    """The text of an export, in pieces that end with a line's end."""
    return _json(entries) if form == "json" else _csv(entries)


def write_export(
    entries: Iterable[Entry], form: str, path: str | Path, *, replace: bool = False
) -> None:
    """Write an export; the file appears whole or not at all.

    Raises
    ------
    OutputError : the file exists and may not be replaced, or its place cannot be written
    """
    path = Path(path)
    check_free(path, replace)
    try:
        with placing.aside(path) as folder:
            with (folder / path.name).open("w", encoding="utf-8", newline="") as file:
                file.writelines(export_lines(entries, form))
            placing.put_files(folder, path.parent)
    except OSError as error:
        found = f"the system's error: {error.strerror}"
        advice = "Free some space or name a file elsewhere."
        raise OutputError(explain("output", str(path), "be writable", found, advice)) from error


def _json(entries: Iterable[Entry]) -> Iterator[str]:
    yield f'{{"format":{FORMAT},"entries":['
    between = "\n"
    for entry in entries:
        yield between + canonical(vars(entry))
        between = ",\n"
    yield "\n]}\n"


def _csv(entries: Iterable[Entry]) -> Iterator[str]:
    text = io.StringIO()
    # all texts in quotes: the writer does not see that a lone \r ends a line for some readers
    writer = csv.writer(text, lineterminator="\n", quoting=csv.QUOTE_NONNUMERIC)
    writer.writerow(COLUMNS)
    for entry in entries:
        fields = {**vars(entry), "body": canonical(entry.body)}
        writer.writerow([_inert(fields[name]) for name in COLUMNS])
        yield text.getvalue()
        text.seek(0)
        text.truncate()
    yield text.getvalue()


def _inert(value: str | int | None) -> str | int | None:
    is_formula = isinstance(value, str) and value.startswith(FORMULA)
    return f"'{value}" if is_formula else value
