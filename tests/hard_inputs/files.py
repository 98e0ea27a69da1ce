"""Files that are missing, empty, cut short, packed, or not what their names say."""

from __future__ import annotations

import os

from .case import Group, answer, unreadable
from .folder import Folder, csv_text
from .plain import ALERTS, EVENTS, HEADER

GROUP = Group("Files")
add = GROUP.add
PLAIN = csv_text(ALERTS)


def moved(folder: Folder, name: str, **keys: object) -> None:
    """Read the alerts from a file of another name."""
    folder.set("alerts", source=name, **keys)
    folder.drop("alerts.csv")


def packed(folder: Folder, name: str = "alerts.csv.gz", keep: float = 1.0) -> None:
    folder.gzip(name, PLAIN.encode(), keep)
    moved(folder, name)


def split_in_two(folder: Folder) -> None:
    folder.rows("in/2.csv", ALERTS[:200])
    folder.rows("in/1.csv", ALERTS[200:])
    moved(folder, "in/*.csv")


def columns_in_another_order(folder: Folder) -> None:
    rows = [(kind, "x,y", entity, stamp) for entity, stamp, kind in ALERTS]
    folder.rows("alerts.csv", rows, ("type", "note", "entity", "time"))


def with_extra(folder: Folder, field: str) -> None:
    """A column nobody asked for, whose first field is this."""
    rows = [(*row, field if k == 0 else "") for k, row in enumerate(ALERTS)]
    folder.rows("alerts.csv", rows, (*HEADER, "note"))


def link_to_nowhere(folder: Folder) -> None:
    folder.drop("alerts.csv")
    os.symlink("gone.csv", folder.path / "alerts.csv")


def a_folder(folder: Folder) -> None:
    folder.drop("alerts.csv")
    folder.rows("alerts.csv/one.csv", ALERTS)


def a_pipe(folder: Folder) -> None:
    folder.drop("alerts.csv")
    os.mkfifo(folder.path / "alerts.csv")


def with_nul(folder: Folder) -> None:
    text = folder.read("study.toml")
    folder.text("study.toml", text.replace("alerts.csv", "al\\u0000erts.csv"))


def renamed(folder: Folder, header: tuple[str, ...], **columns: str) -> None:
    folder.rows("alerts.csv", ALERTS, header)
    if columns:
        folder.set("alerts", columns=columns)


def named(folder: Folder, name: str) -> None:
    folder.rows(name, ALERTS)
    moved(folder, name)


add("the plain study itself", lambda f: None, answer())
add(
    "no settings file",
    lambda f: f.drop("study.toml"),
    "`{folder}/study.toml`: `file` must be a settings file; got No such file or directory. Check "
    "the path; the folder it starts from is ....",
)
add(
    "a folder in place of the settings file",
    lambda f: (f.drop("study.toml"), f.text("study.toml/desk.toml", "")),
    "`{folder}/study.toml`: `file` must be a settings file; got Is a directory. Name the "
    "settings file in that folder: {folder}/study.toml/desk.toml.",
)
add(
    "no file of alerts",
    lambda f: f.drop("alerts.csv"),
    '`[alerts]`: `source` must be a file that exists; got "alerts.csv". Paths are relative to '
    "the folder of the settings, {folder}.",
)
add(
    "no file of events",
    lambda f: f.drop("events.csv"),
    '`[events]`: `source` must be a file that exists; got "events.csv". Paths are relative to '
    "the folder of the settings, {folder}.",
)
add(
    "a source spelled almost like a file that is there",
    lambda f: f.set("alerts", source="Alert.csv"),
    '`[alerts]`: `source` must be a file that exists; got "Alert.csv". Did you mean '
    '"alerts.csv"? Paths are relative to the folder of the settings, {folder}.',
)
add(
    "a source in a folder that is not there",
    lambda f: f.set("alerts", source="data/alerts.csv"),
    '`[alerts]`: `source` must be a file that exists; got "data/alerts.csv". There is no folder '
    "{folder}/data. Paths are relative to the folder of the settings, {folder}.",
)
add(
    "a source that is a folder",
    a_folder,
    '`[alerts]`: `source` must be a file that exists; got "alerts.csv". That is a folder: write '
    '"alerts.csv/*.csv" to read the files in it. Paths are relative to the folder of the '
    "settings, {folder}.",
)
add(
    "a link that leads nowhere",
    link_to_nowhere,
    '`[alerts]`: `source` must be a file that exists; got "alerts.csv". Paths are relative to '
    "the folder of the settings, {folder}.",
)
add(
    "a pipe in place of a file",
    a_pipe,
    '`[alerts]`: `source` must be a file that exists; got "alerts.csv". Paths are relative to '
    "the folder of the settings, {folder}.",
)
add(
    "a glob that matches nothing",
    lambda f: f.set("alerts", source="in/*.csv"),
    '`[alerts]`: `source` must match at least one file; got "in/*.csv". There is no folder '
    "{folder}/in. Paths are relative to the folder of the settings, {folder}.",
)
add("a glob over two files", split_in_two, answer())
add(
    "a source of 5,000 characters",
    lambda f: f.set("alerts", source="a" * 5000 + ".csv"),
    '`[alerts]`: `source` must be a file that exists; got "aaa...". Paths are relative to the '
    "folder of the settings, {folder}.",
)
add(
    "a source with a NUL",
    with_nul,
    '`[alerts]`: `source` must be a file that exists; got "al\\x00erts.csv". Did you mean '
    '"alerts.csv"? Paths are relative to the folder of the settings, {folder}.',
)
add("a file whose name looks like a glob", lambda f: named(f, "a[1].csv"), answer())
add("a file name with blanks and other letters", lambda f: named(f, "Börse 1 (copy).csv"), answer())
add("an ending in capitals", lambda f: named(f, "ALERTS.CSV"), answer())
add("a packed file whose ending is in capitals", lambda f: packed(f, "ALERTS.CSV.GZ"), answer())
add(
    "a spreadsheet",
    lambda f: (f.bytes("a.xlsx", b"PK\x03\x04"), moved(f, "a.xlsx")),
    "`[alerts]`: `source` must be a .csv, .csv.gz or .parquet file, or a database URL; got "
    '"a.xlsx". That is a spreadsheet: export the sheet as csv (UTF-8) or parquet and name that '
    "file.",
)
add(
    "a pickle",
    lambda f: (f.bytes("a.pkl", b"\x80\x04"), moved(f, "a.pkl")),
    "`[alerts]`: `source` must be a .csv, .csv.gz or .parquet file, or a database URL; got "
    '"a.pkl". A pickle can run code and is never read. Export it as csv or parquet and name that '
    "file.",
)
add(
    "a zip of a csv",
    lambda f: (f.bytes("a.csv.zip", b"PK\x03\x04"), moved(f, "a.csv.zip")),
    "`[alerts]`: `source` must be a .csv, .csv.gz or .parquet file, or a database URL; got "
    '"a.csv.zip". Unpack it, or pack the csv with gzip as .csv.gz.',
)
add(
    "an SQLite file without a URL",
    lambda f: (f.bytes("a.db", b"SQL"), moved(f, "a.db")),
    "`[alerts]`: `source` must be a .csv, .csv.gz or .parquet file, or a database URL; got "
    '"a.db". Write source = "sqlite:///a.db" and a query to read that database.',
)
add(
    "a text file",
    lambda f: named(f, "alerts.txt"),
    "`[alerts]`: `source` must be a .csv, .csv.gz or .parquet file, or a database URL; got "
    '"alerts.txt". If it holds columns parted by commas, end its name in .csv; else export it as '
    "csv.",
)
add(
    "a spreadsheet called .csv",
    lambda f: f.bytes("alerts.csv", b"PK\x03\x04\x14\x00\x06\x00\xff\xfe" * 30),
    "`alerts.csv`: `file` must hold what its name says, csv; got a zip file or spreadsheet. "
    "Export it as csv or parquet and name that file.",
)
add(
    "a packed file called .csv",
    lambda f: f.gzip("alerts.csv", PLAIN.encode()),
    "`alerts.csv`: `file` must hold what its name says, csv; got a gzip-packed file. If it is a "
    "packed csv, end its name in .csv.gz.",
)
add(
    "a parquet file called .csv",
    lambda f: (
        f.parquet("a.parquet", entity=["a"]),
        os.replace(f.path / "a.parquet", f.path / "alerts.csv"),
    ),
    "`alerts.csv`: `file` must hold what its name says, csv; got a parquet file. End its name in "
    ".parquet.",
)
add(
    "a csv called .parquet",
    lambda f: named(f, "alerts.parquet"),
    "`alerts.parquet`: `file` must be readable; got a file that does not end as parquet does. "
    "The file may be cut short or damaged: write or fetch it again.",
)
add(
    "a csv called .csv.gz",
    lambda f: named(f, "alerts.csv.gz"),
    "`alerts.csv.gz`: `file` must hold what its name says, csv.gz; got a file that is not "
    "packed. End its name in .csv if it is a csv.",
)
add(
    "a web page called .csv",
    lambda f: f.text("alerts.csv", "<!DOCTYPE html>\n<title>Sign in</title>\n"),
    "`alerts.csv`: `file` must hold what its name says, csv; got a web page. Was a login page "
    "saved in place of the export?",
)
add(
    "JSON called .csv",
    lambda f: f.text("alerts.csv", '{"entity": "a", "time": 1}\n'),
    "`alerts.csv`: `file` must hold what its name says, csv; got JSON. Export it as csv or "
    "parquet and name that file.",
)
add(
    "an empty file",
    lambda f: f.bytes("alerts.csv", b""),
    "`alerts.csv`: `file` must have a header; got an empty file. The first line names the columns.",
)
add(
    "a file of blank lines",
    lambda f: f.text("alerts.csv", "\n\n\r\n"),
    "`alerts.csv`: `file` must have a header; got an empty file. The first line names the columns.",
)
add(
    "a header and no rows",
    lambda f: f.rows("alerts.csv", ()),
    "`[alerts]`: `rows` must be there; got no rows. Look at alerts.csv: nothing stands below the "
    "header.",
)
add(
    "events with a header and no rows",
    lambda f: f.rows("events.csv", ()),
    "`[events]`: `rows` must be there; got no rows. Look at events.csv: nothing stands below the "
    "header.",
)
add(
    "no header",
    lambda f: f.text("alerts.csv", PLAIN.partition("\n")[2]),
    "`alerts.csv`: `file` must have a header; got a first row that looks like data: `firm00`, "
    "`2021-01-01 10:00:00`, `delay`. Put a line that names the columns above it: "
    "entity,type,time.",
)
add("blank lines before the header", lambda f: f.text("alerts.csv", "\n\n" + PLAIN), answer())
add(
    "blank lines between rows",
    lambda f: f.text("alerts.csv", PLAIN.replace("\n", "\n\n")),
    answer(),
)
add("no newline at the end", lambda f: f.text("alerts.csv", PLAIN.rstrip("\n")), answer())
add("CRLF", lambda f: f.text("alerts.csv", csv_text(ALERTS, end="\r\n")), answer())
add("CR only", lambda f: f.text("alerts.csv", csv_text(ALERTS, end="\r")), answer())
add(
    "every field in quotes",
    lambda f: f.text(
        "alerts.csv", "\n".join(",".join(f'"{x}"' for x in row) for row in (HEADER, *ALERTS))
    ),
    answer(),
)
add("columns in another order, and one more", columns_in_another_order, answer())
add(
    "quoted newlines in a column that is not used",
    lambda f: with_extra(f, 'two\nlines\r\nand "quotes", too'),
    answer(),
)
add("a field of 200,000 characters", lambda f: with_extra(f, "x" * 200_000), answer())
add("a field of 10 MB", lambda f: with_extra(f, "x" * 10_000_000), answer(), is_slow=True)
add(
    "an entity of 10 MB",
    lambda f: f.rows("alerts.csv", [*ALERTS, ("x" * 10_000_000, ALERTS[0][1], "halt")]),
    answer(
        alerts={"rows": 1, "used": 1},
        entities=13,
        twin=lambda f: f.rows("alerts.csv", [*ALERTS, ("x", ALERTS[0][1], "halt")]),
    ),
    is_slow=True,
)
add(
    "a quote that is never closed, in a large file",
    lambda f: f.text("alerts.csv", PLAIN.replace("firm03", '"firm03', 1) + "x,y,z\n" * 1_000_000),
    "`alerts.csv`: `file` must have as many fields in every row as in the header; got one other "
    "row. A double quote may never be closed. Put fields that hold a comma in double quotes. "
    "Rows count from 1 below the header.\n"
    "  row 14 (line 15): 1 instead of 3: '\"firm03,2021-01-03 10:00:00,delay\\nfirm03,2021-01-03 "
    "10:00:00,gap\\nfirm03,2021-01-'",
    is_slow=True,
)
add(
    "a header of 10 MB",
    lambda f: f.text("alerts.csv", "x" * 10_000_000 + "\n1\n"),
    "`alerts.csv`: `column entity` must be there for table [alerts]; got columns `xxx...`. "
    'Rename it in the file, or write columns = {entity = "its name in the file"}.\n'
    "`alerts.csv`: `column type` must be there for table [alerts]; got columns `xxx...`. Rename "
    'it in the file, or write columns = {type = "its name in the file"}.\n'
    "`alerts.csv`: `column time` must be there for table [alerts]; got columns `xxx...`. Rename "
    'it in the file, or write columns = {time = "its name in the file"}.',
    is_slow=True,
)
add(
    "a quote that is never closed",
    lambda f: f.text("alerts.csv", PLAIN.replace("firm03", '"firm03', 1)),
    "`alerts.csv`: `file` must have as many fields in every row as in the header; got one other "
    "row. A double quote may never be closed. Put fields that hold a comma in double quotes. "
    "Rows count from 1 below the header.\n"
    "  row 14 (line 15): 1 instead of 3: '\"firm03,2021-01-03 10:00:00,delay\\nfirm03,2021-01-03 "
    "10:00:00,gap\\nfirm03,2021-01-'",
)
add(
    "rows with too few and too many fields",
    lambda f: f.text("alerts.csv", "entity,time,type\na,2021-01-02\n\nb,2021-01-02,x,1,2\n"),
    "`alerts.csv`: `file` must have as many fields in every row as in the header; got 2 other "
    "rows. Put fields that hold a comma in double quotes. Rows count from 1 below the header.\n"
    "  row 1 (line 2): 2 instead of 3: 'a,2021-01-02'\n"
    "  row 2 (line 4): 5 instead of 3: 'b,2021-01-02,x,1,2'",
)
add(
    "semicolons",
    lambda f: f.text("alerts.csv", PLAIN.replace(",", ";")),
    "`alerts.csv`: `header` must hold several columns; got one, `entity;time;type`. Separate the "
    "columns by commas.",
)
add(
    "tabs",
    lambda f: f.text("alerts.csv", PLAIN.replace(",", "\t")),
    "`alerts.csv`: `header` must hold several columns; got one, `entity\\ttime\\ttype`. Separate "
    "the columns by commas.",
)
add(
    "a column name in capitals",
    lambda f: renamed(f, ("entity", "Time", "type")),
    "`alerts.csv`: `column time` must be there for table [alerts]; got columns `entity`, `Time`, "
    '`type`. Rename it in the file, or write columns = {time = "Time"}.',
)
add(
    "blanks around a column name",
    lambda f: renamed(f, ("entity", " time", "type")),
    "`alerts.csv`: `column time` must be there for table [alerts]; got columns `entity`, ` "
    'time`, `type`. Rename it in the file, or write columns = {time = " time"}.',
)
add(
    "columns of other names",
    lambda f: renamed(f, ("ticker", "when", "what")),
    "`alerts.csv`: `column entity` must be there for table [alerts]; got columns `ticker`, "
    '`when`, `what`. Rename it in the file, or write columns = {entity = "its name in the file"}.\n'
    "`alerts.csv`: `column type` must be there for table [alerts]; got columns `ticker`, `when`, "
    '`what`. Rename it in the file, or write columns = {type = "its name in the file"}.\n'
    "`alerts.csv`: `column time` must be there for table [alerts]; got columns `ticker`, `when`, "
    '`what`. Rename it in the file, or write columns = {time = "its name in the file"}.',
)
add(
    "columns of other names, renamed",
    lambda f: renamed(f, ("ticker", "when", "what"), entity="ticker", time="when", type="what"),
    answer(),
)
add(
    "columns whose names change places",
    lambda f: renamed(f, ("type", "time", "entity"), entity="type", type="entity"),
    answer(),
)
add(
    "a column missing whose nearest name is taken by another",
    lambda f: renamed(f, ("entity", "type", "score"), time="types"),
    "`alerts.csv`: `column types` must be there for table [alerts]; got columns `entity`, "
    '`type`, `score`. Rename it in the file, or write columns = {time = "its name in the file"}.',
)
add(
    "a column renamed to one that is not there",
    lambda f: renamed(f, HEADER, entity="Ticker"),
    "`alerts.csv`: `column Ticker` must be there for table [alerts]; got columns `entity`, "
    "`time`, `type`. The file has `entity`: leave entity out of columns.",
)
add(
    "a column twice",
    lambda f: f.rows("alerts.csv", [(*r, "x") for r in ALERTS], (*HEADER, "type")),
    "`alerts.csv`: `header` must name every column once; got `type`. Rename or remove all but one.",
)
add("a packed csv", packed, answer())
add(
    "a packed csv, cut short",
    lambda f: packed(f, keep=0.5),
    "`alerts.csv.gz`: `file` must be readable; got .... The file may be cut short or damaged: "
    "write or fetch it again.",
)
add(
    "a packed csv of which nothing is left",
    lambda f: packed(f, keep=0.0),
    "`alerts.csv.gz`: `file` must have a header; got an empty file. The first line names the "
    "columns.",
)
add(
    "two packed files in one",
    lambda f: (
        f.gzip("a.csv.gz", PLAIN.encode()),
        f.bytes("a.csv.gz", (f.path / "a.csv.gz").read_bytes() * 2),
        moved(f, "a.csv.gz"),
    ),
    unreadable('a.csv.gz, row 431, column time: "time" is no time (line 432)'),
)
add(
    "every alert again in a second file",
    lambda f: (f.rows("in/1.csv", ALERTS), f.rows("in/2.csv", ALERTS), moved(f, "in/*.csv")),
    answer(
        f"alerts: {len(ALERTS)} rows repeat another",
        alerts={"rows": 430, "used": 430, "repeats": 430},
    ),
)
add(
    "rows in another order",
    lambda f: (f.rows("alerts.csv", ALERTS[::-1]), f.rows("events.csv", EVENTS[::-1])),
    answer(),
)
