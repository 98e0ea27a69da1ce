"""How early a combination is, how often it calls, and how much of what happens it calls.

All on a case (a target's events in one stratum of a segment) and a row of its trigger table.
"""

from __future__ import annotations

import numpy as np

from miner.kernels import profiles as kernels
from miner.units import Case

MONTHS_A_YEAR = 12
DAYS_A_YEAR = 365.25


def lead_times(case: Case, row: int) -> np.ndarray:
    """Sessions from each hit trigger of a combination to the first event after it.

    int32 [hits], each ``1 .. horizon``, in the order of the triggers (entity, then session).
    """
    entity, session = case.unit.triggers.of(row)
    lead = kernels.sessions_to_event(entity, session, *case.events)
    return lead[(lead > 0) & (lead <= case.unit.horizon)]


def events_caught(case: Case, rows: list[int]) -> np.ndarray:
    """Whether each event of the case has a trigger of any of ``rows`` within the horizon before it.

    bool [events], in the order of ``case.events``.
    """
    is_caught = np.zeros(case.events[0].size, dtype=bool)
    for row in rows:
        entity, session = case.unit.triggers.of(row)
        is_caught |= kernels.has_trigger_before(*case.events, entity, session, case.unit.horizon)
    return is_caught


def share_caught(case: Case, row: int) -> float:
    """Share of the case's events that the combination called; NaN without events."""
    is_caught = events_caught(case, [row])
    return float(is_caught.mean()) if is_caught.size else float("nan")


def workload(case: Case, row: int, dates: np.ndarray) -> float:
    """Triggers per calendar month, over the sessions on which a trigger could be judged.

    ``dates`` datetime64[D] [sessions] of the calendar. The months are days / (365.25 / 12) from
    the first judged session to the last, both included.
    """
    return float(case.unit.triggers.count_c[row] / months_judged(case, dates))


def months_judged(case: Case, dates: np.ndarray) -> float:
    """Length in months of the stretch of sessions on which a trigger of the case counts."""
    segment, unit = case.unit.segment, case.unit
    first = max(segment.first, unit.lookback - 1)
    last = max(first, segment.last - unit.horizon)
    days = (dates[last] - dates[first]).astype("timedelta64[D]").astype(int) + 1
    return days * MONTHS_A_YEAR / DAYS_A_YEAR
