"""A review's folder: written aside and moved in one step, so that one that exists is whole."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from miner import placing
from miner.errors import OutputError, explain
from miner.report import review_page
from miner.review.records import Review
from miner.review.tables import tables

RECORD = "review.json"
FLOATS = "%.10g"


def check_free(folder: Path, replace: bool) -> None:
    """Refuse early what could not be written at the end.

    Raises
    ------
    OutputError : the folder exists and may not be replaced, or is no review's
    """
    try:
        placing.sweep(folder)
        is_there = folder.exists()
        is_review = folder.is_dir() and ((folder / RECORD).is_file() or not any(folder.iterdir()))
    except (OSError, ValueError) as error:
        raise _unwritable(folder, error) from error
    if is_there and not replace:
        advice = "Name another folder, or allow replacing this one (--replace)."
        raise OutputError(
            explain("output", str(folder), "not exist yet", "a folder that does", advice)
        )
    if is_there and not is_review:
        rule = "be the folder of a review to be replaced"
        advice = "Name another folder."
        raise OutputError(explain("output", str(folder), rule, "something else", advice))


def write(review: Review, folder: Path, replace: bool = False) -> None:
    """Write a review: ``review.json``, its tables as csv, and its page.

    Raises
    ------
    OutputError : it cannot be written; what was there is there
    """
    check_free(folder, replace)
    lines = (f"{json.dumps(key)}: {_text(value)}" for key, value in review.as_dict().items())
    try:
        whole = folder.resolve()
        with placing.aside(whole) as aside:
            record = "{\n" + ",\n".join(lines) + "\n}\n"
            (aside / RECORD).write_text(record, encoding="utf-8")
            for name, table in tables(review).items():
                write_table(table, aside / f"{name}.csv")
            review_page.render_into(aside)
            placing.put_folder(aside, whole)
    except OSError as error:
        raise _unwritable(folder, error) from error


def write_table(table: pd.DataFrame, path: Path) -> None:
    """Write a table as csv."""
    table.to_csv(path, index=False, float_format=FLOATS, lineterminator="\n")


def _text(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def _unwritable(folder: Path, error: Exception) -> OutputError:
    found = f"the system's error: {getattr(error, 'strerror', None) or error}"
    advice = "Free some space or name a folder elsewhere."
    return OutputError(explain("output", str(folder), "be writable", found, advice))
