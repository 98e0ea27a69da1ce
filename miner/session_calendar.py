"""The study's sessions: which dates they are, when each closes, and which one a stamp belongs to.

A stamp belongs to the first session whose close is at or after it; a bare date to the first session
on or after that date.
"""

from __future__ import annotations

import datetime as dt
import hashlib
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np

from .errors import CalendarError, explain
from .reading.dates import read_session_dates
from .reading.exchanges import exchange_sessions
from .reading.stamps import OPEN_END, OPEN_START
from .reading.zones import DAY_US, timezone_name, to_local, to_utc
from .settings import Study

_MARGIN_DAYS = 40  # longer than any holiday, so that sessions just outside the dates are seen
_MOST_YEARS = 200


@dataclass(frozen=True)
class SessionCalendar:
    """T sessions, numbered from 0.

    dates: datetime64[D] [T]. closes_us: int64 [T], UTC microseconds.
    opens_after_us: close of the session before the first: stamps up to it are outside.
    fingerprint: SHA-256 over dates and closes.
    previous_date: date of the session before the first, by default the day before `dates[0]`.
    """

    name: str
    timezone: str
    dates: np.ndarray
    closes_us: np.ndarray
    opens_after_us: int
    fingerprint: str
    previous_date: np.datetime64 | None = None

    def __len__(self) -> int:
        return len(self.dates)

    def session_of(self, stamp_us: np.ndarray, is_bare_date: np.ndarray) -> np.ndarray:
        """Return the session of each stamp, int32 [n]: -1 before the calendar, T after it.

        stamp_us: int64 [n], UTC; is_bare_date: bool [n], the stamp is a date's local midnight.
        """
        session = np.searchsorted(self.closes_us, stamp_us, side="left").astype(np.int32)
        session[stamp_us <= self.opens_after_us] = -1
        if is_bare_date.any():
            dates = stamp_us[is_bare_date]
            by_date = np.searchsorted(self._midnights_us(self.dates), dates, side="left")
            by_date[dates <= self._midnights_us(self._previous())] = -1
            session[is_bare_date] = by_date
        return session

    def span_start(self, start_us: np.ndarray, is_bare_date: np.ndarray) -> np.ndarray:
        """Return the first session of spans, int32 [n], 0..T (T: starts after the calendar).

        A bare date is the first session on or after it, a time the session it belongs to, an open
        start session 0.
        """
        session = np.maximum(self.session_of(start_us, is_bare_date), 0)
        return np.where(start_us == OPEN_START, 0, session).astype(np.int32)

    def span_end(self, end_us: np.ndarray, is_bare_date: np.ndarray) -> np.ndarray:
        """Return the last session of spans, int32 [n], -1..T-1 (-1: ends before the calendar).

        A bare date is the last session on or before it, a time the session it belongs to, an open
        end session T-1.
        """
        last = len(self) - 1
        session = np.minimum(self.session_of(end_us, is_bare_date), last)
        midnights = self._midnights_us(self.dates)
        by_date = np.searchsorted(midnights, end_us, side="right") - 1
        session = np.where(is_bare_date, by_date, session)
        return np.where(end_us == OPEN_END, last, session).astype(np.int32)

    def index_of_date(self, date: dt.date) -> int:
        """Return the first session on or after a date, T when there is none."""
        return int(np.searchsorted(self.dates, np.datetime64(date, "D"), side="left"))

    def _previous(self) -> np.datetime64:
        if self.previous_date is not None:
            return self.previous_date
        return np.datetime64(self.dates[0] - np.timedelta64(1, "D"), "D")

    def _midnights_us(self, dates: np.ndarray | np.datetime64) -> np.ndarray:
        """Return the UTC microseconds of local midnight on dates, the stamps of bare dates."""
        local_us = np.atleast_1d(dates).astype("M8[us]").astype(np.int64)
        return to_utc(local_us, ZoneInfo(self.timezone))


def calendar_timezone(study: Study) -> str:
    """Return the timezone of the study's naive stamps: as set, else the exchange's own, else UTC.

    Raises `CalendarError` for an unknown exchange code.
    """
    return timezone_name(study)


def build_calendar(study: Study, first_us: int, last_us: int) -> SessionCalendar:
    """Return the sessions from the study's start to its end.

    first_us, last_us: first and last stamp of alerts and events, UTC microseconds; where start or
    end is not set, the sessions these belong to are the first and the last.

    Raises `CalendarError` for an unknown exchange, a wrong csv of dates, or dates without sessions.
    """
    sessions = study.sessions
    timezone = calendar_timezone(study)
    zone = ZoneInfo(timezone)
    first, last = (
        sessions.start or _local_date(first_us, zone),
        sessions.end or _local_date(last_us, zone),
    )
    _check_length(
        first,
        last,
        None if sessions.start else _local_day(first_us, zone),
        None if sessions.end else _local_day(last_us, zone),
    )
    dates, closes_us = _candidates(study, zone, first, last)
    lo = _position(dates, sessions.start) if sessions.start else _session_at(closes_us, first_us)
    if sessions.end:
        hi = _position(dates, sessions.end + dt.timedelta(days=1)) - 1
    else:
        hi = _session_at(closes_us, last_us)
        if int(to_local(np.array([last_us]), zone)[0]) % DAY_US == 0:  # it may be a bare date
            hi = max(hi, _position(dates, last))
        hi = min(hi, len(dates) - 1)
    if lo > hi:
        rule, found = "lie between start and end", f"none from {first} to {last}"
        advice = "Move start or end, or give a calendar that has sessions there."
        raise CalendarError(explain("[sessions]", "sessions", rule, found, advice))
    has_previous = lo > 0
    opens_after_us = int(closes_us[lo - 1]) if has_previous else int(closes_us[0]) - DAY_US
    previous = dates[lo - 1] if has_previous else dates[0] - np.timedelta64(1, "D")
    dates, closes_us = dates[lo : hi + 1], closes_us[lo : hi + 1]
    return SessionCalendar(
        sessions.calendar,
        timezone,
        dates,
        closes_us,
        opens_after_us,
        _hash(dates, closes_us),
        previous,
    )


def _candidates(
    study: Study, zone: ZoneInfo, first: dt.date, last: dt.date
) -> tuple[np.ndarray, np.ndarray]:
    """Return dates [n] and closes in UTC us [n] of sessions from before `first` to after `last`."""
    sessions = study.sessions
    if sessions.kind == "exchange":
        return exchange_sessions(sessions.calendar, first, last, _MARGIN_DAYS)
    default = sessions.close or dt.time(16)
    if sessions.kind == "dates":
        rows = read_session_dates(sessions.calendar, study.folder)
        dates = np.array([date for date, _ in rows], dtype="M8[D]")
        clock_us = np.array([_clock_us(close or default) for _, close in rows], dtype=np.int64)
    else:
        dates = np.arange(
            np.datetime64(first, "D") - _MARGIN_DAYS, np.datetime64(last, "D") + _MARGIN_DAYS
        )
        if sessions.kind == "weekdays":
            dates = dates[np.is_busday(dates)]
        clock_us = np.full(len(dates), _clock_us(default), dtype=np.int64)
    return dates, to_utc(dates.astype("M8[us]").astype(np.int64) + clock_us, zone)


def _check_length(
    first: dt.date,
    last: dt.date,
    first_stamp: np.datetime64 | None,
    last_stamp: np.datetime64 | None,
) -> None:
    """Refuse dates that run backward or on for centuries; a stamp is the date it came from."""
    if last.year - first.year <= _MOST_YEARS and first <= last:
        return
    named = [
        f"the {word} {stamp} is that of the {word} stamp"
        for word, stamp in (("first", first_stamp), ("last", last_stamp))
        if stamp is not None
    ]
    advice = "Set start and end, or correct the stamps"
    advice += f": {' and '.join(named)}." if named else "."
    rule = f"run forward over at most {_MOST_YEARS} years"
    found = " to ".join(
        str(day if stamp is None else stamp)
        for day, stamp in ((first, first_stamp), (last, last_stamp))
    )
    raise CalendarError(explain("[sessions]", "dates", rule, found, advice))


def _local_day(stamp_us: int, zone: ZoneInfo) -> np.datetime64:
    local_us = to_local(np.array([stamp_us]), zone)
    return np.datetime64(local_us.astype("M8[us]").astype("M8[D]")[0], "D")


def _local_date(stamp_us: int, zone: ZoneInfo) -> dt.date:
    """Return the local date of a stamp, brought inside the years a date can have."""
    low, high = np.datetime64("0002-01-01", "D"), np.datetime64("9998-12-31", "D")
    return dt.date.fromisoformat(str(min(max(_local_day(stamp_us, zone), low), high)))


def _position(dates: np.ndarray, date: dt.date) -> int:
    return int(np.searchsorted(dates, np.datetime64(date, "D"), side="left"))


def _session_at(closes_us: np.ndarray, stamp_us: int) -> int:
    return int(np.searchsorted(closes_us, stamp_us, side="left"))


def _clock_us(clock: dt.time) -> int:
    since_midnight = dt.datetime.combine(dt.date.min, clock) - dt.datetime.min
    return since_midnight // dt.timedelta(microseconds=1)


def _hash(dates: np.ndarray, closes_us: np.ndarray) -> str:
    parts = dates.astype("M8[D]").astype("<i8").tobytes() + closes_us.astype("<i8").tobytes()
    return hashlib.sha256(parts).hexdigest()
