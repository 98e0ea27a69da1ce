"""Studies of odd shape: one of a kind, none, everything at once, by the million."""

from __future__ import annotations

from collections.abc import Callable

from .case import Group, answer
from .folder import Folder
from .plain import ALERTS, ENTITIES, EVENTS, N_DAYS, TYPES, Row, day

GROUP = Group("Shapes")
add = GROUP.add
N_ALERTS, N_EVENTS = len(ALERTS), len(EVENTS)
EVERY_CELL = [(e, f"{day(t)} 10:00:00", "upset") for t in range(N_DAYS) for e in ENTITIES]


def logs(
    alerts: list[Row] | None = None, events: list[Row] | None = None
) -> Callable[[Folder], None]:
    """Other rows in one log or both."""

    def write(folder: Folder) -> None:
        for name, rows in (("alerts.csv", alerts), ("events.csv", events)):
            if rows is not None:
                folder.rows(name, rows)

    return write


def repeated(times: int) -> Callable[[Folder], None]:
    """Every alert so many times."""

    def write(folder: Folder) -> None:
        header, _, rows = folder.read("alerts.csv").partition("\n")
        folder.text("alerts.csv", f"{header}\n{rows * times}")

    return write


def of_many_types(n: int) -> list[Row]:
    """Each type on one cell; the plain alerts beside them."""
    return [
        *ALERTS,
        *((ENTITIES[k % 12], f"{day(k * 7 % N_DAYS)} 09:00:00", f"rare{k:04d}") for k in range(n)),
    ]


def only(rows: tuple[Row, ...], entity: str) -> list[Row]:
    return [row for row in rows if row[0] == entity]


def one_event(folder: Folder) -> None:
    folder.rows("events.csv", [("firm03", f"{day(50)} 10:00:00", "upset")])


ALWAYS_ON = [(e, f"{day(t)} 11:00:00", "always") for t in range(N_DAYS) for e in ENTITIES]
TARGETS_TWO = [(e, t, ("upset", "rally")[k % 2]) for k, (e, t, _) in enumerate(EVENTS)]
ONE = only(ALERTS, "firm00"), only(EVENTS, "firm00")

add(
    "one entity",
    logs(*ONE),
    answer(
        alerts={k: len(ONE[0]) - N_ALERTS for k in ("rows", "used")},
        events={k: len(ONE[1]) - N_EVENTS for k in ("rows", "used")},
        entities=1,
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "one alert type",
    logs([row for row in ALERTS if row[2] == "delay"]),
    answer(
        alerts={k: sum(r[2] == "delay" for r in ALERTS) - N_ALERTS for k in ("rows", "used")},
        types=1,
        twin=None,
        expect={"counts.family": 1},
    ),
)
add(
    "one alert",
    logs([ALERTS[0]]),
    answer(
        "Family 0 combinations",
        alerts=dict.fromkeys(("rows", "used"), 1 - N_ALERTS),
        types=1,
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "one event",
    one_event,
    answer(
        "only 1 event in discovery; little can be found.",
        "only 0 events in the holdout; little can be confirmed.",
        events=dict.fromkeys(("rows", "used"), 1 - N_EVENTS),
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "one event, on the first session",
    logs(None, [("firm03", f"{day(0)} 10:00:00", "upset")]),
    answer(
        "they cannot be hit",
        events=dict.fromkeys(("rows", "used"), 1 - N_EVENTS),
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "one event, on the last session",
    logs(None, [("firm03", f"{day(149)} 10:00:00", "upset")]),
    answer(
        events=dict.fromkeys(("rows", "used"), 1 - N_EVENTS), twin=None, expect={"counts.rules": 0}
    ),
)
add(
    "no event of the target",
    lambda f: (
        f.rows("events.csv", [*EVENTS, ("nobody", "2031-01-01", "merger")]),
        f.set("events", targets=["merger"]),
    ),
    answer(
        "only 0 events in discovery",
        events={"rows": 1, "outside calendar": 1},
        twin=None,
        entities=13,
        expect={"counts.rules": 0},
    ),
)
add(
    "events of entities that have no alert",
    logs(None, [(e.replace("firm", "other"), t, k) for e, t, k in EVENTS]),
    answer(entities=24, twin=None, expect={"counts.rules": 0}),
)
add(
    "every entity-session an event",
    logs(None, EVERY_CELL),
    answer(
        events={k: len(EVERY_CELL) - N_EVENTS for k in ("rows", "used")},
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "every entity-session an alert of every type",
    logs([(e, t, k) for e, t, _ in EVERY_CELL for k in TYPES]),
    answer(
        alerts={k: 3 * len(EVERY_CELL) - N_ALERTS for k in ("rows", "used")},
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "every entity-session an alert and an event",
    logs([(e, t, k) for e, t, _ in EVERY_CELL for k in TYPES], EVERY_CELL),
    answer(
        alerts={k: 3 * len(EVERY_CELL) - N_ALERTS for k in ("rows", "used")},
        events={k: len(EVERY_CELL) - N_EVENTS for k in ("rows", "used")},
        twin=None,
        expect={"counts.rules": 0},
    ),
)
add(
    "one entity has an event on every session",
    logs(None, [*(r for r in EVENTS if r[0] != "firm05"), *only(tuple(EVERY_CELL), "firm05")]),
    answer(events={k: N_DAYS - len(only(EVENTS, "firm05")) for k in ("rows", "used")}, twin=None),
)
add(
    "all events on one session",
    logs(None, [(e, f"{day(60)} 10:00:00", "upset") for e in ENTITIES]),
    answer(
        events=dict.fromkeys(("rows", "used"), 12 - N_EVENTS), twin=None, expect={"counts.rules": 0}
    ),
)
add(
    "a type that is on every session",
    logs([*ALERTS, *ALWAYS_ON]),
    answer(
        alerts={k: len(ALWAYS_ON) for k in ("rows", "used")},
        types=4,
        twin=None,
        expect={"counts.confirmed": 1},
    ),
)
add("two targets", logs(None, TARGETS_TWO), answer(twin=None))
add(
    "alerts that are the events",
    logs([(e, t, "upset") for e, t, _ in EVENTS]),
    answer(
        alerts=dict.fromkeys(("rows", "used"), N_EVENTS - N_ALERTS),
        types=1,
        twin=None,
        expect={"counts.family": 1},
    ),
)
add(
    "every alert a thousand times, 430,000 rows",
    repeated(1000),
    answer(
        "429,570 rows repeat another", alerts={"rows": 429_570, "used": 429_570, "repeats": 429_570}
    ),
)
add(
    "every alert 10,000 times, 4,300,000 rows",
    repeated(10_000),
    answer(
        "4,299,570 rows repeat another",
        alerts={"rows": 4_299_570, "used": 4_299_570, "repeats": 4_299_570},
    ),
    is_slow=True,
)
add(
    "100 types more, each once",
    logs(of_many_types(100)),
    answer(alerts={"rows": 100, "used": 100}, types=103),
)
add(
    "1,000 types more, each once",
    logs(of_many_types(1000)),
    answer(alerts={"rows": 1000, "used": 1000}, types=1003),
    is_slow=True,
)
add(
    "1,000 types, ten alerts each",
    lambda f: (
        f.rows(
            "alerts.csv",
            [
                *ALERTS,
                *(
                    (ENTITIES[(k + j) % 12], f"{day((k + 13 * j) % N_DAYS)} 09:00:00", f"t{k:04d}")
                    for k in range(1000)
                    for j in range(10)
                ),
            ],
        ),
        f.set("mining", min_triggers=10),
    ),
    answer(alerts={"rows": 10_000, "used": 10_000}, types=1003, twin=None),
    is_slow=True,
)
add(
    "3,000 entities, one alert each",
    logs([*ALERTS, *((f"x{k:04d}", f"{day(k % N_DAYS)} 10:00:00", "halt") for k in range(3000))]),
    answer(alerts={"rows": 3000, "used": 3000}, entities=3012, twin=None),
    is_slow=True,
)
add(
    "60 years of days, data in five months",
    lambda f: f.set("sessions", start="1990-01-01", end="2049-12-31"),
    answer(twin=None),
)
add(
    "201 years of days",
    lambda f: f.set("sessions", start="1900-01-01", end="2101-01-01"),
    "`[sessions]`: `dates` must run forward over at most 200 years; got 1900-01-01 to "
    "2101-01-01. Set start and end, or correct the stamps.",
)
add(
    "five sessions",
    lambda f: f.set("sessions", end="2021-01-05"),
    "`[holdout]`: `share = 0.4` must leave at least 5 sessions on either side of the 5-session "
    "embargo; got 0 before and 2 from it on, of 5 sessions in all. Move the start, or widen "
    "[sessions] start and end.",
)
