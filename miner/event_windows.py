"""Pre-event windows: for every event of a case, the alert types seen before it."""

from __future__ import annotations

import numpy as np

from miner.kernels import windows
from miner.units import Case


def types_before_events(case: Case) -> np.ndarray:
    """bool [events, types]: types seen in the ``horizon + lookback - 1`` sessions before.

    That is the reach of any trigger that this event could make a hit, so the number of windows
    that hold a combination is at least the number of events it hits.
    """
    entity, session = case.events
    unit = case.unit
    return windows.types_before(
        entity, session, unit.segment.panel.alert_ekw, unit.horizon + unit.lookback - 1
    )
