"""Names that look like numbers, missing values, formulas or other names."""

from __future__ import annotations

import unicodedata
from collections.abc import Callable, Mapping

from .case import Group, answer, unreadable
from .folder import Folder
from .plain import ALERTS, ENTITIES, EVENTS, Row

GROUP = Group("Names")
add = GROUP.add
ACUTE, HEBREW, LONG = "firm00\u0301", "\u05d7\u05d1\u05e8\u05d4", "x" * 300


def called(
    names: Mapping[str, str], kinds: Mapping[str, str] | None = None
) -> Callable[[Folder], None]:
    """Give entities and alert types other names, in alerts and events alike."""

    def write(folder: Folder) -> None:
        for name, rows in (("alerts.csv", ALERTS), ("events.csv", EVENTS)):
            folder.rows(name, [
                (names.get(e, e), t, (kinds or {}).get(k, k) if name == "alerts.csv" else k)
                for e, t, k in rows])  # fmt: skip

    return write


def first_rows(change: Callable[[Row], Row], n: int = 1) -> Callable[[Folder], None]:
    """Change the first rows of the alerts only."""
    return lambda folder: folder.rows("alerts.csv", [*map(change, ALERTS[:n]), *ALERTS[n:]])


def entity(name: str) -> Callable[[Folder], None]:
    """Another entity name in the first row of the alerts."""
    return first_rows(lambda row: (name, *row[1:]))


def order_kept(names: tuple[str, ...]) -> dict[str, str]:
    """New names for the first entities, none of which changes the order."""
    return dict(zip(ENTITIES, names, strict=False))


def split_apart(other: Callable[[str], str]) -> Callable[[Folder], None]:
    """The alerts of firm00 under a name that looks the same."""
    return lambda folder: folder.rows(
        "alerts.csv", [(other(e) if e == "firm00" else e, t, k) for e, t, k in ALERTS])  # fmt: skip


APART = "entities: names that differ only in case, blanks or Unicode form count apart: {}."

add(
    "entities NA, null, nan, None, 007, 1e5, TRUE, -, 1.0, 0x1F, inf, N/A",
    called(
        order_kept(
            tuple(
                sorted(
                    (
                        "NA",
                        "null",
                        "nan",
                        "None",
                        "007",
                        "1e5",
                        "TRUE",
                        "-",
                        "1.0",
                        "0x1F",
                        "inf",
                        "N/A",
                    )
                )
            )
        )
    ),
    answer(),
)
add(
    "entities 7, 07, 007 are three",
    called({"firm00": "007", "firm01": "07", "firm02": "7"}),
    answer(),
)
add(
    "entities that are formulas",
    called({"firm00": "+cmd", "firm01": "-2+3", "firm02": "=1+1", "firm03": "@SUM(A1)"}),
    answer(),
)
add(
    "an alert type =1+1",
    called({}, {"gap": "=1+1"}),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
add("an entity of 300 characters", called({"firm11": LONG}), answer())
add(
    "an alert type of 300 characters",
    called({}, {"halt": LONG}),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
add(
    "right-to-left names and types",
    called({"firm11": HEBREW}, {"halt": HEBREW}),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
add(
    "an entity with a newline, a comma and quotes",
    called({"firm11": 'two\nlines, "quoted"'}),
    answer(),
)
add(
    "an alert type with a newline",
    called({}, {"halt": "two\nlines"}),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
add(
    "an alert type with HTML and TOML marks",
    called({}, {"halt": "<b>\"'[x] = {&amp;}</b>"}),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
add("an entity that would steer a terminal", called({"firm11": "zz\x1b[2Jgone\x07"}), answer())
add("an entity with a direction mark", called({"firm11": "zz\u202efdp.exe"}), answer())
add("names like paths", called({"firm00": "../../etc/passwd", "firm11": "nul/con"}), answer())
add(
    "emoji and letters beyond the first plane", called({"firm11": "\U0001f680\U0001d54f"}), answer()
)
add(
    "an alert type that reads like a combination",
    called({}, {"halt": "delay + gap"}),
    '`[alerts]`: `type` must not read like a combination, whose types are joined by " + "; got '
    '"delay + gap". Rename it, say with a slash.',
)
add(
    "alert types + and a +",
    called({}, {"halt": "a +"}),
    '`[alerts]`: `type` must not read like a combination, whose types are joined by " + "; got '
    '"a +". Rename it, say with a slash.',
)
add(
    "an empty entity",
    entity(""),
    unreadable('alerts.csv, row 1, column entity: "" is empty (line 2)'),
)
add(
    "a blank entity",
    entity("   "),
    unreadable('alerts.csv, row 1, column entity: "   " is blank (line 2)'),
)
add(
    "an entity of a no-break space",
    entity("\u00a0"),
    unreadable('alerts.csv, row 1, column entity: "\\xa0" is blank (line 2)'),
)
add(
    "an empty type",
    first_rows(lambda row: (*row[:2], "")),
    unreadable('alerts.csv, row 1, column type: "" is empty (line 2)'),
)
add(
    "empty entities, set aside",
    lambda f: (
        f.rows("alerts.csv", [*ALERTS, ("", "2021-01-04", "halt"), (" ", "?", "halt")]),
        f.set("alerts", bad_rows="set-aside"),
    ),
    answer("alerts: 2 of 432 rows set aside (unreadable)", alerts={"rows": 2, "unreadable": 2}),
)
add(
    "an entity in capitals in the alerts only",
    split_apart(str.upper),
    answer(APART.format('"FIRM00" and "firm00"'), entities=13, twin=split_apart(lambda e: "aaa")),
)
add(
    "an entity with a blank after it in the alerts only",
    split_apart(lambda e: f"{e} "),
    answer(
        APART.format("'firm00 ' and \"firm00\"").replace(
            "'firm00 ' and \"firm00\"", "\"firm00\" and 'firm00 '"
        ),
        entities=13,
        twin=split_apart(lambda e: "aaa"),
    ),
)
add(
    "an entity with a no-break space",
    split_apart(lambda e: "firm\u00a000"),
    answer(entities=13, twin=split_apart(lambda e: "aaa")),
)
add(
    "an entity in full-width letters",
    split_apart(lambda e: "\uff46irm00"),
    answer(
        APART.format("\"firm00\" and '\\uff46irm00'"),
        entities=13,
        twin=split_apart(lambda e: "aaa"),
    ),
)
add(
    "an accent composed in one log and decomposed in the other",
    lambda f: (
        called({"firm11": "zoë"})(f),
        f.text("alerts.csv", unicodedata.normalize("NFD", f.read("alerts.csv"))),
    ),
    answer(APART.format("'zoe\\u0308' and 'zo\\xeb'"), entities=13, twin=None),
)
add(
    "an alert type in capitals in one row",
    first_rows(lambda row: (*row[:2], "DELAY")),
    answer(
        "alert types: names that differ only in case, blanks or Unicode form count apart: "
        '"DELAY" and "delay".',
        types=4,
        twin=None,
    ),
)
add(
    "event types that differ by a blank",
    lambda f: f.rows("events.csv", [*EVENTS, ("firm00", "2021-02-03", "upset ")]),
    answer(
        "event types: names that differ only in case, blanks or Unicode form count apart: "
        "\"upset\" and 'upset '.",
        events={"rows": 1, "used": 1},
        twin=None,
    ),
)
add(
    "an event type that is an alert type too",
    lambda f: f.rows("events.csv", [(e, t, "halt") for e, t, _ in EVENTS]),
    answer(twin=None, expect={"counts.confirmed": 1}),
)
