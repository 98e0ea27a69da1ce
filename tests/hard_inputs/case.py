"""What a case is: an input, and the right answer or the message it must get."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from .folder import Folder
from .plain import ALERTS, ENTITIES, EVENTS, TYPES

Write = Callable[[Folder], object]

PLAIN_COUNTS: Mapping[str, Mapping[str, int]] = {
    name: {
        "rows": len(rows),
        "unreadable": 0,
        "outside calendar": 0,
        "unknown entity": 0,
        "used": len(rows),
        "repeats": 0,
    }
    for name, rows in (("alerts", ALERTS), ("events", EVENTS))
}


def plainly(folder: Folder) -> None:
    """Leave the plain study as it is."""


@dataclass(frozen=True)
class Answer:
    """A study that can be hunted.

    counts: table -> what is read and set aside, exactly; told: parts of what `check` must say.
    twin: writes the plainly written study with the same candidates and rules, byte by byte; None
    where there is none. expect: more numbers of run.json, by dotted path.
    """

    counts: Mapping[str, Mapping[str, int]]
    entities: int
    types: int
    told: tuple[str, ...] = ()
    twin: Write | None = plainly
    expect: Mapping[str, object] = field(default_factory=dict)


@dataclass(frozen=True)
class Refused:
    """A study that gets one message; `...` stands for what may differ, {folder} for the study's."""

    message: str


@dataclass(frozen=True)
class Case:
    """One row of the table.

    commands: names of commands that take the study, or command lines with {folder} and {study}.
    """

    group: str
    name: str
    write: Write
    outcome: Answer | Refused
    commands: tuple[str, ...] = ("check", "hunt")
    is_slow: bool = False

    @property
    def key(self) -> str:
        """The case's name among all cases."""
        return f"{self.group}: {self.name}"


def answer(
    *told: str,
    alerts: Mapping[str, int] | None = None,
    events: Mapping[str, int] | None = None,
    entities: int = len(ENTITIES),
    types: int = len(TYPES),
    twin: Write | None = plainly,
    expect: Mapping[str, object] | None = None,
    **tables: Mapping[str, int],
) -> Answer:
    """The plain study's answer but for the counts given; alerts={"rows": +3} adds to the plain."""
    counts = {name: dict(count) for name, count in PLAIN_COUNTS.items()}
    for name, change in (("alerts", alerts), ("events", events)):
        for key, more in (change or {}).items():
            counts[name][key] += more
    counts |= {name: {"unreadable": 0, **count} for name, count in tables.items()}
    return Answer(counts, entities, types, told, twin, expect or {})


def unreadable(*cells: str, table: str = "alerts", n: int | None = None) -> str:
    """The message about cells that cannot be read; n: their number where not all are given."""
    n = len(cells) if n is None else n
    found = "1 cell that is not" if n == 1 else f"{n} cells that are not"
    head = (
        f"`[{table}]`: `rows` must be readable; got {found}. Correct them, or write bad_rows = "
        '"set-aside" to leave such rows out and list them. Rows count from 1 below the header.'
    )
    return "\n  ".join([head, *cells])


def bad_time(value: str, why: str) -> str:
    """The message about the time in the first row of the alerts."""
    return unreadable(f'alerts.csv, row 1, column time: "{value}" {why} (line 2)')


class Group:
    """Collects the cases of one group."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.cases: list[Case] = []

    def add(
        self,
        name: str,
        write: Write,
        outcome: Answer | str,
        *,
        commands: tuple[str, ...] = ("check", "hunt"),
        is_slow: bool = False,
    ) -> None:
        """Add a case; a text is the message it must be refused with."""
        what = Refused(outcome) if isinstance(outcome, str) else outcome
        self.cases.append(Case(self.name, name, write, what, commands, is_slow))
