"""Local clock time to UTC and back, and which timezone a study's naive stamps are in.

A local time in the hour a clock repeats is taken as the earlier of the two; a local time in the
hour a clock skips becomes the first instant after the gap.
"""

from __future__ import annotations

from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from ..settings import Study
from .exchanges import open_exchange

DAY_US = 86_400_000_000
# Clock changes are only looked up inside years 2 to 9998; the same offset holds beyond them.
_LOW_US, _HIGH_US = (
    int(np.datetime64(day, "us").astype(np.int64)) for day in ("0002-01-01", "9999-01-01")
)


def timezone_name(study: Study) -> str:
    """Return the timezone of the study's naive stamps: as set, else the exchange's own, else UTC.

    Raises `CalendarError` for an unknown exchange code.
    """
    if study.sessions.timezone is not None:
        return study.sessions.timezone
    return str(open_exchange(study.sessions.calendar).tz)


def to_utc(local_us: np.ndarray, zone: ZoneInfo) -> np.ndarray:
    """Return UTC microseconds for local clock microseconds, both int64 of any one shape."""
    if zone.key == "UTC":
        return local_us
    inside = np.clip(local_us, _LOW_US, _HIGH_US)
    earlier = np.ones(inside.shape, dtype=bool)
    index = pd.DatetimeIndex(inside.view("M8[us]"))
    utc = index.tz_localize(zone, ambiguous=earlier, nonexistent="shift_forward")
    return np.asarray(_us(utc) + (local_us - inside))


def to_local(utc_us: np.ndarray, zone: ZoneInfo) -> np.ndarray:
    """Return local clock microseconds for UTC microseconds, both int64 of any one shape."""
    if zone.key == "UTC":
        return utc_us
    inside = np.clip(utc_us, _LOW_US, _HIGH_US)
    index = pd.DatetimeIndex(inside.view("M8[us]"), tz="UTC")
    return np.asarray(_us(index.tz_convert(zone).tz_localize(None)) + (utc_us - inside))


def _us(index: pd.DatetimeIndex) -> np.ndarray:
    return np.asarray(index.as_unit("us").asi8)
