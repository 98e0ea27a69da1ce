"""Calendar quarters on a study's sessions: which can be reviewed, where each begins and ends."""

from __future__ import annotations

import datetime as dt
import re
from dataclasses import dataclass, replace

import numpy as np

from miner.by_quarter import quarter_names
from miner.errors import CalendarError, SettingsError, explain
from miner.session_calendar import SessionCalendar, build_calendar
from miner.settings import Study

_SPELLING = re.compile(r"(\d{4})[- ]?[Qq]([1-4])")
MOST_DAYS_SHORT = 10  # no calendar pauses longer at a quarter's end


@dataclass(frozen=True, order=True)
class Quarter:
    """A calendar quarter, with the session it begins with and the one it ends with.

    Where the calendar only covers a part of it, ``first`` and ``last`` are those of the part.
    """

    name: str
    first: int
    last: int


def quarters_of(dates: np.ndarray) -> list[Quarter]:
    """The quarters that sessions lie in, in order; ``dates`` is datetime64[D] [sessions]."""
    names = quarter_names(dates)
    starts = np.flatnonzero(np.append(True, names[1:] != names[:-1]))
    stops = np.append(starts[1:], len(dates))
    return [
        Quarter(str(names[a]), int(a), int(b) - 1)
        for a, b in zip(starts.tolist(), stops.tolist(), strict=True)
    ]


def quarter_to_review(text: str, study: Study, calendar: SessionCalendar) -> Quarter:
    """The quarter that a user named.

    Raises
    ------
    SettingsError : no quarter, or one that has not ended within the study's sessions
    """
    found = _SPELLING.fullmatch(text.strip())
    if not found:
        raise SettingsError(
            explain(
                "review", "quarter", "be a calendar quarter", f'"{text}"', "Write it as 2025Q3."
            )
        )
    name = f"{found[1]}Q{found[2]}"
    known = quarters_of(calendar.dates)
    ended = [q for q in known if q is not known[-1] or has_ended(q, study, calendar)]
    for quarter in ended:
        if quarter.name == name:
            return quarter
    span = f"{ended[0].name} to {ended[-1].name}" if ended else "none"
    raise SettingsError(
        explain(
            "review",
            "quarter",
            f"have ended within the study's sessions ({calendar.dates[0]} to {calendar.dates[-1]})",
            name,
            f"Quarters that can be reviewed: {span}.",
        )
    )


def has_ended(quarter: Quarter, study: Study, calendar: SessionCalendar) -> bool:
    """Whether the calendar holds a quarter's last session."""
    end = last_day(quarter.name)
    last = calendar.dates[quarter.last]
    if last < calendar.dates[-1] or last == np.datetime64(end, "D"):
        return True
    if np.datetime64(end, "D") - last > np.timedelta64(MOST_DAYS_SHORT, "D"):
        return False
    to_end = study.sessions.model_copy(update={"start": last.item(), "end": end})
    try:
        whole = build_calendar(replace(study, sessions=to_end), 0, 0)
    except CalendarError:  # a calendar that does not reach so far does not say
        return False
    return bool(whole.dates[-1] == last)


def last_day(name: str) -> dt.date:
    """The last date of a quarter."""
    year, part = int(name[:4]), int(name[5])
    after = dt.date(year + part // 4, 3 * part % 12 + 1, 1)
    return after - dt.timedelta(days=1)


def session_on(dates: np.ndarray, date: str) -> int:
    """The first session on or after a date; negative before the calendar, in weekdays."""
    day = np.datetime64(date, "D")
    if day < dates[0]:
        return -int(np.busday_count(day, dates[0]))
    return int(np.searchsorted(dates, day))
