"""The plain study that every case alters: small, invented, with a pair that the hunt finds."""

from __future__ import annotations

import datetime as dt
import random

Row = tuple[str, str, str]  # entity, time, type

FIRST_DAY = dt.date(2021, 1, 1)
N_DAYS = 150
ENTITIES = tuple(f"firm{i:02d}" for i in range(12))
TYPES = ("delay", "gap", "halt")
HEADER = ("entity", "time", "type")

SETTINGS: dict[str, dict[str, object]] = {
    "alerts": {"source": "alerts.csv"},
    "events": {"source": "events.csv"},
    "sessions": {
        "calendar": "daily",
        "timezone": "UTC",
        "start": "2021-01-01",
        "end": "2021-05-30",
    },
    "windows": {"lookback": 2, "horizon": 3},
    "mining": {"max_size": 2, "min_triggers": 5, "min_hits": 2},
    "testing": {"placebo": 0, "permutations": 20},
    "holdout": {"share": 0.4, "folds": 0},
}


def day(t: int) -> str:
    """The date of session t."""
    return (FIRST_DAY + dt.timedelta(days=t)).isoformat()


def _drawn() -> tuple[tuple[Row, ...], tuple[Row, ...]]:
    """Alerts and events, each (entity, session, type) once, in order of time."""
    draw = random.Random(8)
    alerts: set[tuple[int, str, str]] = set()
    events: set[tuple[int, str, str]] = set()
    for entity in ENTITIES:
        for t in range(N_DAYS):
            alerts |= {(t, entity, kind) for kind in TYPES if draw.random() < 0.04}
            if draw.random() < 0.02:
                events.add((t, entity, "upset"))
        t = draw.randrange(8)
        while t < N_DAYS:  # delay with gap is mostly followed by an upset
            alerts |= {(t, entity, "delay"), (t, entity, "gap")}
            after = t + draw.randrange(1, 4)
            if draw.random() < 0.8 and after < N_DAYS:
                events.add((after, entity, "upset"))
            t += draw.randrange(12, 24)
    # both logs reach both ends, so that the calendar does not hang on its settings
    for log, kind in ((alerts, "delay"), (events, "upset")):
        log |= {(0, ENTITIES[0], kind), (N_DAYS - 1, ENTITIES[1], kind)}
    made = [
        tuple((entity, f"{day(t)} 10:00:00", kind) for t, entity, kind in sorted(log))
        for log in (alerts, events)
    ]
    return made[0], made[1]


ALERTS, EVENTS = _drawn()
