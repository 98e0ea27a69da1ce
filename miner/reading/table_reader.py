"""Reads one table chunk by chunk into whole columns, sorting out rows that cannot be used."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from functools import partial
from typing import TypeVar
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa

from .. import memory_estimate
from ..errors import TableError, explain
from ..settings import Study, TableSettings
from .bad_rows import BadRows, Fault
from .headers import Wanted
from .hints import why_no_time, why_out_of_range
from .names import NameCoder, fault_of_name
from .numbers import Numbers, read_numbers
from .sources import Chunk, Source
from .stamps import Stamps, is_text, read_stamps
from .zones import timezone_name

Progress = Callable[[int], object]
T = TypeVar("T")
_MOST_FILES = 5


Reason = str | Callable[[str | None], str]  # of a bad value, as in "is empty"


def _told(reason: Reason) -> Callable[[str | None], str]:
    return reason if callable(reason) else lambda value: reason


class TableReader:
    """One pass over a table: for each chunk `codes`, `stamps` and `numbers`, then `keep`; at the
    end `finish`."""

    def __init__(
        self, study: Study, settings: TableSettings, wanted: Wanted, may_be_empty: Iterable[str]
    ) -> None:
        self.wanted = wanted
        self.zone = ZoneInfo(timezone_name(study))
        self.source = Source(settings, study.folder, wanted)
        self.bad = BadRows(wanted.table, settings.bad_rows == "set-aside")
        self.rows_read = 0
        self.stop_row_of: dict[str, int] = {}  # file -> rows read by its end
        self._may_be_empty = frozenset(may_be_empty)
        self._coders = {name: NameCoder(name in self._may_be_empty) for name in wanted.names}
        self._parts: dict[str, list[np.ndarray]] = {}
        self._dropped: list[np.ndarray] = [np.zeros(0, dtype=np.int64)]

    def chunks(self, progress: Progress | None) -> Iterator[Chunk]:
        """Yield the chunks, columns that are not there as empty ones, calling `progress`."""
        for chunk in self.source.chunks():
            empty = pa.nulls(chunk.n_rows, pa.string())
            columns = {name: chunk.columns.get(name, empty) for name in self.wanted.columns}
            yield Chunk(chunk.file, chunk.first_row, columns, chunk.n_rows)
            self.rows_read += chunk.n_rows
            memory_estimate.refuse(memory_estimate.of_rows(self.rows_read))
            self.stop_row_of[chunk.file] = self.rows_read
            if progress is not None:
                progress(self.rows_read)

    def codes(self, chunk: Chunk) -> dict[str, np.ndarray]:
        """Return int32 codes [n] of every name column, -1 where a name cannot be used."""
        return {
            name: self._readable(coder.codes, chunk, name) for name, coder in self._coders.items()
        }

    def stamps(self, chunk: Chunk, column: str) -> Stamps:
        """Return a column of times."""
        return self._readable(lambda values: read_stamps(values, self.zone), chunk, column)

    def no_time(self, chunk: Chunk, column: str, noun: str = "time") -> Reason:
        """Return why values of a column of times that are none cannot be read."""
        kind = chunk.columns[column].type
        if pa.types.is_dictionary(kind):
            kind = kind.value_type
        is_written = is_text(kind) or pa.types.is_null(kind)
        return partial(why_no_time, noun=noun) if is_written else why_out_of_range

    def numbers(self, chunk: Chunk, column: str) -> Numbers:
        """Return a column of numbers."""
        return self._readable(read_numbers, chunk, column)

    def _readable(self, read: Callable[[pa.Array], T], chunk: Chunk, column: str) -> T:
        try:
            return read(chunk.columns[column])
        except pa.ArrowInvalid as error:  # bytes that are no text
            what, found = f"column {self.wanted.in_file(column)}", str(error).splitlines()[0]
            text = explain(chunk.file, what, "be UTF-8 text", found, "Write it as UTF-8.")
            raise TableError(text) from error

    def keep(
        self,
        chunk: Chunk,
        codes: dict[str, np.ndarray],
        faults: list[tuple[str, np.ndarray, Reason]],
        **columns: np.ndarray,
    ) -> None:
        """Keep the chunk's good rows of `codes` and `columns`; note the others.

        faults: column of times or numbers, is_bad [n], and the reason to give for it.
        """
        found = [
            Fault(self.wanted.in_file(name), chunk.columns[name], code < 0, self._name_fault(name))
            for name, code in codes.items()
        ]
        found += [
            Fault(self.wanted.in_file(name), chunk.columns[name], is_bad, _told(reason))
            for name, is_bad, reason in faults
        ]
        is_good = ~np.logical_or.reduce([fault.is_bad for fault in found])
        is_whole = bool(is_good.all())
        if not is_whole:
            self.bad.add(chunk, found)
            self._dropped.append(np.flatnonzero(~is_good) + self.rows_read)
        for name, values in {**codes, **columns}.items():
            part = values if is_whole else values[is_good]
            self._parts.setdefault(name, []).append(part)

    def _name_fault(self, name: str) -> Callable[[str | None], str]:
        may_be_empty = name in self._may_be_empty
        return lambda value: fault_of_name(value, may_be_empty) or "cannot be used"

    def finish(self, may_have_no_rows: bool = False) -> None:
        """Raise `TableError` for bad rows that are not set aside, or when no row is left."""
        self.bad.refuse_any(self.source.paths)
        if may_have_no_rows and not self.rows_read:
            return
        if not any(len(part) for part in self._parts.get("entity", ())):
            files = ", ".join(list(self.source.paths)[:_MOST_FILES]) or "the query"
            if self.rows_read:
                found = f"{self.rows_read} rows, none of them readable"
                advice = f'Look at {files}: bad_rows = "error" lists what is wrong.'
            else:
                found = "no rows"
                advice = f"Look at {files}: nothing stands below the header."
            raise TableError(explain(f"[{self.wanted.table}]", "rows", "be there", found, advice))

    def column(self, name: str) -> np.ndarray:
        """Return one kept column whole, [n]. Its parts are let go: ask once."""
        return np.concatenate(self._parts.pop(name, [np.zeros(0, dtype=np.int64)]))

    def names(self, name: str) -> tuple[np.ndarray, tuple[str, ...]]:
        """Return int32 codes [n] into sorted names, and those names. Ask once."""
        return self._coders[name].sorted_codes(self.column(name))

    def dropped_rows(self) -> np.ndarray:
        """Return the running numbers, from 0 over all files, of rows set aside; sorted int64."""
        return np.concatenate(self._dropped)
