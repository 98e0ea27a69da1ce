"""Exchange calendars: the only place that talks to the library they come from.

The library is imported on first use, and always asked for explicit dates: what it gives by default
moves with today's date.
"""

from __future__ import annotations

import datetime as dt
import difflib
import warnings
from typing import Any

import numpy as np

from ..errors import CalendarError, explain

# Years to open a calendar in just to learn its timezone and limits; one of them suits each.
_TRIAL_YEARS = (2024, 2018, 2010)
_ADVICE = "Give a csv of session dates as calendar instead, or upgrade exchange_calendars."


def open_exchange(code: str) -> Any:
    """Return an exchange's calendar over some year, for its timezone and its limits.

    Raises `CalendarError` for an unknown code, or one the library cannot compute.
    """
    import exchange_calendars

    known = exchange_calendars.get_calendar_names(include_aliases=True)
    if code not in known:
        near = difflib.get_close_matches(code.upper(), known, 3)
        advice = f"Did you mean {' or '.join(near)}?" if near else "XNYS is New York, XLON London."
        rule = 'be "weekdays", "daily", a known exchange code or the path of a .csv'
        raise CalendarError(explain("[sessions]", "calendar", rule, f'"{code}"', advice))
    for year in _TRIAL_YEARS:
        try:
            return _calendar(code, f"{year}-01-01", f"{year}-12-31")
        except Exception as error:  # the library raises errors of many kinds
            failure = error
    raise _cannot_compute(code, failure) from failure


def exchange_sessions(
    code: str, first: dt.date, last: dt.date, margin_days: int
) -> tuple[np.ndarray, np.ndarray]:
    """Return an exchange's session dates, datetime64[D] [n], and closes, UTC us int64 [n].

    They run from `margin_days` before `first` to as many after `last`, less where the library
    knows no further. Raises `CalendarError` where `first` or `last` is outside what it knows.
    """
    limits = type(open_exchange(code))
    low, high = (
        None if bound is None else bound.date()
        for bound in (limits.bound_min(), limits.bound_max())
    )
    if (low is not None and first < low) or (high is not None and last > high):
        rule = f"lie between {low or 'any date'} and {high or 'any date'} for {code}"
        advice = f"Set start and end in [sessions]. {_ADVICE}"
        raise CalendarError(explain("[sessions]", "dates", rule, f"{first} to {last}", advice))
    margin = dt.timedelta(days=margin_days)
    start = first - margin if low is None else max(first - margin, low)
    end = last + margin if high is None else min(last + margin, high)
    try:
        closes = _calendar(code, start, end).closes
    except Exception as error:  # the library raises errors of many kinds
        raise _cannot_compute(code, error) from error
    dates = closes.index.to_numpy().astype("datetime64[D]")
    return dates, closes.dt.as_unit("us").astype("int64").to_numpy()


def _calendar(code: str, start: str | dt.date, end: str | dt.date) -> Any:
    """The library's calendar; its use of what newer pandas deprecates is not the user's concern."""
    import exchange_calendars

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return exchange_calendars.get_calendar(code, start=start, end=end)


def _cannot_compute(code: str, error: Exception) -> CalendarError:
    found = f"{type(error).__name__}: {error}".splitlines()[0][:200].rstrip(".")
    rule = f"be one that exchange_calendars can compute, which {code} is not for these dates"
    return CalendarError(explain("[sessions]", "calendar", rule, found, _ADVICE))
