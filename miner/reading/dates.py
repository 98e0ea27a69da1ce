"""A csv of session dates: column `date`, optional column `close` with that day's closing time."""

from __future__ import annotations

import csv
import datetime as dt
import re
from pathlib import Path

from ..errors import CalendarError, explain
from ..settings.paths import where_it_leads

_MOST_SHOWN = 20


def read_session_dates(label: str, folder: Path) -> list[tuple[dt.date, dt.time | None]]:
    """Return dates in order, each with its own close or None.

    label: its path, relative to `folder`, and what messages call it. Raises `CalendarError`, all
    bad rows at once.
    """
    rows = _rows(label, folder)
    header = rows[0] if rows else []
    if header.count("date") != 1 or header.count("close") > 1:
        found = "columns " + ", ".join(f"`{name}`" for name in header) if header else "nothing"
        rule = "have one column `date`, and at most one `close`"
        advice = "Put a line date, or date,close, above the dates."
        raise CalendarError(explain(label, "header", rule, found, advice))
    date_at, close_at = header.index("date"), header.index("close") if "close" in header else None
    dates: list[tuple[dt.date, dt.time | None]] = []
    faults = []
    for number, row in enumerate(rows[1:], start=1):
        text = row[date_at] if date_at < len(row) else ""
        close_text = row[close_at] if close_at is not None and close_at < len(row) else ""
        date, close = _date(text), _close(close_text)
        if date is None:
            faults.append(f'  row {number}, column date: "{text}" is no date such as 2019-01-02')
        elif dates and date <= dates[-1][0]:
            faults.append(f"  row {number}, column date: {date} is not after {dates[-1][0]}")
        elif close_text and close is None:
            faults.append(f'  row {number}, column close: "{close_text}" is no time such as 13:00')
        else:
            dates.append((date, close))
    if faults:
        rule, advice = "hold dates in order, each once", "Rows count from 1 below the header."
        text = explain(
            label,
            "rows",
            rule,
            f"{len(faults)} that {'does' if len(faults) == 1 else 'do'} not fit",
            advice,
        )
        raise CalendarError("\n".join([text, *faults[:_MOST_SHOWN]]))
    if not dates:
        advice = "Write one date a line below the header."
        raise CalendarError(explain(label, "rows", "hold session dates", "no rows", advice))
    return dates


def _rows(label: str, folder: Path) -> list[list[str]]:
    try:
        with (folder / label).open(encoding="utf-8-sig", newline="") as file:
            return [row for row in csv.reader(file) if row]
    except UnicodeDecodeError as error:
        text = explain(label, "file", "be UTF-8 text", "other bytes", "Save it as UTF-8.")
        raise CalendarError(text) from error
    except (OSError, ValueError, csv.Error) as error:
        found = (getattr(error, "strerror", None) or str(error)).rstrip(".")
        advice = where_it_leads(label, folder, (".csv",))
        text = explain("[sessions]", "calendar", "be a readable csv", f"{label}: {found}", advice)
        raise CalendarError(text) from error


def _date(text: str) -> dt.date | None:
    if not re.fullmatch(r"\d{4}-\d{2}-\d{2}", text):
        return None
    try:
        return dt.date.fromisoformat(text)
    except ValueError:
        return None


def _close(text: str) -> dt.time | None:
    if not re.fullmatch(r"\d{2}:\d{2}(:\d{2})?", text):
        return None
    try:
        return dt.time.fromisoformat(text)
    except ValueError:
        return None
