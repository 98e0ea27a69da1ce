"""Groups and coverage: overlaps, ends before starts, changes within a day, who is missing."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from .case import Group, answer, unreadable
from .folder import Folder
from .plain import ALERTS, ENTITIES, EVENTS, day

GROUP = Group("Groups and coverage")
add = GROUP.add
SPAN = ("entity", "start", "end", "sector")
SECTOR = {name: "south" if name == ENTITIES[-1] else "north" for name in ENTITIES}
ALWAYS = [(e, "", "", SECTOR[e]) for e in ENTITIES]
N_FIRM00 = {
    name: sum(row[0] == "firm00" for row in rows)
    for name, rows in (("alerts", ALERTS), ("events", EVENTS))
}


def groups(
    rows: Sequence[Sequence[str]], header: Sequence[str] = SPAN, **keys: object
) -> Callable[[Folder], None]:
    """A study with sectors as peers."""

    def write(folder: Folder) -> None:
        folder.rows("groups.csv", rows, header)
        folder.set("groups", **{"source": "groups.csv", "peers": "sector"} | keys)

    return write


def coverage(
    rows: Sequence[Sequence[str]], header: Sequence[str] = ("entity", "type", "start", "end")
) -> Callable[[Folder], None]:
    """A study with a coverage table."""

    def write(folder: Folder) -> None:
        folder.rows("coverage.csv", rows, header)
        folder.set("coverage", source="coverage.csv")

    return write


def others(*rows: tuple[str, str, str, str]) -> list[tuple[str, str, str, str]]:
    """firm00 as given, the others in their sectors for good."""
    return [*rows, *ALWAYS[1:]]


def covered(*rows: tuple[str, str, str, str]) -> list[tuple[str, str, str, str]]:
    """firm00 as given, the others covered throughout."""
    return [*rows, *((e, "", "", "") for e in ENTITIES[1:])]


def split(first_until: str, second_from: str) -> list[tuple[str, str, str, str]]:
    """firm00 goes from north to south."""
    return others(("firm00", "", first_until, "north"), ("firm00", second_from, "", "south"))


def without_firm00(folder: Folder) -> None:
    """What is left when nothing is known of firm00."""
    for name, rows in (("alerts.csv", ALERTS), ("events.csv", EVENTS)):
        folder.rows(name, [row for row in rows if row[0] != "firm00"])
    groups(ALWAYS[1:])(folder)


FIRM00_UNKNOWN = {name: {"used": -n, "unknown entity": n} for name, n in N_FIRM00.items()}
TWO = {"groups": {"rows": 13}}
SWITCH = groups(split(day(49), day(50)))

add(
    "groups for good",
    groups(ALWAYS, ("entity", "start", "end", "sector")),
    answer(groups={"rows": 12}, twin=groups([r[::3] for r in ALWAYS], ("entity", "sector"))),
)
add(
    "a group that changes from one day to the next",
    SWITCH,
    answer(**TWO, twin=groups(split(f"{day(49)} 12:00", day(50)))),
)
add(
    "a group that changes at noon: the later start holds that session",
    groups(split(f"{day(50)} 12:00", f"{day(50)} 12:00")),
    answer(**TWO, twin=SWITCH),
)
add(
    "a group that changes after the close",
    groups(split(f"{day(49)} 18:00", f"{day(49)} 18:00")),
    answer(**TWO, twin=SWITCH),
)
add(
    "groups that overlap: the later start holds",
    groups(others(("firm00", "", "", "north"), ("firm00", day(50), "", "south"))),
    answer(**TWO, twin=SWITCH),
)
add(
    "groups that overlap, rows in another order",
    groups(others(("firm00", day(50), "", "south"), ("firm00", "", "", "north"))[::-1]),
    answer(**TWO, twin=SWITCH),
)
add("a group row twice", groups([*ALWAYS, ALWAYS[0]]), answer(**TWO, twin=groups(ALWAYS)))
add(
    "two groups from the same start, in either order",
    groups(others(("firm00", "", "", "south"), ("firm00", "", "", "north"))),
    answer(
        'groups: 1 entity has rows for sector that start alike and differ ("firm00" from the '
        "start); the one that ends later, else the label sorted last, holds.",
        **TWO,
        twin=groups(others(("firm00", "", "", "north"), ("firm00", "", "", "south"))),
    ),
)
add("a gap between groups", groups(split(day(49), day(80))), answer(**TWO, twin=None))
add(
    "an empty group label",
    groups(others(("firm00", "", "", ""))),
    answer(groups={"rows": 12}, twin=None),
)
add(
    "groups that know nothing of one entity",
    groups(ALWAYS[1:]),
    answer(
        "alerts: 1 entity is in no row of groups or coverage, and what is about it is set "
        'aside: "firm00".',
        alerts=FIRM00_UNKNOWN["alerts"],
        events=FIRM00_UNKNOWN["events"],
        entities=11,
        groups={"rows": 11},
        twin=without_firm00,
    ),
)
add(
    "groups that know an entity in capitals",
    groups([("FIRM00", "", "", "north"), *ALWAYS[1:]]),
    answer(
        'set aside: "firm00" (known: "FIRM00")',
        alerts=FIRM00_UNKNOWN["alerts"],
        events=FIRM00_UNKNOWN["events"],
        groups={"rows": 12},
        twin=None,
    ),
)
add(
    "groups that know nobody",
    groups([("other", "", "", "north")]),
    answer(
        "12 entities are in no row",
        '"firm00", "firm01", "firm02", "firm03", "firm04" and 7 more',
        alerts={"used": -430, "unknown entity": 430},
        events={"used": -120, "unknown entity": 120},
        entities=1,
        groups={"rows": 1},
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "an end before its start",
    groups(others(("firm00", day(50), day(49), "north"))),
    unreadable(
        'groups.csv, row 1, column end: "2021-02-19" is before the start (line 2)', table="groups"
    ),
)
add(
    "an end before its start, set aside",
    groups([*ALWAYS, ("firm00", day(50), day(49), "south")], bad_rows="set-aside"),
    answer("groups: 1", groups={"rows": 13, "unreadable": 1}, twin=groups(ALWAYS)),
)
add(
    "a time that is none",
    groups(others(("firm00", "then", "now", "north"))),
    unreadable(
        'groups.csv, row 1, column start: "then" is no time (line 2)',
        'groups.csv, row 1, column end: "now" is no time (line 2)',
        table="groups",
    ),
)
add(
    "groups before and after the calendar only",
    groups(
        [*ALWAYS, ("firm00", "1999-01-01", "2000-01-01", "x"), ("firm01", "2050-01-01", "", "y")]
    ),
    answer(
        "groups: 2 of 14 rows hold no session of the calendar.",
        groups={"rows": 14},
        twin=groups(ALWAYS),
    ),
)
add(
    "every entity a peer group of its own",
    groups([(e, "", "", e) for e in ENTITIES]),
    answer("leave little to chance", groups={"rows": 12}, twin=None),
)
add(
    "a group column that is not there",
    groups(ALWAYS, peers="industry"),
    "`groups.csv`: `column industry` must be there for table [groups]; got columns `entity`, "
    '`start`, `end`, `sector`. Rename it in the file, or write columns = {industry = "its name '
    'in the file"}.',
)
add(
    "strata with the label all, pooled",
    groups([(e, "", "", "all") for e in ENTITIES], strata="sector", pooled=True),
    '`[groups]`: `column sector` must not hold the label "all" with pooled = true; got "all". '
    "Rename that label.",
)
add(
    "strata without pooling",
    groups(ALWAYS, strata="sector"),
    answer(groups={"rows": 12}, twin=None),
)
add(
    "an empty groups table",
    groups(()),
    "`[groups]`: `rows` must be there; got no rows. Look at groups.csv: nothing stands below the "
    "header.",
)
add(
    "coverage for good",
    coverage([(e, "", "", "") for e in ENTITIES]),
    answer(coverage={"rows": 12}),
)
add(
    "coverage without dates and types",
    coverage([(e,) for e in ENTITIES], ("entity",)),
    answer(coverage={"rows": 12}),
)
add(
    "coverage of every type by name",
    coverage([(e, k, "", "") for e in ENTITIES for k in ("delay", "gap", "halt")]),
    answer(coverage={"rows": 36}),
)
add(
    "coverage that overlaps is its union",
    coverage(covered(("firm00", "", "", day(90)), ("firm00", "", day(40), ""))),
    answer(coverage={"rows": 13}),
)
add(
    "coverage that touches",
    coverage(covered(("firm00", "", "", day(90)), ("firm00", "", day(91), ""))),
    answer(coverage={"rows": 13}),
)
add(
    "coverage that ends before it starts",
    coverage(covered(("firm00", "", day(90), day(40)))),
    unreadable(
        'coverage.csv, row 1, column end: "2021-02-10" is before the start (line 2)',
        table="coverage",
    ),
)
add(
    "coverage by times, the end an hour before the start",
    coverage(covered(("firm00", "", f"{day(9)} 10:00", f"{day(9)} 09:00"))),
    unreadable(
        'coverage.csv, row 1, column end: "2021-01-10 09:00" is before the start (line 2)',
        table="coverage",
    ),
)
add(
    "coverage that begins and ends within one session",
    coverage(covered(("firm00", "", f"{day(9)} 09:00", f"{day(9)} 10:00"))),
    answer(coverage={"rows": 12}, twin=coverage(covered(("firm00", "", day(9), day(9))))),
)
add(
    "coverage from the year 1 to 9999",
    coverage([(e, "", "0001-01-01", "9999-12-31") for e in ENTITIES]),
    answer(coverage={"rows": 12}),
)
add(
    "coverage over before the calendar begins",
    coverage(covered(("firm00", "", "1990-01-01", "1995-01-01"))),
    answer(
        "coverage: 1 of 12 rows hold no session of the calendar.", coverage={"rows": 12}, twin=None
    ),
)
add(
    "coverage of nobody in the logs",
    coverage([("other", "", "", "")]),
    answer(
        "12 entities are in no row",
        alerts={"used": -430, "unknown entity": 430},
        events={"used": -120, "unknown entity": 120},
        entities=1,
        coverage={"rows": 1},
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "coverage on no session at all",
    coverage([(e, "", "1990-01-01", "1995-01-01") for e in ENTITIES]),
    answer(
        "coverage: no entity is covered on any session of the calendar.",
        coverage={"rows": 12},
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "coverage of a type that does not exist",
    coverage([*((e, "", "", "") for e in ENTITIES), ("firm00", "typo", "", "")]),
    answer('coverage: 1 type is no alert type: "typo".', coverage={"rows": 13}),
)
add(
    "coverage of a type in capitals",
    coverage([(e, k, "", "") for e in ENTITIES for k in ("DELAY", "gap", "halt")]),
    answer(
        'coverage: 1 type is no alert type: "DELAY" (known: "delay").',
        coverage={"rows": 36},
        twin=None,
    ),
)
add(
    "a type that is covered nowhere",
    coverage([(e, k, "", "") for e in ENTITIES for k in ("delay", "gap")]),
    answer(
        'alerts: 1 type is in no row of coverage, and so in no combination: "halt".',
        coverage={"rows": 24},
        twin=None,
    ),
)
