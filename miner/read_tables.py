"""The input tables as arrays: alerts and events as a `Log`, groups and coverage as a `SpanTable`,
prices as a `PriceTable`.

The only reader of a study's tables. Names become integer codes into sorted names, so the result
does not depend on the order of rows; times become UTC microseconds. Rows that cannot be read stop
everything with one message, or are set aside where the settings say so.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from .errors import TableError, explain
from .reading.bad_rows import set_aside_frame
from .reading.headers import Wanted
from .reading.stamps import OPEN_END, OPEN_START, Stamps, is_text
from .reading.table_reader import Progress, TableReader
from .reading.zones import DAY_US, to_local, to_utc
from .settings import Study, TableSettings

__all__ = [
    "OPEN_END",
    "OPEN_START",
    "Log",
    "PriceTable",
    "SpanTable",
    "read_coverage",
    "read_groups",
    "read_log",
    "read_prices",
]


@dataclass(frozen=True)
class Log:
    """Alerts or events, n rows in file order.

    entity_code, type_code: int32 [n], positions in `entity_names`, `type_names` (sorted).
    stamp_us: int64 [n], UTC microseconds; a bare date is its local midnight.
    is_bare_date: bool [n], the stamp was a date without a time.
    midnight_count: stamps of exactly local midnight, bare dates included.
    naive_count: stamps with a time of day and no offset, taken to be in the calendar's timezone.
    rows_read: rows before any were set aside; set_aside: those, as SET_ASIDE_COLUMNS.
    fingerprints: file, or redacted URL and query -> SHA-256.
    files, file_stop_row, dropped_row: where rows came from; ask `rows_of`.
    """

    table: str
    entity_code: np.ndarray
    entity_names: tuple[str, ...]
    type_code: np.ndarray
    type_names: tuple[str, ...]
    stamp_us: np.ndarray
    is_bare_date: np.ndarray
    midnight_count: int
    rows_read: int
    set_aside: pd.DataFrame
    fingerprints: dict[str, str]
    files: tuple[str, ...]
    file_stop_row: np.ndarray  # int64 [f], rows read by the end of each file
    dropped_row: np.ndarray  # int64 sorted, running numbers from 0 of the rows set aside
    naive_count: int = 0

    def __len__(self) -> int:
        return len(self.stamp_us)

    def rows_of(self, idx: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return position in `files`, and row in the file from 1, int64 [k] each, of rows `idx`."""
        kept_before = self.dropped_row - np.arange(len(self.dropped_row))
        running = idx + np.searchsorted(kept_before, idx, side="right")
        file_idx = np.searchsorted(self.file_stop_row, running, side="right")
        first = np.concatenate([[0], self.file_stop_row])[file_idx]
        return file_idx, running - first + 1

    def as_set_aside(self, idx: np.ndarray, column: str, reason: str) -> pd.DataFrame:
        """Return rows `idx` [k] as rows set aside because of `column`: "entity", "type", "time"."""
        file_idx, rows = self.rows_of(idx)
        if column == "time":
            values = [f"{t}Z" for t in self.stamp_us[idx].astype("M8[us]").astype("M8[s]")]
        else:
            codes, names = (
                (self.entity_code, self.entity_names)
                if column == "entity"
                else (self.type_code, self.type_names)
            )
            values = [names[code] for code in codes[idx]]
        return set_aside_frame(
            [
                (self.table, self.files[f], int(row), column, value, reason)
                for f, row, value in zip(file_idx, rows, values, strict=True)
            ]
        )


@dataclass(frozen=True)
class SpanTable:
    """Groups or coverage, n rows in file order, inclusive at both ends.

    entity_code: int32 [n], positions in `entity_names` (sorted).
    start_us, end_us: int64 [n], UTC microseconds, OPEN_START and OPEN_END where open.
    start_is_bare, end_is_bare: bool [n], the bound was a date without a time.
    label_codes: label column -> int32 [n] into `label_names` (sorted), where "" is an empty field.
        Coverage has the one label "type", with "" for all types.
    """

    table: str
    entity_code: np.ndarray
    entity_names: tuple[str, ...]
    start_us: np.ndarray
    end_us: np.ndarray
    start_is_bare: np.ndarray
    end_is_bare: np.ndarray
    label_codes: dict[str, np.ndarray]
    label_names: dict[str, tuple[str, ...]]
    rows_read: int
    set_aside: pd.DataFrame
    fingerprints: dict[str, str]

    def __len__(self) -> int:
        return len(self.entity_code)


ROUNDING = 1e-6  # bars multiplied by an adjustment: their high may fall below by rounding
PRICE_COLUMNS = ("open", "high", "low", "close", "volume")


@dataclass(frozen=True)
class PriceTable:
    """Daily bars, n rows in file order.

    entity_code: int32 [n], positions in `entity_names` (sorted).
    date: datetime64[D] [n], the local date. values: float64 [n] by column of PRICE_COLUMNS that the
        table has, NaN where a field is empty; closes are always there and above zero.
    """

    entity_code: np.ndarray
    entity_names: tuple[str, ...]
    date: np.ndarray
    values: dict[str, np.ndarray]
    rows_read: int
    set_aside: pd.DataFrame
    fingerprints: dict[str, str]

    def __len__(self) -> int:
        return len(self.entity_code)


def read_log(
    study: Study,
    table: Literal["alerts", "events"],
    progress: Progress | None = None,
    *,
    may_have_no_rows: bool = False,
) -> Log:
    """Read alerts or events. `progress` is called with the rows read so far.

    Raises `TableError`, and `CalendarError` where the timezone hangs on an unknown exchange.
    """
    settings: TableSettings = getattr(study, table)
    wanted = Wanted(table, ("entity", "type"), ("time",), renamed=settings.columns)
    reader = TableReader(study, settings, wanted, may_be_empty=())
    for chunk in reader.chunks(progress):
        stamps = reader.stamps(chunk, "time")
        reader.keep(
            chunk,
            reader.codes(chunk),
            [("time", ~stamps.is_ok, reader.no_time(chunk, "time"))],
            stamp_us=stamps.utc_us,
            is_bare=stamps.is_bare,
            is_midnight=stamps.is_midnight,
            is_naive=stamps.is_naive,
        )
    reader.finish(may_have_no_rows)
    entity_code, entity_names = reader.names("entity")
    type_code, type_names = reader.names("type")
    return Log(
        table=table,
        entity_code=entity_code,
        entity_names=entity_names,
        type_code=type_code,
        type_names=type_names,
        stamp_us=reader.column("stamp_us"),
        is_bare_date=reader.column("is_bare"),
        midnight_count=int(reader.column("is_midnight").sum()),
        rows_read=reader.rows_read,
        set_aside=reader.bad.frame(),
        fingerprints=reader.source.fingerprints,
        files=tuple(reader.stop_row_of),
        file_stop_row=np.array(list(reader.stop_row_of.values()), dtype=np.int64),
        dropped_row=reader.dropped_rows(),
        naive_count=int(reader.column("is_naive").sum()),
    )


def read_groups(study: Study) -> SpanTable | None:
    """Read the groups with the label columns in use; None where the study has none.

    Raises as `read_log` does.
    """
    if study.groups is None:
        return None
    groups = _read_spans(study, study.groups, "groups", study.groups.label_columns, ())
    strata = study.groups.strata
    if study.groups.pooled and strata is not None and "all" in groups.label_names[strata]:
        rule, advice = 'not hold the label "all" with pooled = true', "Rename that label."
        raise TableError(explain("[groups]", f"column {strata}", rule, '"all"', advice))
    return groups


def read_coverage(study: Study) -> SpanTable | None:
    """Read the coverage with its label "type"; None where the study has none.

    Raises as `read_log` does.
    """
    if study.coverage is None:
        return None
    return _read_spans(study, study.coverage, "coverage", ("type",), ("type",))


def read_prices(study: Study, progress: Progress | None = None) -> PriceTable | None:
    """Read the prices; None where the study has none.

    A row whose close is no number above zero, whose other prices are given but not above zero, or
    whose high and low do not hold its open and close, is one that cannot be read.

    Raises as `read_log` does.
    """
    if study.prices is None:
        return None
    optional = tuple(name for name in PRICE_COLUMNS if name != "close")
    wanted = Wanted("prices", ("entity",), ("date",), optional, study.prices.columns, PRICE_COLUMNS)
    reader = TableReader(study, study.prices, wanted, may_be_empty=())
    seen: set[str] = set()
    for chunk in reader.chunks(progress):
        stamps = reader.stamps(chunk, "date")
        read = {name: reader.numbers(chunk, name) for name in PRICE_COLUMNS}
        value = {name: column.values for name, column in read.items()}
        seen |= {name for name, column in read.items() if column.is_given.any()}
        faults = [("date", ~stamps.is_ok, reader.no_time(chunk, "date", "date"))]
        for name, column in read.items():
            is_needed = column.is_given | (name == "close")
            is_wrong = is_needed & ~column.is_ok
            faults.append((name, is_wrong, "is no number"))
            is_low = column.values < 0 if name == "volume" else column.values <= 0
            reason = "is below zero" if name == "volume" else "is not above zero"
            faults.append((name, is_low, reason))
        highest, lowest = (
            np.fmax(value["open"], value["close"]),
            np.fmin(value["open"], value["close"]),
        )
        faults.append(("high", value["high"] < highest * (1 - ROUNDING), "is below open or close"))
        faults.append(("low", value["low"] > lowest * (1 + ROUNDING), "is above open or close"))
        local = to_local(stamps.utc_us, reader.zone) // DAY_US
        reader.keep(chunk, reader.codes(chunk), faults, day=local, **value)
    reader.finish()
    entity_code, entity_names = reader.names("entity")
    return PriceTable(
        entity_code=entity_code,
        entity_names=entity_names,
        date=reader.column("day").astype("M8[D]"),
        values={name: reader.column(name) for name in PRICE_COLUMNS if name in seen | {"close"}},
        rows_read=reader.rows_read,
        set_aside=reader.bad.frame(),
        fingerprints=reader.source.fingerprints,
    )


def _read_spans(
    study: Study,
    settings: TableSettings,
    table: str,
    labels: tuple[str, ...],
    optional: tuple[str, ...],
) -> SpanTable:
    bounds = ("start", "end")
    wanted = Wanted(table, ("entity", *labels), bounds, (*optional, *bounds), settings.columns)
    reader = TableReader(study, settings, wanted, may_be_empty=labels)
    for chunk in reader.chunks(None):
        start, end = (reader.stamps(chunk, name) for name in bounds)
        has_start, has_end = (_is_given(chunk.columns[name]) for name in bounds)
        is_reversed = start.is_ok & end.is_ok & (start.utc_us > _last_us(end, reader.zone))
        reader.keep(
            chunk,
            reader.codes(chunk),
            [
                ("start", has_start & ~start.is_ok, reader.no_time(chunk, "start")),
                ("end", has_end & ~end.is_ok, reader.no_time(chunk, "end")),
                ("end", is_reversed, "is before the start"),
            ],
            start_us=np.where(has_start, start.utc_us, OPEN_START),
            end_us=np.where(has_end, end.utc_us, OPEN_END),
            start_is_bare=start.is_bare & has_start,
            end_is_bare=end.is_bare & has_end,
        )
    reader.finish()
    entity_code, entity_names = reader.names("entity")
    coded = {label: reader.names(label) for label in labels}
    return SpanTable(
        table=table,
        entity_code=entity_code,
        entity_names=entity_names,
        start_us=reader.column("start_us"),
        end_us=reader.column("end_us"),
        start_is_bare=reader.column("start_is_bare"),
        end_is_bare=reader.column("end_is_bare"),
        label_codes={label: codes for label, (codes, _) in coded.items()},
        label_names={label: names for label, (_, names) in coded.items()},
        rows_read=reader.rows_read,
        set_aside=reader.bad.frame(),
        fingerprints=reader.source.fingerprints,
    )


def _is_given(column: pa.Array) -> np.ndarray:
    """Return bool [n]: the field is neither null nor empty text."""
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    is_given = column.is_valid()
    if is_text(column.type):
        is_given = pc.and_(is_given, pc.fill_null(pc.greater(pc.binary_length(column), 0), False))
    return np.asarray(is_given)


def _last_us(end: Stamps, zone: ZoneInfo) -> np.ndarray:
    """Return the last microsecond of each end: a bare date lasts its whole day."""
    next_midnight = to_utc(to_local(end.utc_us, zone) + DAY_US, zone)
    return np.where(end.is_bare, next_midnight - 1, end.utc_us)
