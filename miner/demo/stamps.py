"""Hands on the demo's calendar and the written stamps of what happens on its sessions."""

from __future__ import annotations

from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

TIMEZONE = "Europe/London"
CLOSE_SECONDS = (16 * 60 + 30) * 60
START, END = "2019-01-02", "2023-12-29"

_HOUR = 3600
_FOREIGN_OFFSETS = np.array([0, -5, 9]) * _HOUR


def weekdays(start: str = START, end: str = END) -> NDArray[np.datetime64]:
    """Return the weekdays [sessions] from ``start`` to ``end``, both included, as days."""
    day = np.arange(np.datetime64(start), np.datetime64(end) + 1)
    return day[np.is_busday(day)]


def quarter_phase(day: NDArray[np.datetime64]) -> NDArray[np.float64]:
    """Return how far [days] each date lies in its calendar quarter, in [0, 1)."""
    month = day.astype("datetime64[M]").astype(np.int64)
    first = (month // 3 * 3).astype("datetime64[M]")
    length = (first + 3).astype("datetime64[D]") - first.astype("datetime64[D]")
    phase: NDArray[np.float64] = (day - first.astype("datetime64[D]")) / length
    return phase


def local_stamps(
    rng: np.random.Generator,
    session: NDArray[np.int64],
    day: NDArray[np.datetime64],
    late_share: float,
) -> NDArray[np.datetime64]:
    """Return local stamps [points], in seconds, that belong to the given sessions.

    Most lie in the day up to the close. ``late_share`` of them come after the close of the session
    before; where a weekend lies between, as many again come during it.
    """
    daytime = _seconds(rng, 7 * _HOUR, CLOSE_SECONDS + 1, session.size)
    before = day[np.maximum(session - 1, 0)]
    kind = rng.random(session.size)
    is_late = (kind < late_share) & (session > 0)
    gap = (day[session] - before).astype(np.int64)
    is_weekend = (kind >= late_share) & (kind < 2 * late_share) & (gap > 1)
    midnight: NDArray[np.datetime64] = day[session].astype("datetime64[s]")
    written: NDArray[np.datetime64] = midnight + daytime
    evening = _seconds(rng, CLOSE_SECONDS + 1, 22 * _HOUR, session.size)
    written[is_late] = (before.astype("datetime64[s]") + evening)[is_late]
    idle_day = before + rng.integers(1, np.maximum(gap, 2))
    midday = _seconds(rng, 8 * _HOUR, 20 * _HOUR, session.size)
    written[is_weekend] = (idle_day.astype("datetime64[s]") + midday)[is_weekend]
    return written


def _seconds(
    rng: np.random.Generator, start: int, stop: int, n_draws: int
) -> NDArray[np.timedelta64]:
    return rng.integers(start, stop, n_draws).astype("timedelta64[s]")


def written_stamps(
    rng: np.random.Generator, local: NDArray[np.datetime64], offset_share: float
) -> tuple[NDArray[np.str_], NDArray[np.datetime64]]:
    """Write local stamps as text, a share of them with an offset from UTC, local or foreign.

    Returns
    -------
    text : str [points], ISO 8601; naive ones are in the timezone of the study
    instant : datetime64[s] [points], in UTC
    """
    shift = _local_offsets(local)
    instant = local - shift
    text = np.datetime_as_string(local, unit="s").astype("U25")
    chosen = np.flatnonzero(rng.random(local.size) < offset_share)
    if chosen.size == 0:
        return text, instant
    pick = rng.integers(0, _FOREIGN_OFFSETS.size + 1, chosen.size)
    offset = np.append(_FOREIGN_OFFSETS, 0)[pick]
    is_local = pick == _FOREIGN_OFFSETS.size
    offset[is_local] = shift[chosen][is_local]
    moved = np.datetime_as_string(instant[chosen] + offset, unit="s")
    values, position = np.unique(offset, return_inverse=True)
    suffix = np.array([f"{'-' if v < 0 else '+'}{abs(v) // _HOUR:02d}:00" for v in values])
    text[chosen] = np.strings.add(moved, suffix[position])
    return text, instant


def _local_offsets(local: NDArray[np.datetime64]) -> NDArray[np.int64]:
    """Seconds [points] the timezone is ahead of UTC; no stamp is as early as a change of clocks."""
    day = local.astype("datetime64[D]").astype(np.int64)
    first, zone = int(day.min()), ZoneInfo(TIMEZONE)
    noon = datetime(1970, 1, 1, 12, tzinfo=zone)
    table = np.zeros(int(day.max()) - first + 1, dtype=np.int64)
    for i in np.unique(day - first):
        ahead = (noon + timedelta(days=first + int(i))).utcoffset()
        table[i] = 0 if ahead is None else int(ahead.total_seconds())
    return table[day - first]
