"""Settings of every wrong kind, at every bound and beyond, and files that are no TOML."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from pathlib import Path

from .case import Group, answer
from .folder import Folder
from .plain import ALERTS, EVENTS, N_DAYS, day

GROUP = Group("Settings")
add = GROUP.add


def key(section: str, **keys: object) -> Callable[[Folder], None]:
    """Change keys of one section."""
    return lambda folder: folder.set(section, **keys)


def raw(section: str, line: str) -> Callable[[Folder], None]:
    """One more line below a heading, as it stands."""
    return lambda folder: folder.raw(section, line)


def instead(old: str, new: str) -> Callable[[Folder], None]:
    """The settings with one text in place of another."""

    def write(folder: Folder) -> None:
        text = folder.read("study.toml")
        if text.count(old) < 1:
            raise ValueError(f"{old!r} does not stand in the settings")
        folder.text("study.toml", text.replace(old, new, 1))

    return write


def dates(text: str, **sessions: object) -> Callable[[Folder], None]:
    """A calendar of dates in a csv."""

    def write(folder: Folder) -> None:
        folder.text("dates.csv", text)
        folder.set("sessions", calendar="dates.csv", **sessions)

    return write


EVERY_DATE = "date\n" + "".join(
    f"2021-{m:02d}-{d:02d}\n"
    for m, n in ((1, 31), (2, 28), (3, 31), (4, 30), (5, 30))
    for d in range(1, n + 1)
)
LONG_DATES = EVERY_DATE.replace("date\n", "date,note\n", 1).replace("-30\n", "-30,month's end\n")
BOUNDS: tuple[tuple[str, str, object], ...] = (
    ("windows", "lookback", 1), ("windows", "horizon", 1), ("windows", "rest", 0),
    ("windows", "rest", 1000), ("mining", "max_size", 1), ("mining", "max_size", 6),
    ("mining", "min_triggers", 1), ("mining", "min_triggers", 10**9), ("mining", "min_hits", 1),
    ("mining", "min_hits", 10**9), ("testing", "fdr", 1e-300), ("testing", "fdr", 0.999999),
    ("testing", "permutations", 0), ("testing", "placebo", 1), ("testing", "seed", 0),
    ("testing", "seed", 2**63 - 1), ("testing", "shuffle", 1), ("holdout", "alpha", 1e-300),
    ("holdout", "embargo", 5), ("holdout", "folds", 50), ("sessions", "close", "23:59:59"),
)  # fmt: skip


def line_instead(section: str, name: str, value: str) -> Callable[[Folder], None]:
    """One key's line as it stands, in place of the plain study's."""

    def write(folder: Folder) -> None:
        folder.settings.get(section, {}).pop(name, None)
        folder.set()
        folder.raw(section, f"{name} = {value}")

    return write


def wrong_values() -> Iterator[tuple[str, str, str, str]]:
    """Section, key, value and message of each line of wrong_values.txt."""
    for line in Path(__file__).with_name("wrong_values.txt").read_text("utf-8").splitlines():
        found = re.fullmatch(r"\[(\w+)\] (\w+) = (.*?) -> (.*)", line)
        if found:
            section, name, value, told = (part.replace("\\n", "\n") for part in found.groups())
            start = f"`{{folder}}/study.toml`: `[{section}] {name}` must "
            yield section, name, value, told if told.startswith("`") else start + told


for section, name, value, message in wrong_values():
    shown = value.replace("\n", " with ")
    add(f"[{section}] {name} = {shown}", line_instead(section, name, value), message)
for section, name, bound in BOUNDS:
    add(f"[{section}] {name} = {bound}, a bound", key(section, **{name: bound}), answer(twin=None))

LATE = {n: -sum(row[1].startswith(day(N_DAYS - 1)) for row in rows)
        for n, rows in (("alerts", ALERTS), ("events", EVENTS))}  # fmt: skip
add(
    "[sessions] close = 00:00, a bound: every stamp is the next session's",
    key("sessions", close="00:00"),
    answer(
        twin=None,
        alerts={"used": LATE["alerts"], "outside calendar": -LATE["alerts"]},
        events={"used": LATE["events"], "outside calendar": -LATE["events"]},
    ),
)
add(
    "defaults in place of what is set",
    lambda f: f.text(
        "study.toml",
        '[alerts]\nsource = "alerts.csv"\n[events]\nsource = '
        '"events.csv"\n[sessions]\ncalendar = "daily"\n',
    ),
    answer(twin=None, expect={"settings.windows.horizon": 5}),
)
add("only the close's hour changed", key("sessions", close="10:00"), answer())
add(
    "the windows longer than the study",
    key("windows", lookback=100, horizon=80),
    "`[holdout]`: `share = 0.4` must leave at least 180 sessions on either side of the "
    "180-session embargo; got 0 before and 60 from it on, of 150 sessions in all. Move the "
    "start, or widen [sessions] start and end.",
)
add(
    "a holdout that leaves nothing to discover",
    key("holdout", share=0.99),
    "`[holdout]`: `share = 0.99` must leave at least 5 sessions on either side of the 5-session "
    "embargo; got 0 before and 148 from it on, of 150 sessions in all. Move the start, or widen "
    "[sessions] start and end.",
)
add(
    "a holdout of one session",
    key("holdout", share=0.005),
    "`[holdout]`: `share = 0.005` must leave at least 5 sessions on either side of the 5-session "
    "embargo; got 144 before and 1 from it on, of 150 sessions in all. Move the start, or widen "
    "[sessions] start and end.",
)
add(
    "a holdout that starts after the end",
    key("holdout", share=None, start="2021-06-30"),
    "`{folder}/study.toml`: `[holdout] start` must not be after the study's end 2021-05-30; got "
    "2021-06-30. Move one of the two, or write share = 0.3 instead.",
)
add(
    "a holdout that starts before the start",
    key("holdout", share=None, start="2020-06-30"),
    "`{folder}/study.toml`: `[holdout] start` must be after the study's start 2021-01-01; got "
    "2020-06-30. Move one of the two, or write share = 0.3 instead.",
)
add(
    "start and share of the holdout",
    key("holdout", start="2021-04-01"),
    "`{folder}/study.toml`: `[holdout]` must have start or share; got both. Leave one of them out.",
)
add("the holdout by its date", key("holdout", share=None, start="2021-04-01"), answer())
add(
    "Westfall-Young with too few draws",
    key("testing", adjust="westfall-young", permutations=18),
    "`{folder}/study.toml`: `[testing] permutations` must be at least 19 with westfall-young at "
    "fdr = 0.05; got 18. With fewer no p-value can be small enough; the default is 2000.",
)
add(
    "the start after the end",
    key("sessions", start="2021-05-30", end="2021-01-01"),
    "`{folder}/study.toml`: `[sessions] start` must be before the end 2021-01-01; got "
    "2021-05-30. Are the two the wrong way round?",
)
add(
    "sessions where no data are",
    key("sessions", start="2031-01-01", end="2031-12-31"),
    answer(
        "set aside (outside calendar)",
        alerts={"used": -430, "outside calendar": 430},
        events={"used": -120, "outside calendar": 120},
        twin=None,
        expect={"counts.family": 0},
    ),
)
add(
    "start and end on one weekend",
    key("sessions", calendar="weekdays", start="2021-01-02", end="2021-01-03"),
    "`[sessions]`: `sessions` must lie between start and end; got none from 2021-01-02 to "
    "2021-01-03. Move start or end, or give a calendar that has sessions there.",
)
add(
    "an exchange's code with a close",
    key("sessions", calendar="XNYS", close="16:00"),
    "`{folder}/study.toml`: `[sessions] close` must not be given with the exchange code XNYS; "
    "got 16:00:00. Leave it out: the exchange's own closes are used, early ones included.",
)
add(
    "an exchange before its calendar begins",
    key("sessions", calendar="XHKG", timezone=None, start="1900-01-01"),
    "`[sessions]`: `dates` must lie between 1960-01-01 and 2049-12-31 for XHKG; got 1900-01-01 "
    "to 2021-05-30. Set start and end in [sessions]. Give a csv of session dates as calendar "
    "instead, or upgrade exchange_calendars.",
)
add("dates in a csv", dates(EVERY_DATE), answer())
add(
    "dates in a csv, with one more column and Windows lines",
    dates(LONG_DATES.replace("\n", "\r\n")),
    answer(),
)
add(
    "dates in a csv that is not there",
    key("sessions", calendar="dats.csv"),
    "`[sessions]`: `calendar` must be a readable csv; got dats.csv: No such file or directory. "
    'Did you mean "alerts.csv"? Paths are relative to the folder of the settings, {folder}.',
)
add(
    "dates out of order",
    dates("date\n2021-01-02\n2021-01-01\n2021-01-01\n"),
    "`dates.csv`: `rows` must hold dates in order, each once; got 2 that do not fit. Rows count "
    "from 1 below the header.\n"
    "  row 2, column date: 2021-01-01 is not after 2021-01-02\n"
    "  row 3, column date: 2021-01-01 is not after 2021-01-02",
)
add(
    "dates that are none",
    dates("date\n2021-01-32\n01/02/2021\n"),
    "`dates.csv`: `rows` must hold dates in order, each once; got 2 that do not fit. Rows count "
    "from 1 below the header.\n"
    '  row 1, column date: "2021-01-32" is no date such as 2019-01-02\n'
    '  row 2, column date: "01/02/2021" is no date such as 2019-01-02',
)
add(
    "dates with a wrong close",
    dates("date,close\n2021-01-02,1pm\n"),
    "`dates.csv`: `rows` must hold dates in order, each once; got 1 that does not fit. Rows "
    "count from 1 below the header.\n"
    '  row 1, column close: "1pm" is no time such as 13:00',
)
add(
    "dates without a header",
    dates("2021-01-02\n2021-01-03\n"),
    "`dates.csv`: `header` must have one column `date`, and at most one `close`; got columns "
    "`2021-01-02`. Put a line date, or date,close, above the dates.",
)
add(
    "dates in an empty csv",
    dates(""),
    "`dates.csv`: `header` must have one column `date`, and at most one `close`; got nothing. "
    "Put a line date, or date,close, above the dates.",
)
add(
    "dates and no rows",
    dates("date\n"),
    "`dates.csv`: `rows` must hold session dates; got no rows. Write one date a line below the "
    "header.",
)
add(
    "no settings at all",
    lambda f: f.text("study.toml", ""),
    "`{folder}/study.toml`: `[alerts] source` must be given; got nothing. Write source = "
    '"alerts.csv" below [alerts].\n'
    "`{folder}/study.toml`: `[events] source` must be given; got nothing. Write source = "
    '"events.csv" below [events].',
)
add(
    "an unknown section",
    raw("windws", "lookback = 2"),
    "`{folder}/study.toml`: `settings` must hold known tables only; got `[windws]`. Did you mean "
    "`windows`?",
)
add(
    "a section that is a value",
    lambda f: f.text("study.toml", 'alerts = "alerts.csv"\n'),
    '`{folder}/study.toml`: `[alerts]` must be a table; got "alerts.csv". Write [alerts] on a '
    "line and its keys below it.\n"
    "`{folder}/study.toml`: `[events] source` must be given; got nothing. Write source = "
    '"events.csv" below [events].',
)
add(
    "a section twice",
    lambda f: f.text("study.toml", f.read("study.toml") + "[windows]\n"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 23, column 9). "
    "Move the keys of both under one heading.",
)
add(
    "a key twice",
    raw("windows", "lookback = 2"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 12, column "
    "13). Keep one of the two lines that set this key.",
)
add(
    "a list of tables",
    instead("[windows]", "[[windows]]"),
    "`{folder}/study.toml`: `[windows]` must be a table; got [{lookback = 2, horizon = 3}]. "
    "Write [windows] on a line and its keys below it.",
)
add(
    "text without quotes",
    instead('"alerts.csv"', "alerts.csv"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 2, column 10). "
    'Text goes in quotes: name = "text".',
)
add(
    "curly quotes",
    instead('"alerts.csv"', "“alerts.csv”"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 2, column 10). "
    'Put plain double quotes in place of the curly ones: name = "text".',
)
add(
    "a quote that is not closed",
    instead('"alerts.csv"', '"alerts.csv'),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 2, column 21). "
    'Close the quotes: name = "text".',
)
add(
    "a path with backslashes",
    instead('"alerts.csv"', '"C:\\data\\alerts.csv"'),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 2, column 15). "
    "Write paths with forward slashes, or between single quotes: 'C:\\data\\a.csv'.",
)
add(
    "True in place of true",
    raw("groups", 'source = "g.csv"\npooled = True'),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 25, column "
    "10). Write true or false in lower case.",
)
add(
    "None in place of a value",
    raw("windows", "rest = None"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 11, column 8). "
    "To leave a key out, delete its line.",
)
add(
    "a decimal comma",
    raw("testing", "fdr = 0,05"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 18, column 8). "
    "Write decimals with a point.",
)
add(
    "a point without a digit",
    raw("testing", "fdr = .05"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 18, column 7). "
    "Write a digit before the point: 0.05.",
)
add(
    "a date with slashes",
    instead('start = "2021-01-01"', "start = 01/01/2021"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 8, column 10). "
    "Write dates as 2019-01-31.",
)
add(
    "a colon in place of an equals sign",
    raw("testing", "fdr: 0.05"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 18, column 4). "
    'Put an equals sign, not a colon, after the key: name = "text".',
)
add(
    "a heading that is not closed",
    instead("[windows]", "[windows"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 10, column 9). "
    "Close the heading with a bracket: [name].",
)
add(
    "a list that is not closed",
    raw("events", 'targets = ["upset"'),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 5, column 1). "
    "Close the list or table with a bracket, there or on the line before.",
)
add(
    "zeros before a number",
    raw("testing", "seed = 007"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 18, column 9). "
    "Write whole numbers without zeros before them.",
)
add(
    "a control character",
    lambda f: f.raw("testing", "seed = 1\x00"),
    "`{folder}/study.toml`: `file` must be valid TOML; got an error: ... (at line 18, column 9). "
    "Delete what cannot be seen on that line: a control character.",
)
add(
    "lists inside lists, 3,000 deep",
    raw("testing", "seed = " + "[" * 3000 + "]" * 3000),
    "`{folder}/study.toml`: `file` must be valid TOML; got lists or tables inside one another "
    "too deep to read. Write lists and tables inside one another a few levels deep at most.",
)
add("a name of 100,000 characters", key("study", name="x" * 100_000), answer())
add("a name that would steer a terminal", raw("study", 'name = "a\\u001b[2Jb"'), answer())
add(
    "six things wrong at once",
    lambda f: (
        f.set("windows", lookback=0, horizon="x"),
        f.set("testing", fdr=2, sed=1),
        f.set("sessions", timezone="Mars"),
        f.set("alerts", bad_rows="x"),
    ),
    "`{folder}/study.toml`: `[alerts] bad_rows` must be 'error' or 'set-aside'; got \"x\". Known: "
    "error, set-aside.\n"
    "`{folder}/study.toml`: `[sessions] timezone` must be a known timezone such as "
    'America/New_York; got "Mars". Write Europe/London.\n'
    "`{folder}/study.toml`: `[windows] lookback` must be a whole number of at least 1; got 0. "
    "Leave it out for the default, 5.\n"
    '`{folder}/study.toml`: `[windows] horizon` must be a whole number of at least 1; got "x". '
    "Write it as a plain number, without quotes.\n"
    "`{folder}/study.toml`: `[testing] fdr` must be a number above 0 and below 1; got 2. Leave "
    "it out for the default, 0.05.\n"
    "`{folder}/study.toml`: `[testing]` must hold known keys only; got `sed`. Did you mean "
    "`seed`?",
)
