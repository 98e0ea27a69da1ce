"""Times: how they are written, where clocks change, and the ends of time."""

from __future__ import annotations

from collections.abc import Callable

from .case import Group, answer, bad_time, unreadable
from .folder import Folder
from .plain import ALERTS, EVENTS, N_DAYS, day

GROUP = Group("Times")
add = GROUP.add
N_ALERTS, N_EVENTS = len(ALERTS), len(EVENTS)


def written(change: Callable[[str], str], rows: int = N_ALERTS) -> Callable[[Folder], None]:
    """Write the times of the first `rows` alerts another way."""

    def write(folder: Folder) -> None:
        changed = [(e, change(t), k) for e, t, k in ALERTS[:rows]]
        folder.rows("alerts.csv", [*changed, *ALERTS[rows:]])

    return write


def one(time: str) -> Callable[[Folder], None]:
    """Write the first alert's time another way."""
    return written(lambda _: time, 1)


def more(*times: str, **sessions: object) -> Callable[[Folder], None]:
    """Add alerts of firm00, type halt, at these times."""

    def write(folder: Folder) -> None:
        folder.rows("alerts.csv", [*ALERTS, *(("firm00", time, "halt") for time in times)])
        if sessions:
            folder.set("sessions", **sessions)

    return write


def set_aside_where_bad(folder: Folder) -> None:
    times = ("yesterday", "03/01/2021", "1609495200", "")
    more(*times)(folder)
    folder.set("alerts", bad_rows="set-aside")


def in_new_york(*times: str) -> Callable[[Folder], None]:
    """Add alerts in New York's clock time; the plain ones keep their instants."""

    def write(folder: Folder) -> None:
        for name, rows in (("alerts.csv", ALERTS), ("events.csv", EVENTS)):
            aware = [(e, f"{t}Z", k) for e, t, k in rows]
            added = [("firm00", time, "halt") for time in times] if name == "alerts.csv" else []
            folder.rows(name, [*aware, *added])
        folder.set("sessions", timezone="America/New_York", close="16:00")

    return write


def without_calendar_ends(folder: Folder) -> None:
    folder.set("sessions", start=None, end=None)


def far_without_ends(time: str) -> Callable[[Folder], None]:
    """A stray stamp, and a calendar that follows the data."""

    def write(folder: Folder) -> None:
        more(time)(folder)
        without_calendar_ends(folder)

    return write


def naive_in_exchange_time(folder: Folder) -> None:
    """No timezone is set, so that stamps are taken to be in UTC unseen."""
    folder.set("sessions", timezone=None)


def moved_by_a_year(folder: Folder) -> None:
    """The study around 29 February 2024, one day later in the year."""
    for name, rows in (("alerts.csv", ALERTS), ("events.csv", EVENTS)):
        folder.rows(name, [(e, leap(t), k) for e, t, k in rows])
    folder.set("sessions", start="2024-01-01", end="2024-05-29")


LEAP_DAYS = [
    f"2024-{m:02d}-{d:02d}"
    for m, n in ((1, 31), (2, 29), (3, 31), (4, 30), (5, 29))
    for d in range(1, n + 1)
]
NUMBER_OF_DAY = {day(t): t for t in range(N_DAYS)}


def leap(stamp: str) -> str:
    return LEAP_DAYS[NUMBER_OF_DAY[stamp[:10]]] + stamp[10:]


OUTSIDE = "alerts: {} of {} rows set aside (outside calendar)"
SLASHES = ("02/01/2021", "2/1/21 10:00", "2021/01/02")

add("ISO 8601 with a T", written(lambda t: t.replace(" ", "T")), answer())
add("minutes only", written(lambda t: t[:16]), answer())
add("hours only", written(lambda t: t[:13]), answer())
add("nanoseconds", written(lambda t: f"{t}.123456789"), answer())
add("UTC, told by a Z", written(lambda t: f"{t}Z"), answer())
add(
    "another offset on every row",
    lambda f: f.rows(
        "alerts.csv",
        [
            (e, f"{t[:10]}T{10 + k % 5:02d}:00:00+{k % 5:02d}:00", kind)
            for k, (e, t, kind) in enumerate(ALERTS)
        ],
    ),
    answer(),
)
add(
    "some rows with an offset and some without",
    written(lambda t: f"{t}+00:00", 100),
    answer(
        "alerts: 330 stamps have no offset and are taken to be in UTC, 100 have one. Give all "
        "of them an offset."
    ),
)
add(
    "no offset, and no timezone in the settings",
    naive_in_exchange_time,
    answer(
        f"alerts: {N_ALERTS} stamps have a time of day and no offset; they are taken to be in "
        'UTC. If that is right, write timezone = "UTC" in [sessions].'
    ),
)
add(
    "bare dates",
    written(lambda t: t[:10]),
    answer("alerts: every stamp is midnight or a bare date, so each counts in that date's session"),
)
add("midnights", written(lambda t: t[:10] + " 00:00:00"), answer("every stamp is midnight"))
add(
    "a third of them bare dates",
    written(lambda t: t[:10], 150),
    answer(
        f"alerts: 150 of {N_ALERTS} stamps are midnight or bare dates and count in that date's "
        "session, even if they came after the close."
    ),
)
add(
    "to the second before and at the close",
    written(lambda t: t[:10] + (" 16:00:00" if t[9] in "02468" else " 15:59:59")),
    answer(),
)
add(
    "a second after the close: the next session's",
    lambda f: f.rows(
        "alerts.csv",
        [
            (e, t if t[:10] == day(0) else f"{day(NUMBER_OF_DAY[t[:10]] - 1)} 16:00:01", k)
            for e, t, k in ALERTS
        ],
    ),
    answer(),
)
add("no time at all", one("yesterday"), bad_time("yesterday", "is no time"))
add("an empty time", one(""), bad_time("", "is empty"))
add("a blank time", one("  "), bad_time("  ", "is blank"))
add(
    "a blank after a time",
    written(lambda t: f"{t} "),
    unreadable(
        'alerts.csv, row 1, column time: "2021-01-01 10:00:00 " is no time: it has blanks around '
        "it (line 2)",
        "...",
        n=430,
    ),
)
for text in SLASHES:
    hint = "is no time: write dates as 2020-01-31, year first and with hyphens"
    add(f"slashes, {text}", one(text), bad_time(text, hint))
add(
    "points, 02.01.2021",
    one("02.01.2021"),
    bad_time("02.01.2021", "is no time: write dates as 2020-01-31, year first and with hyphens"),
)
add(
    "the month in letters, 2-Jan-2021",
    one("2-Jan-2021"),
    bad_time("2-Jan-2021", "is no time: write dates as 2020-01-31, year first and with hyphens"),
)
add(
    "one digit, 2021-1-2",
    one("2021-1-2"),
    bad_time("2021-1-2", "is no time: write month and day with two digits, as 2020-01-31"),
)
add(
    "no hyphens, 20210102",
    one("20210102"),
    bad_time("20210102", "is no time: write it as 2021-01-02"),
)
add(
    "seconds since 1970",
    one("1609495200"),
    bad_time(
        "1609495200",
        "is no time: if it is seconds since 1970 it is 2021-01-01T10:00:00Z; write it so",
    ),
)
add(
    "milliseconds since 1970",
    one("1609495200000"),
    bad_time(
        "1609495200000",
        "is no time: if it is milliseconds since 1970 it is 2021-01-01T10:00:00Z; write it so",
    ),
)
add(
    "microseconds since 1970",
    one("1609495200000000"),
    bad_time(
        "1609495200000000",
        "is no time: if it is microseconds since 1970 it is 2021-01-01T10:00:00Z; write it so",
    ),
)
add(
    "nanoseconds since 1970",
    one("1609495200000000000"),
    bad_time(
        "1609495200000000000",
        "is no time: if it is nanoseconds since 1970 it is 2021-01-01T10:00:00Z; write it so",
    ),
)
add(
    "a spreadsheet's day number, 44197",
    one("44197"),
    bad_time(
        "44197", "is no time: if it is a spreadsheet's day number it is 2021-01-01; write it so"
    ),
)
add(
    "a year alone",
    one("2021"),
    bad_time("2021", "is no time: a year alone is too little: write a date"),
)
add(
    "29 February of a year without one",
    one("2021-02-29 10:00"),
    bad_time("2021-02-29 10:00", "is no time: there is no such date, hour or offset"),
)
add("31 April", one("2021-04-31"), bad_time("2021-04-31", "is no time: there is no such date"))
add("month 13", one("2021-13-01"), bad_time("2021-13-01", "is no time: there is no such date"))
add(
    "24:00",
    one("2021-01-02 24:00"),
    bad_time("2021-01-02 24:00", "is no time: midnight is 00:00 of the next date"),
)
add(
    "a leap second",
    one("2021-01-02 23:59:60"),
    bad_time("2021-01-02 23:59:60", "is no time: a minute's last second is 59"),
)
add(
    "a 12-hour clock",
    one("2021-01-02 3:15 pm"),
    bad_time(
        "2021-01-02 3:15 pm", "is no time: write times on the 24-hour clock, as 2020-01-31 16:00"
    ),
)
add(
    "a timezone in letters",
    one("2021-01-02 10:00 EST"),
    bad_time(
        "2021-01-02 10:00 EST", "is no time: write the offset in numbers, as 2020-01-31T16:00-05:00"
    ),
)
add(
    "a blank before the offset",
    one("2021-01-02 10:00 +01:00"),
    bad_time("2021-01-02 10:00 +01:00", "is no time: leave no blank before the offset"),
)
add(
    "a comma before the fraction",
    one("2021-01-02 10:00:00,5"),
    bad_time("2021-01-02 10:00:00,5", "is no time: write fractions of a second after a point"),
)
add("the year 0", one("0000-01-01"), bad_time("0000-01-01", "is no time: there is no such date"))
add(
    "the year 12021",
    one("12021-01-01"),
    bad_time("12021-01-01", "is no time: years run from 0001 to 9999"),
)
add(
    "a time that would steer a terminal", one("\x1b[2J2021"), bad_time("\\x1b[2J2021", "is no time")
)
add(
    "bad times, set aside",
    set_aside_where_bad,
    answer("alerts: 4 of 434 rows set aside (unreadable)", alerts={"rows": 4, "unreadable": 4}),
)
add(
    "nothing but bad times, set aside",
    lambda f: (
        f.rows("alerts.csv", [("a", "never", "x")] * 3),
        f.set("alerts", bad_rows="set-aside"),
    ),
    "`[alerts]`: `rows` must be there; got 3 rows, none of them readable. Look at alerts.csv: "
    'bad_rows = "error" lists what is wrong.',
)
add(
    "29 February of a leap year",
    moved_by_a_year,
    answer(twin=lambda f: None, expect={"calendar.last": "2024-05-29"}),
)
add(
    "an hour the clock skips, and one it repeats",
    in_new_york("2021-03-14 02:30:00", "2021-03-14 03:00:00"),
    answer(alerts={"rows": 2, "used": 2, "repeats": 1}, twin=in_new_york("2021-03-14 07:30:00Z")),
)
add(
    "alerts before the first session and after the last",
    more("2020-12-01 10:00", "2021-05-30 16:00:01", "2021-06-02", "2031-01-01 10:00"),
    answer(OUTSIDE.format(4, 434), alerts={"rows": 4, "outside calendar": 4}),
)
add(
    "a stamp in 1677",
    more("1677-09-21 00:12:44"),
    answer(OUTSIDE.format(1, 431), alerts={"rows": 1, "outside calendar": 1}),
)
add(
    "a stamp in 2262",
    more("2262-04-11 23:47:17"),
    answer(OUTSIDE.format(1, 431), alerts={"rows": 1, "outside calendar": 1}),
)
add(
    "a stamp in the year 1 and one in 9999",
    more("0001-01-01", "9999-12-31 23:59:59.999999"),
    answer(OUTSIDE.format(2, 432), alerts={"rows": 2, "outside calendar": 2}),
)
add(
    "the ends of time with a timezone",
    in_new_york("0001-01-01", "9999-12-31 23:59:59.999999"),
    answer(alerts={"rows": 2, "outside calendar": 2}, twin=in_new_york()),
)
add(
    "a calendar that follows the data",
    without_calendar_ends,
    answer(expect={"calendar.first": "2021-01-01", "calendar.last": "2021-05-30"}),
)
for stray, ends in (
    ("1677-09-21", ("1677-09-21", "2021-05-30")), ("2262-04-11", ("2021-01-01", "2262-04-11")),
    ("0001-01-01", ("0001-01-01", "2021-05-30")),
    ("9999-12-31 23:59", ("2021-01-01", "9999-12-31")),
):  # fmt: skip
    add(
        f"a calendar that follows a stray stamp, {stray}",
        far_without_ends(stray),
        f"`[sessions]`: `dates` must run forward over at most 200 years; got {ends[0]} to "
        f"{ends[1]}. Set start and end, or correct the stamps: the first {ends[0]} is that of the "
        f"first stamp and the last {ends[1]} is that of the last stamp.",
    )
add(
    "all alerts after the last session",
    lambda f: f.rows("alerts.csv", [(e, t.replace("2021", "2031"), k) for e, t, k in ALERTS]),
    answer(
        OUTSIDE.format(N_ALERTS, N_ALERTS),
        "Family 0 combinations",
        alerts={"used": -N_ALERTS, "outside calendar": N_ALERTS},
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "all events after the last session",
    lambda f: f.rows("events.csv", [(e, t.replace("2021", "2031"), k) for e, t, k in EVENTS]),
    answer(
        "events: 120 of 120 rows set aside",
        "only 0 events in discovery",
        events={"used": -N_EVENTS, "outside calendar": N_EVENTS},
        twin=None,
        expect={"counts.rules": 0},
    ),
)
