"""Why a text is no time, told so that the one who wrote it can put it right."""

from __future__ import annotations

import datetime as dt
import re

_EPOCH = dt.datetime(1970, 1, 1)
_DIGITS_OF_UNIT = {"seconds": (9, 11), "milliseconds": (12, 14), "microseconds": (15, 17)}
_PER_SECOND = {"seconds": 1, "milliseconds": 10**3, "microseconds": 10**6, "nanoseconds": 10**9}
_SPREADSHEET_DAY_0 = dt.datetime(1899, 12, 30)
_YEAR_FIRST = "write dates as 2020-01-31, year first and with hyphens"

_SHAPES: tuple[tuple[str, str], ...] = (
    (r"\d{1,4}[/.]\d{1,2}[/.]\d{1,4}.*", _YEAR_FIRST),
    (r"\d{1,2}-\w{1,3}-\d{2,4}.*", _YEAR_FIRST),
    (r"\d{4}-(\d-\d{1,2}|\d\d-\d)(\D.*)?", "write month and day with two digits, as 2020-01-31"),
    (r".*\d ?[AaPp]\.?[Mm]\.?", "write times on the 24-hour clock, as 2020-01-31 16:00"),
    (r".*\d +[+-]\d\d(:?\d\d)?", "leave no blank before the offset"),
    (r".*\d ?[A-Za-z]{3,}[A-Za-z/_]*", "write the offset in numbers, as 2020-01-31T16:00-05:00"),
    (r".*\d,\d+.*", "write fractions of a second after a point"),
    (r"\d{4}-\d\d-\d\d[T ]24:.*", "midnight is 00:00 of the next date"),
    (r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d:60.*", "a minute's last second is 59"),
    (r"\d{4}-\d\d-\d\d[T ]\d{1,2}(\D.*)?", "there is no such date, hour or offset"),
    (r"\d{4}-\d\d-\d\d", "there is no such date"),
    (r"\d{4}", "a year alone is too little: write a date"),
    (r"[+-]?\d{5,}-\d\d-\d\d.*", "years run from 0001 to 9999"),
)


def why_no_time(value: str | None, noun: str = "time") -> str:
    """Return why a text is no time, as in "is no time: ...", with what to write where it shows."""
    if value is None or value == "":
        return "is empty"
    if "\0" in value:
        return f"is no {noun}: it holds a NUL character"
    if value != value.strip():
        return f"is no {noun}: it has blanks around it" if value.strip() else "is blank"
    hint = _of_number(value) or next(
        (hint for shape, hint in _SHAPES if re.fullmatch(shape, value, re.DOTALL)), ""
    )
    return f"is no {noun}: {hint}" if hint else f"is no {noun}"


def why_out_of_range(value: str | None) -> str:
    """Return why a date or timestamp of a typed column cannot be used."""
    return "is empty" if value is None else "is outside the years 1 to 9999"


def _of_number(value: str) -> str:
    """Return what a number may count, and the time it would then be."""
    if not re.fullmatch(r"\d+(\.\d+)?", value):
        return ""
    whole = value.partition(".")[0]
    if len(whole) == 8 and _is_date(whole):
        return f"write it as {whole[:4]}-{whole[4:6]}-{whole[6:]}"
    if len(whole) == 5:
        day = _SPREADSHEET_DAY_0 + dt.timedelta(days=int(whole))
        return f"if it is a spreadsheet's day number it is {day.date()}; write it so"
    units = [u for u, (low, high) in _DIGITS_OF_UNIT.items() if low <= len(whole) <= high]
    if not units and 18 <= len(whole) <= 19:
        units = ["nanoseconds"]
    if not units:
        return ""
    try:
        stamp = _EPOCH + dt.timedelta(seconds=int(whole) // _PER_SECOND[units[0]])
    except OverflowError:
        return ""
    return f"if it is {units[0]} since 1970 it is {stamp.isoformat()}Z; write it so"


def _is_date(digits: str) -> bool:
    try:
        dt.date(int(digits[:4]), int(digits[4:6]), int(digits[6:]))
    except ValueError:
        return False
    return True
