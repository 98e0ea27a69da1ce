"""csv, csv.gz and parquet files, chunk by chunk, as arrow arrays under the table's own names.

Text stays text: `007` and `NA` are names, and only an empty field is empty.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import io
import zlib
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO, cast

import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pa_parquet

from ..errors import TableError, explain
from .headers import Wanted, check_types, match_columns

_CSV_BLOCK_BYTES = 4 << 20
_PARQUET_BATCH_ROWS = 1 << 18
_MOST_SHOWN = 20
_NAME_TYPE = pa.dictionary(pa.int32(), pa.string())

Columns = dict[str, pa.Array]


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file's bytes, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def read_file(path: Path, label: str, wanted: Wanted) -> Iterator[Columns]:
    """Yield a file's wanted columns chunk by chunk; optional ones that are missing are left out.

    `label` is what messages call the file. Raises `TableError`.
    """
    suffix = path.name.lower()
    if suffix.endswith(".parquet"):
        chunks = _read_parquet(path, label, wanted)
    elif suffix.endswith((".csv", ".csv.gz")):
        chunks = _read_csv(path, label, wanted)
    else:
        rule = "be a .csv, .csv.gz or .parquet file, or a database URL"
        raise TableError(explain(f"[{wanted.table}]", "source", rule, f'"{label}"'))
    try:
        yield from chunks
    except (pa.ArrowException, OSError, EOFError, ValueError, csv.Error, zlib.error) as error:
        raise _unreadable(path, label, error) from error


def _read_csv(path: Path, label: str, wanted: Wanted) -> Iterator[Columns]:
    header = _header(path, label)
    matched = match_columns(header, wanted, label)
    ragged = _RaggedRows(label)
    kinds = {matched[c]: _NAME_TYPE for c in wanted.names if c in matched}
    texts = wanted.times + wanted.numbers
    kinds |= {matched[c]: pa.string() for c in texts if c in matched}
    with pa_csv.open_csv(
        str(path),
        # one thread: with more, the numbers of ragged rows are not known
        read_options=pa_csv.ReadOptions(use_threads=False, block_size=_CSV_BLOCK_BYTES),
        parse_options=pa_csv.ParseOptions(newlines_in_values=True, invalid_row_handler=ragged.note),
        convert_options=pa_csv.ConvertOptions(
            column_types=kinds,
            include_columns=list(kinds),
            null_values=[],
            strings_can_be_null=False,
        ),
    ) as reader:
        for batch in reader:
            ragged.refuse_any()
            yield {column: batch.column(name) for column, name in matched.items()}
    ragged.refuse_any()


def _read_parquet(path: Path, label: str, wanted: Wanted) -> Iterator[Columns]:
    with pa_parquet.ParquetFile(path) as file:
        schema = file.schema_arrow
        matched = match_columns(schema.names, wanted, label)
        check_types({field.name: field.type for field in schema}, matched, wanted, label)
    texts = [matched[c] for c in wanted.names if c in matched]
    with pa_parquet.ParquetFile(path, read_dictionary=texts) as file:
        for batch in file.iter_batches(_PARQUET_BATCH_ROWS, columns=list(matched.values())):
            yield {column: batch.column(name) for column, name in matched.items()}


def _header(path: Path, label: str) -> list[str]:
    """Return a csv's column names."""
    with _unpacked(path) as file, io.TextIOWrapper(file, "utf-8-sig", newline="") as text:
        header = next(csv.reader(text), [])
    if not header:
        advice = "The first line names the columns."
        raise TableError(explain(label, "file", "have a header", "an empty file", advice))
    if any("\0" in name for name in header):
        raise TableError(explain(label, "file", "be text", "NUL characters in the header"))
    return header


def _unpacked(path: Path) -> BinaryIO:
    if path.name.lower().endswith(".gz"):
        return cast(BinaryIO, gzip.open(path))
    return path.open("rb")


class _RaggedRows:
    """Collects the rows that have too many or too few fields."""

    def __init__(self, label: str) -> None:
        self._label = label
        self._shown: list[str] = []
        self._count = 0

    def note(self, row: pa_csv.InvalidRow) -> str:
        """Count a row and pass on; the signature is the csv reader's."""
        self._count += 1
        if self._count <= _MOST_SHOWN:
            number = row.number - 1 if row.number is not None else "?"  # the header is no row
            self._shown.append(
                f"  row {number}: {row.actual_columns} instead of {row.expected_columns}: "
                f"{row.text[:80]!r}"
            )
        return "skip"

    def refuse_any(self) -> None:
        """Raise `TableError` where there were ragged rows so far."""
        if self._count:
            advice = (
                "Put fields that hold a comma in double quotes. Rows count from 1 below the header."
            )
            rule = "have as many fields in every row as in the header"
            found = f"{self._count} other rows" if self._count > 1 else "one other row"
            text = explain(self._label, "file", rule, found, advice)
            raise TableError("\n".join([text, *self._shown]))


def _unreadable(path: Path, label: str, error: Exception) -> TableError:
    """Put what a reader found wrong with a whole file into one message."""
    found = str(error).splitlines()[0][:200].rstrip(".") if str(error) else type(error).__name__
    if isinstance(error, FileNotFoundError):
        return TableError(explain(label, "file", "exist", "no such file", "Check the path."))
    if isinstance(error, UnicodeDecodeError) or "invalid UTF8" in found:
        line = _first_line_not_utf8(path)
        at = f" in line {line}" if line else ""
        advice = "Save it as UTF-8."
        return TableError(explain(label, "file", "be UTF-8 text", f"other bytes{at}", advice))
    advice = "The file may be cut short or damaged: write or fetch it again."
    return TableError(explain(label, "file", "be readable", found, advice))


def _first_line_not_utf8(path: Path) -> int | None:
    """Return the number of the first line of a csv that is not UTF-8, counted from 1."""
    with _unpacked(path) as lines:
        for number, line in enumerate(lines, start=1):
            try:
                line.decode("utf-8")
            except UnicodeDecodeError:
                return number
    return None
