"""Hands on the demo's tables as files: alerts, events, groups and coverage, with their blemishes.

As in a real log there are rows a reader has to cope with: repeated alerts, stamps with offsets,
after the close, at weekends and after the calendar's end, and companies nobody knows.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
from numpy.typing import NDArray

from miner.demo.cast import ALERT_KINDS, BANDS, SECTORS, TARGET
from miner.demo.market import Companies, Market, first_session
from miner.demo.stamps import local_stamps, written_stamps
from miner.demo.world_parts import IntArray

WITHDRAWAL = "withdrawal"

_N_REPEATED = 250
_N_AFTER_END = 60
_UNKNOWN = ("Unlisted Ombra", "Private Kestor", "Foreign Yulm")
_N_UNKNOWN = 45
_OFFSET_SHARE = 0.3


def write_tables(rng: np.random.Generator, market: Market, folder: Path) -> None:
    """Write ``alerts.parquet``, ``events.csv``, ``groups.csv`` and ``coverage.csv``."""
    pa.parquet.write_table(_alert_table(rng, market), folder / "alerts.parquet")
    _write_csv(_event_table(rng, market), folder / "events.csv")
    _write_companies(market.companies, market.day, folder)


def write_longer_tables(
    rng: np.random.Generator,
    before: Path,
    later: Market,
    companies: Companies,
    day: NDArray[np.datetime64],
    folder: Path,
) -> None:
    """Write the same tables with what came later at their ends.

    Parameters
    ----------
    before : folder with the tables of `write_tables`, whose rows stay as they are
    later : sessions after those
    companies, day : of the whole time, for the groups and the coverage
    """
    alerts = pa.parquet.read_table(before / "alerts.parquet")
    pa.parquet.write_table(
        pa.concat_tables([alerts, _alert_table(rng, later)]), folder / "alerts.parquet"
    )
    rows = pa.BufferOutputStream()
    pa.csv.write_csv(
        _event_table(rng, later),
        rows,
        pa.csv.WriteOptions(quoting_style="none", include_header=False),
    )
    events = (before / "events.csv").read_bytes()
    (folder / "events.csv").write_bytes(events + rows.getvalue().to_pybytes())
    _write_companies(companies, day, folder)


def _write_companies(companies: Companies, day: NDArray[np.datetime64], folder: Path) -> None:
    _write_csv(_group_table(companies, day), folder / "groups.csv")
    _write_csv(_coverage_table(companies, day), folder / "coverage.csv")


def _write_csv(table: pa.Table, path: Path) -> None:
    pa.csv.write_csv(table, path, pa.csv.WriteOptions(quoting_style="none"))


def _alert_table(rng: np.random.Generator, market: Market) -> pa.Table:
    entity, kind = market.alert_entity, market.alert_kind
    local = local_stamps(rng, market.alert_session, market.day, late_share=0.12)

    repeated = rng.integers(0, entity.size, _N_REPEATED)
    after = rng.integers(0, entity.size, _N_AFTER_END)
    unknown = rng.integers(0, entity.size, _N_UNKNOWN)
    late = market.day[-1] + rng.integers(4, 20, _N_AFTER_END)
    extra = np.concatenate((repeated, after, unknown))
    stranger = market.companies.names.size + rng.integers(0, len(_UNKNOWN), _N_UNKNOWN)
    entity = np.concatenate((entity, entity[repeated], entity[after], stranger))
    kind = np.concatenate((kind, kind[extra]))
    noon = late.astype("datetime64[s]") + rng.integers(9 * 3600, 15 * 3600, _N_AFTER_END)
    local = np.concatenate((local, local[repeated], noon, local[unknown]))

    text, instant = written_stamps(rng, local, _OFFSET_SHARE)
    # The text last, so that the order does not hang on the order in which the points were drawn.
    order = np.lexsort((text, kind, entity, instant))
    names = np.concatenate((market.companies.names, _UNKNOWN))
    return pa.table(
        {
            "entity": _named(names, entity[order]),
            "time": pa.array(text[order], pa.string()),
            "type": _named(np.array([k.name for k in ALERT_KINDS]), kind[order]),
        }
    )


def _event_table(rng: np.random.Generator, market: Market) -> pa.Table:
    local = local_stamps(rng, market.event_session, market.day, late_share=0.05)
    text, instant = written_stamps(rng, local, 0.0)
    order = np.lexsort((market.event_kind, market.event_entity, instant))
    return pa.table(
        {
            "entity": _named(market.companies.names, market.event_entity[order]),
            "time": pa.array(text[order], pa.string()),
            "type": _named(np.array((TARGET, WITHDRAWAL)), market.event_kind[order]),
        }
    )


def _band_spells(companies: Companies) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    """Company, first session, session after the last and band of each spell in a listed life."""
    band_et = companies.band_et
    session = np.arange(band_et.shape[1])
    is_first = np.ones(band_et.shape, dtype=np.bool_)
    is_first[:, 1:] = band_et[:, 1:] != band_et[:, :-1]
    is_first &= session > companies.start[:, None]
    is_first &= session < companies.stop[:, None]
    is_first[np.arange(companies.start.size), companies.start] = True
    entity, start = np.nonzero(is_first)
    stop = np.append(start[1:], 0)
    is_last = np.append(entity[1:] != entity[:-1], True)
    stop[is_last] = companies.stop
    return entity, start, stop, band_et[entity, start].astype(np.int64)


def _group_table(companies: Companies, day: NDArray[np.datetime64]) -> pa.Table:
    entity, start, stop, band = _band_spells(companies)
    return pa.table(
        {
            "entity": _named(companies.names, entity),
            "start": _start_dates(start, day),
            "end": _end_dates(stop, day),
            "size_band": _named(np.array(BANDS), band),
            "sector": _named(np.array(SECTORS), companies.sector[entity]),
        }
    )


def _coverage_table(companies: Companies, day: NDArray[np.datetime64]) -> pa.Table:
    spells = _band_spells(companies)
    entity, kind, start, stop = [], [], [], []
    for k, alert_kind in enumerate(ALERT_KINDS):
        row_entity = np.arange(companies.start.size)
        row_start, row_stop = companies.start, companies.stop
        if alert_kind.is_large_only:
            is_kept = spells[3] > 0
            row_entity, row_start, row_stop = (part[is_kept] for part in spells[:3])
        row_start = np.maximum(row_start, first_session(alert_kind, day))
        is_kept = row_start < row_stop
        entity.append(row_entity[is_kept])
        kind.append(np.full(int(is_kept.sum()), k))
        start.append(row_start[is_kept])
        stop.append(row_stop[is_kept])
    entity_row, kind_row = np.concatenate(entity), np.concatenate(kind)
    start_row, stop_row = np.concatenate(start), np.concatenate(stop)
    order = np.lexsort((start_row, kind_row, entity_row))
    return pa.table(
        {
            "entity": _named(companies.names, entity_row[order]),
            "type": _named(np.array([k.name for k in ALERT_KINDS]), kind_row[order]),
            "start": _start_dates(start_row[order], day),
            "end": _end_dates(stop_row[order], day),
        }
    )


def _named(names: NDArray[np.str_], code: IntArray) -> pa.Array:
    return pa.array(names, pa.string()).take(pa.array(code, pa.int64()))


def _start_dates(start: IntArray, day: NDArray[np.datetime64]) -> pa.Array:
    """Dates of first sessions; empty for those that go back to the calendar's start."""
    return pa.array(np.datetime_as_string(day[start]), pa.string(), mask=start == 0)


def _end_dates(stop: IntArray, day: NDArray[np.datetime64]) -> pa.Array:
    """Dates of last sessions; empty for those that reach the calendar's end."""
    return pa.array(np.datetime_as_string(day[stop - 1]), pa.string(), mask=stop == day.size)
