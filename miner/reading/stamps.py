"""Times as they stand in a table, to UTC microseconds.

Text is ISO 8601: a date, or a date and a time after a T or a blank, with optional fractions
(beyond microseconds cut off) and an optional offset (Z, +hh, +hhmm, +hh:mm). Without an offset it
is in the calendar's timezone. Dates and timestamps of any unit are taken as they are.
"""

from __future__ import annotations

from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .zones import DAY_US, to_local, to_utc

OPEN_START = int(np.iinfo(np.int64).min)
OPEN_END = int(np.iinfo(np.int64).max)

_MONTH_DAY = (
    r"(?:(?:0[13578]|1[02])-(?:0[1-9]|[12]\d|3[01])"
    r"|(?:0[469]|11)-(?:0[1-9]|[12]\d|30)"
    r"|02-(?:0[1-9]|1\d|2[0-8]))"
)
_LEAP_YEAR = r"(?:\d\d(?:0[48]|[2468][048]|[13579][26])|(?:[02468][048]|[13579][26])00)"
_DATE = rf"(?:\d{{4}}-{_MONTH_DAY}|{_LEAP_YEAR}-02-29)"
_HOUR, _SIXTY = r"(?:[01]\d|2[0-3])", r"[0-5]\d"
_OFFSET = rf"(?:Z|[+-]{_HOUR}(?::?{_SIXTY})?)"
_STAMP = rf"^{_DATE}(?:[T ]{_HOUR}(?::{_SIXTY}(?::{_SIXTY}(?:\.\d+)?)?)?{_OFFSET}?)?$"
_AWARE = r"[T ].*(?:Z|[+-]\d\d(?::?\d\d)?)$"

_NAIVE_US, _UTC_US = pa.timestamp("us"), pa.timestamp("us", "UTC")
_YEAR_1_US, _YEAR_10000_US = (
    int(np.datetime64(day, "us").astype(np.int64)) for day in ("0001-01-01", "10000-01-01")
)
_UNITS_PER_SECOND = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}


@dataclass(frozen=True)
class Stamps:
    """One column of times, every array [n]; where not `is_ok` the others mean nothing.

    utc_us: int64, UTC microseconds; a bare date is its local midnight.
    is_bare: bool, the value was a date without a time.
    is_midnight: bool, the value is exactly a local midnight, bare dates included.
    is_naive: bool, the value has a time of day but no offset.
    is_ok: bool, the value is a time.
    """

    utc_us: np.ndarray
    is_bare: np.ndarray
    is_midnight: np.ndarray
    is_naive: np.ndarray
    is_ok: np.ndarray


def is_time_type(kind: pa.DataType) -> bool:
    """Tell whether a column of this type can hold times."""
    if pa.types.is_dictionary(kind):
        kind = kind.value_type
    return bool(
        pa.types.is_timestamp(kind)
        or pa.types.is_date(kind)
        or pa.types.is_null(kind)
        or is_text(kind)
    )


def is_text(kind: pa.DataType) -> bool:
    """Tell whether a type is text, or bytes that may be text."""
    tests = (
        pa.types.is_string,
        pa.types.is_large_string,
        pa.types.is_string_view,
        pa.types.is_binary,
        pa.types.is_large_binary,
        pa.types.is_binary_view,
    )
    return any(test(kind) for test in tests)


def read_stamps(column: pa.Array, zone: ZoneInfo) -> Stamps:
    """Return a column of times, of a type `is_time_type` accepts, as UTC microseconds."""
    kind = column.type
    if pa.types.is_dictionary(kind):
        return _take(read_stamps(column.dictionary, zone), column.indices)
    if pa.types.is_null(kind):
        return _from_text(column.cast(pa.string()), zone)
    if pa.types.is_date(kind):
        days, is_ok = _values(column.cast(pa.date32()).cast(pa.int32()))
        return _stamps(days.astype(np.int64) * DAY_US, True, False, is_ok, zone)
    if pa.types.is_timestamp(kind):
        ticks, is_ok = _values(column.cast(pa.int64()))
        us, is_in_range = _to_us(ticks, _UNITS_PER_SECOND[kind.unit])
        return _stamps(us, False, kind.tz is not None, is_ok & is_in_range, zone)
    return _from_text(column.cast(pa.string()), zone)


def _from_text(text: pa.Array, zone: ZoneInfo) -> Stamps:
    """Read text: at once where all rows are alike, else row by row of a kind."""
    for kind, is_aware in ((_NAIVE_US, False), (_UTC_US, True)):
        try:
            us, is_ok = _values(text.cast(kind).cast(pa.int64()))
        except pa.ArrowInvalid:
            continue
        is_bare = not is_aware and _mask(pc.equal(pc.binary_length(text), 10))
        return _stamps(us, is_bare, is_aware, is_ok & (us >= _YEAR_1_US), zone)
    is_ok = _mask(pc.match_substring_regex(text, _STAMP)) & ~_mask(pc.starts_with(text, "0000"))
    is_aware_row = is_ok & _mask(pc.match_substring_regex(text, _AWARE))
    is_bare = is_ok & _mask(pc.equal(pc.binary_length(text), 10))
    text = pc.replace_substring_regex(text, r"(\.\d{6})\d+", r"\1")
    us = np.zeros(len(text), dtype=np.int64)
    for rows, kind in ((is_ok & ~is_aware_row, _NAIVE_US), (is_aware_row, _UTC_US)):
        us[rows] = _values(text.filter(pa.array(rows)).cast(kind).cast(pa.int64()))[0]
    return _stamps(us, is_bare, is_aware_row, is_ok & (us >= _YEAR_1_US), zone)


def _stamps(
    us: np.ndarray,
    is_bare: np.ndarray | bool,
    is_aware: np.ndarray | bool,
    is_ok: np.ndarray,
    zone: ZoneInfo,
) -> Stamps:
    """Finish a column whose `us` is UTC where `is_aware`, local clock time elsewhere."""
    is_bare, is_aware = (np.broadcast_to(mask, us.shape) for mask in (is_bare, is_aware))
    us = np.where(is_ok, us, 0) if not is_ok.all() else us
    if not is_aware.any():
        utc, local = to_utc(us, zone), us
    elif is_aware.all():
        utc, local = us, to_local(us, zone)
    else:
        utc, local = us.copy(), us.copy()
        utc[~is_aware] = to_utc(us[~is_aware], zone)
        local[is_aware] = to_local(us[is_aware], zone)
    return Stamps(utc, is_bare, local % DAY_US == 0, ~(is_bare | is_aware), is_ok)


def _to_us(ticks: np.ndarray, per_second: int) -> tuple[np.ndarray, np.ndarray]:
    """Return microseconds (finer ones cut off), and which of them lie in years 1 to 9999."""
    if per_second > 10**6:
        return ticks // (per_second // 10**6), np.ones(ticks.shape, dtype=bool)
    factor = 10**6 // per_second
    is_ok = (ticks >= _YEAR_1_US // factor) & (ticks < _YEAR_10000_US // factor)
    return np.where(is_ok, ticks, 0) * factor, is_ok


def _values(numbers: pa.Array) -> tuple[np.ndarray, np.ndarray]:
    """Return whole numbers, 0 where null, and which are not null."""
    is_ok = np.asarray(numbers.is_valid())
    return np.asarray(numbers.fill_null(0) if numbers.null_count else numbers), is_ok


def _mask(flags: pa.Array) -> np.ndarray:
    return np.asarray(flags.fill_null(False))


def _take(stamps: Stamps, indices: pa.Array) -> Stamps:
    rows, is_ok = _values(indices)
    if not len(stamps.is_ok):  # an empty dictionary: every row is null
        nothing = np.zeros(len(rows), dtype=bool)
        return Stamps(np.zeros(len(rows), dtype=np.int64), nothing, nothing, nothing, nothing)
    return Stamps(
        stamps.utc_us[rows],
        stamps.is_bare[rows],
        stamps.is_midnight[rows],
        stamps.is_naive[rows],
        stamps.is_ok[rows] & is_ok,
    )
