"""From the prices table to bars on the study's sessions, with everything that looks wrong in them.

A close that doubles or halves overnight is most often a split that was not adjusted for, and would
make the largest "move" of all: it stops the reading unless the settings say what to make of it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner.errors import TableError, explain
from miner.read_tables import PriceTable
from miner.session_calendar import SessionCalendar
from miner.settings import PriceSettings

SUSPECT_FACTOR = 1.8
MOST_SHOWN = 10
SURVIVORS_ENTITIES, SURVIVORS_SESSIONS = 20, 250


@dataclass(frozen=True)
class Prices:
    """Bars by entity and session: float64 [entities, sessions] each, NaN where there are none.

    Attributes
    ----------
    close_et : adjusted closes
    open_et, high_et, low_et, volume_et : the same, None where the table has no such column
    series_et : int32, which unbroken series a close belongs to (numbered within the entity);
        -1 where there is no close
    counts : rows used, and rows set aside by reason
    warnings : what looks wrong, in words
    """

    close_et: np.ndarray
    open_et: np.ndarray | None
    high_et: np.ndarray | None
    low_et: np.ndarray | None
    volume_et: np.ndarray | None
    series_et: np.ndarray
    counts: dict[str, int]
    warnings: tuple[str, ...]


def place_prices(
    table: PriceTable,
    entity_names: Sequence[str],
    calendar: SessionCalendar,
    settings: PriceSettings,
) -> Prices:
    """Put the rows of the prices table on the calendar, for the entities given.

    Rows on dates without a session and rows about other entities are left out and counted. An
    entity's series is broken where more than ``largest_gap`` sessions have no price, and with
    ``jumps = "break"`` where a close is a suspicious multiple of the one before.

    Raises
    ------
    TableError : two rows for one entity and session, or closes that look like unadjusted splits
    """
    place = {name: i for i, name in enumerate(entity_names)}
    code = np.array([place.get(name, -1) for name in table.entity_names] or [-1], dtype=np.int64)
    entity = code[table.entity_code]
    session = np.searchsorted(calendar.dates, table.date).astype(np.int64)
    inside = np.minimum(session, len(calendar.dates) - 1)
    is_session = calendar.dates[inside] == table.date
    kept = is_session & (entity >= 0)
    entity, session = entity[kept], session[kept]
    shape = len(entity_names), len(calendar.dates)
    _refuse_repeats(entity, session, entity_names, calendar)

    def grid(column: str) -> np.ndarray | None:
        if column not in table.values:
            return None
        value_et = np.full(shape, np.nan)
        value_et[entity, session] = table.values[column][kept]
        return value_et

    close_et = grid("close")
    if close_et is None:  # the reader never hands on a table without closes
        raise TypeError("prices without closes")
    series_et, jumps = _series(close_et, settings)
    if settings.jumps == "error":
        _refuse_jumps(jumps, close_et, entity_names, calendar)
    counts = {
        "rows": table.rows_read,
        "unreadable": len(table.set_aside),
        "not a session": int((~is_session).sum()),
        "unknown entity": int((is_session & (code[table.entity_code] < 0)).sum()),
        "used": int(kept.sum()),
        "jumps": int(jumps[0].size),
    }
    return Prices(
        close_et,
        grid("open"),
        grid("high"),
        grid("low"),
        grid("volume"),
        series_et,
        counts,
        tuple(_warnings(close_et, counts)),
    )


def _refuse_repeats(
    entity: np.ndarray, session: np.ndarray, names: Sequence[str], calendar: SessionCalendar
) -> None:
    key = entity * len(calendar.dates) + session
    cells, times = np.unique(key, return_counts=True)
    repeated = cells[times > 1]
    if repeated.size:
        e, t = divmod(int(repeated[0]), len(calendar.dates))
        raise TableError(
            explain(
                "[prices]",
                "rows",
                "be one for an entity and date",
                f"{int(times.max())} for {names[e]} on {calendar.dates[t]}, and "
                f"{repeated.size:,} such dates in all",
                "Remove all but one.",
            )
        )


def _series(
    close_et: np.ndarray, settings: PriceSettings
) -> tuple[np.ndarray, tuple[np.ndarray, np.ndarray]]:
    """Number the unbroken series of each entity; the cells (entity, session) of suspect jumps."""
    entity, session = np.nonzero(~np.isnan(close_et))
    close = close_et[entity, session]
    series_et = np.full(close_et.shape, -1, dtype=np.int32)
    if not entity.size:
        return series_et, (entity, session)
    is_same = entity[1:] == entity[:-1]
    factor = close[1:] / close[:-1]
    is_jump = is_same & ((factor >= SUSPECT_FACTOR) | (factor <= 1 / SUSPECT_FACTOR))
    is_broken = ~is_same | (session[1:] - session[:-1] - 1 > settings.largest_gap)
    if settings.jumps == "break":
        is_broken |= is_jump
    number = np.concatenate([[0], np.cumsum(is_broken)])
    first_of_entity = number[np.searchsorted(entity, entity, side="left")]
    series_et[entity, session] = number - first_of_entity
    at = 1 + np.flatnonzero(is_jump)
    return series_et, (entity[at], session[at])


def _refuse_jumps(
    jumps: tuple[np.ndarray, np.ndarray],
    close_et: np.ndarray,
    names: Sequence[str],
    calendar: SessionCalendar,
) -> None:
    if not jumps[0].size:
        return
    lines = []
    for e, t in zip(*(part[:MOST_SHOWN].tolist() for part in jumps), strict=True):
        before = close_et[e, :t][~np.isnan(close_et[e, :t])][-1]
        lines.append(f"  {names[e]}, {calendar.dates[t]}: {before:g} to {close_et[e, t]:g}")
    if jumps[0].size > MOST_SHOWN:
        lines.append(f"  and {jumps[0].size - MOST_SHOWN:,} more")
    message = explain(
        "[prices]",
        "close",
        f"not change by a factor of {SUSPECT_FACTOR} or more from one row to the next",
        f"{jumps[0].size:,} such changes, as a split makes that was not adjusted for",
        'Adjust the prices; or write jumps = "keep" if these are real, jumps = "break" to start '
        "a series anew at each.",
    )
    raise TableError("\n".join([message, *lines]))


def _warnings(close_et: np.ndarray, counts: dict[str, int]) -> list[str]:
    is_there_et = ~np.isnan(close_et)
    has_any = is_there_et.any(axis=1)
    found = []
    if not has_any.all():
        found.append(
            f"[prices] {int((~has_any).sum()):,} of {has_any.size:,} entities have no price: no "
            "move of theirs can be seen and no trade in them counted."
        )
    if counts["not a session"]:
        found.append(
            f"[prices] {counts['not a session']:,} rows lie on dates that are no session of the "
            "study; they are left out, and the sessions before the first cannot be looked back at."
        )
    n_sessions = close_et.shape[1]
    if has_any.sum() >= SURVIVORS_ENTITIES and n_sessions >= SURVIVORS_SESSIONS:
        rows = is_there_et[has_any]
        last = n_sessions - 1 - np.argmax(rows[:, ::-1], axis=1)
        if (last >= last.max() - 5).all():
            found.append(
                f"[prices] all {int(has_any.sum()):,} price series reach the end: the table seems "
                "to hold survivors only, which flatters every long trade."
            )
        first = np.argmax(rows, axis=1)
        share = 1 - rows.sum() / (last - first + 1).sum()
        if share > 0.01:
            found.append(
                f"[prices] {100 * share:.1f}% of the sessions inside the series have no price "
                "(halts or missing days)."
            )
    return found
