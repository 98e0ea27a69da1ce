"""Parquet files: damage, types that cannot be, and types that can."""

from __future__ import annotations

import datetime as dt
import decimal
from collections.abc import Callable

import pyarrow as pa

from .case import Group, answer, unreadable
from .folder import Folder
from .plain import ALERTS

GROUP = Group("Parquet")
add = GROUP.add

ENTITY, TIME, TYPE = (pa.array(column) for column in zip(*ALERTS, strict=True))
STAMPS = [dt.datetime.fromisoformat(stamp) for _, stamp, _ in ALERTS]


def stored(**changed: object) -> Callable[[Folder], None]:
    """Write the alerts as parquet, some columns as given."""

    def write(folder: Folder) -> None:
        folder.parquet("alerts.parquet", **{"entity": ENTITY, "time": TIME, "type": TYPE} | changed)
        folder.set("alerts", source="alerts.parquet")

    return write


def cut(keep: float) -> Callable[[Folder], None]:
    """Write only the first part of the file."""

    def write(folder: Folder) -> None:
        stored()(folder)
        whole = (folder.path / "alerts.parquet").read_bytes()
        folder.bytes("alerts.parquet", whole[: int(keep * len(whole))])

    return write


def with_hole(folder: Folder) -> None:
    """The middle of the file overwritten."""
    stored()(folder)
    whole = bytearray((folder.path / "alerts.parquet").read_bytes())
    whole[40:400] = b"\xa5" * 360
    folder.bytes("alerts.parquet", bytes(whole))


def numbered(folder: Folder) -> None:
    """The alerts as csv, entities numbered."""
    folder.rows("alerts.csv", [(str(NUMBER[e]), t, k) for e, t, k in ALERTS])


NUMBER = {name: 100 + k for k, name in enumerate(sorted({row[0] for row in ALERTS}))}
NUMBERS = pa.array([NUMBER[row[0]] for row in ALERTS])
NANO = [int(s.replace(tzinfo=dt.UTC).timestamp()) * 10**9 for s in STAMPS]

add("text columns", stored(), answer())
add("large text", stored(entity=ENTITY.cast(pa.large_string())), answer())
add("text as bytes", stored(type=TYPE.cast(pa.binary())), answer())
add(
    "bytes that are no text",
    stored(type=pa.array([b"\xff\xfe"] * len(ALERTS))),
    "`alerts.parquet`: `column type` must be UTF-8 text; got .... Write it as UTF-8.",
)
add(
    "categories",
    stored(
        entity=ENTITY.dictionary_encode(),
        type=TYPE.dictionary_encode(),
        time=TIME.dictionary_encode(),
    ),
    answer(),
)
for unit in ("s", "ms", "us", "ns"):
    add(f"timestamps in {unit}", stored(time=pa.array(STAMPS, pa.timestamp(unit))), answer())
add(
    "timestamps with a timezone",
    stored(time=pa.array(STAMPS, pa.timestamp("ms", "UTC")).cast(pa.timestamp("ms", "Asia/Tokyo"))),
    answer(),
)
add(
    "dates",
    stored(time=pa.array([s.date() for s in STAMPS])),
    answer("alerts: every stamp is midnight or a bare date"),
)
add("whole numbers as entities", stored(entity=NUMBERS), answer(entities=24, twin=numbered))
add(
    "decimals as entities",
    stored(entity=pa.array([decimal.Decimal(7)] * len(ALERTS))),
    "`alerts.parquet`: `column entity` must hold text or whole numbers; got decimal128(1, 0). "
    "Write the names as text.",
)
add(
    "floating numbers as entities",
    stored(entity=NUMBERS.cast(pa.float64())),
    "`alerts.parquet`: `column entity` must hold text or whole numbers; got double. Write the "
    "names as text.",
)
add(
    "true and false as types",
    stored(type=pa.array([True] * len(ALERTS))),
    "`alerts.parquet`: `column type` must hold text or whole numbers; got bool. Write the names "
    "as text.",
)
add(
    "whole numbers as times",
    stored(time=pa.array(NANO)),
    "`alerts.parquet`: `column time` must hold dates, timestamps or ISO 8601 text; got int64. "
    "Numbers that count from 1970 have to be turned into timestamps first.",
)
add(
    "floating numbers as times",
    stored(time=pa.array(NANO).cast(pa.float64(), safe=False)),
    "`alerts.parquet`: `column time` must hold dates, timestamps or ISO 8601 text; got double. "
    "Numbers that count from 1970 have to be turned into timestamps first.",
)
add(
    "durations as times",
    stored(time=pa.array(NANO).cast(pa.duration("ns"))),
    "`alerts.parquet`: `column time` must hold dates, timestamps or ISO 8601 text; got "
    "duration[ns]. Write each as a date and a time of day.",
)
add(
    "times of day as times",
    stored(time=pa.array([s.time() for s in STAMPS])),
    "`alerts.parquet`: `column time` must hold dates, timestamps or ISO 8601 text; got "
    "time64[us]. Write each as a date and a time of day.",
)
add(
    "lists as entities",
    stored(entity=pa.array([[row[0]] for row in ALERTS])),
    "`alerts.parquet`: `column entity` must hold text or whole numbers; got list<element: "
    "string>. Write the names as text.",
)
add(
    "records as entities",
    stored(entity=pa.array([{"id": row[0]} for row in ALERTS])),
    "`alerts.parquet`: `column entity` must hold text or whole numbers; got struct<id: string>. "
    "Write the names as text.",
)
add(
    "maps as types",
    stored(type=pa.array([[("a", "b")]] * len(ALERTS), pa.map_(pa.string(), pa.string()))),
    "`alerts.parquet`: `column type` must hold text or whole numbers; got map<string, string "
    "('type')>. Write the names as text.",
)
add(
    "a nested column that is not used",
    stored(more=pa.array([{"x": [1, 2]}] * len(ALERTS))),
    answer(),
)
add(
    "a column of nulls as entities",
    stored(entity=pa.nulls(len(ALERTS))),
    unreadable('alerts.parquet, row 1, column entity: "" is empty', "...", n=430),
)
add(
    "a null among times",
    stored(time=pa.array([None, *STAMPS[1:]], pa.timestamp("us"))),
    unreadable('alerts.parquet, row 1, column time: "" is empty'),
)
add(
    "a null among categories",
    stored(type=pa.array([None, *TYPE.to_pylist()[1:]]).dictionary_encode()),
    unreadable('alerts.parquet, row 1, column type: "" is empty'),
)
add(
    "a timestamp in the year 33658",
    stored(time=pa.array([10**15, *[n // 10**6 for n in NANO[1:]]], pa.timestamp("ms"))),
    unreadable(
        'alerts.parquet, row 1, column time: "1000000000000000" is outside the years 1 to 9999'
    ),
)
add(
    "no rows",
    stored(**{n: pa.array([], pa.string()) for n in ("entity", "time", "type")}),
    "`[alerts]`: `rows` must be there; got no rows. Look at alerts.parquet: nothing stands below "
    "the header.",
)
add(
    "no columns",
    lambda f: (f.parquet("alerts.parquet"), f.set("alerts", source="alerts.parquet")),
    "`alerts.parquet`: `column entity` must be there for table [alerts]; got no columns. Rename "
    'it in the file, or write columns = {entity = "its name in the file"}.\n'
    "`alerts.parquet`: `column type` must be there for table [alerts]; got no columns. Rename it "
    'in the file, or write columns = {type = "its name in the file"}.\n'
    "`alerts.parquet`: `column time` must be there for table [alerts]; got no columns. Rename it "
    'in the file, or write columns = {time = "its name in the file"}.',
)
add(
    "a column missing",
    lambda f: (
        f.parquet("alerts.parquet", entity=ENTITY, type=TYPE),
        f.set("alerts", source="alerts.parquet"),
    ),
    "`alerts.parquet`: `column time` must be there for table [alerts]; got columns `entity`, "
    '`type`. Rename it in the file, or write columns = {time = "its name in the file"}.',
)
add(
    "the first half of a file",
    cut(0.5),
    "`alerts.parquet`: `file` must be readable; got a file that does not end as parquet does. "
    "The file may be cut short or damaged: write or fetch it again.",
)
add(
    "the first four bytes of a file",
    cut(0.001),
    "`alerts.parquet`: `file` must be readable; got .... The file may be cut short or damaged: "
    "write or fetch it again.",
)
add(
    "a file without its last bytes",
    cut(0.999),
    "`alerts.parquet`: `file` must be readable; got a file that does not end as parquet does. "
    "The file may be cut short or damaged: write or fetch it again.",
)
add(
    "a hole in the middle of a file",
    with_hole,
    "`alerts.parquet`: `file` must be readable; got .... The file may be cut short or damaged: "
    "write or fetch it again.",
)
