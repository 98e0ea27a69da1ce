"""csv, csv.gz and parquet files, chunk by chunk, as arrow arrays under the table's own names.

Text stays text: `007` and `NA` are names, and only an empty field is empty.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import io
import zlib
from collections.abc import Iterator, Mapping
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pa_parquet

from ..errors import TableError, explain
from .file_kinds import UTF_16, advice_on, other_kind
from .headers import Wanted, check_types, match_columns
from .line_numbers import lines_of_rows, long_fields, unpacked

_CSV_BLOCK_BYTES = 4 << 20
_LARGEST_BLOCK_BYTES = 256 << 20
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
        found, advice = f'"{label}"', advice_on(label)
        raise TableError(explain(f"[{wanted.table}]", "source", rule, found, advice))
    try:
        yield from chunks
    except MemoryError:  # arrow's own is an ArrowException too
        raise
    except (pa.ArrowException, OSError, EOFError, ValueError, csv.Error, zlib.error) as error:
        raise _unreadable(path, label, error) from error


def _read_csv(path: Path, label: str, wanted: Wanted) -> Iterator[Columns]:
    """Yield the chunks of a csv; a row longer than a block is read again with a larger one."""
    header = _header(path, label)
    try:
        matched = match_columns(header, wanted, label)
    except TableError as error:
        kind = other_kind(path)
        raise (error if kind is None else _misnamed(path, label, kind)) from None
    kinds = {matched[c]: _NAME_TYPE for c in wanted.names if c in matched}
    texts = wanted.times + wanted.numbers
    kinds |= {matched[c]: pa.string() for c in texts if c in matched}
    done, block_bytes = 0, _CSV_BLOCK_BYTES
    while True:
        try:
            for batch in _batches(path, _RaggedRows(path, label), kinds, done, block_bytes):
                yield {column: batch.column(name) for column, name in matched.items()}
                done += len(batch)
            return
        except pa.ArrowInvalid as error:
            if "straddling" not in str(error):
                raise
            block_bytes *= 8
            if block_bytes > _LARGEST_BLOCK_BYTES:
                raise _too_long(label, done) from error


def _batches(
    path: Path,
    ragged: _RaggedRows,
    kinds: Mapping[str, pa.DataType],
    skipped_rows: int,
    block_bytes: int,
) -> Iterator[pa.RecordBatch]:
    """Yield a csv's columns named in `kinds`, without its first `skipped_rows` rows."""
    # the packing is told by the name in any case of letters, not as the library reads it
    packing = "gzip" if path.name.lower().endswith(".gz") else None
    with (
        pa.input_stream(str(path), compression=packing) as file,
        pa_csv.open_csv(
            file,
            # one thread: with more, the numbers of ragged rows are not known
            read_options=pa_csv.ReadOptions(use_threads=False, block_size=block_bytes),
            parse_options=pa_csv.ParseOptions(
                newlines_in_values=True, invalid_row_handler=ragged.note
            ),
            convert_options=pa_csv.ConvertOptions(
                column_types=dict(kinds),
                include_columns=list(kinds),
                null_values=[],
                strings_can_be_null=False,
            ),
        ) as reader,
    ):
        for batch in reader:
            ragged.refuse_any()
            if skipped_rows < len(batch):
                yield batch.slice(skipped_rows)
            skipped_rows = max(0, skipped_rows - len(batch))
    ragged.refuse_any()


def _too_long(label: str, done: int) -> TableError:
    rule = f"have no row longer than {_LARGEST_BLOCK_BYTES >> 20} MB"
    advice = "A double quote may never be closed: look at that row."
    return TableError(explain(label, "file", rule, f"one after row {done}", advice))


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
    """Return a csv's column names, from the first line that is not blank."""
    with (
        long_fields(),
        unpacked(path) as file,
        io.TextIOWrapper(file, "utf-8-sig", newline="") as text,
    ):
        header = next((fields for fields in csv.reader(text) if fields), [])
    if not header:
        advice = "The first line names the columns."
        raise TableError(explain(label, "file", "have a header", "an empty file", advice))
    if any("\0" in name for name in header):
        found, advice = "NUL characters in the header", "Write the file again as UTF-8 text."
        raise TableError(explain(label, "file", "be text", found, advice))
    return header


class _RaggedRows:
    """Collects the rows that have too many or too few fields."""

    def __init__(self, path: Path, label: str) -> None:
        self._path, self._label = path, label
        self._shown: list[tuple[int, str]] = []
        self._count = 0
        self._has_newline = self._has_nul = False

    def note(self, row: pa_csv.InvalidRow) -> str:
        """Count a row and pass on; the signature is the csv reader's."""
        self._count += 1
        if self._count <= _MOST_SHOWN:
            number = row.number - 1 if row.number is not None else 0  # the header is no row
            found = f"{row.actual_columns} instead of {row.expected_columns}: {row.text[:80]!r}"
            self._shown.append((number, found))
        self._has_newline |= "\n" in row.text
        self._has_nul |= "\0" in row.text
        return "skip"

    def refuse_any(self) -> None:
        """Raise `TableError` where there were ragged rows so far."""
        if self._count:
            advice = (
                "Put fields that hold a comma in double quotes. Rows count from 1 below the header."
            )
            rule = "have as many fields in every row as in the header"
            found = f"{self._count} other rows" if self._count > 1 else "one other row"
            if self._has_nul:
                advice = f"The file holds NULs: was it cut short while written? {advice}"
            if self._has_newline:
                advice = f"A double quote may never be closed. {advice}"
            text = explain(self._label, "file", rule, found, advice)
            line_of = lines_of_rows(self._path, {row for row, _ in self._shown})
            lines = [
                f"  row {row or '?'}{f' (line {line_of[row]})' if row in line_of else ''}: {found}"
                for row, found in self._shown
            ]
            raise TableError("\n".join([text, *lines]))


def _unreadable(path: Path, label: str, error: Exception) -> TableError:
    """Put what a reader found wrong with a whole file into one message."""
    found = str(error).splitlines()[0][:200].rstrip(".") if str(error) else type(error).__name__
    if isinstance(error, FileNotFoundError):
        return TableError(explain(label, "file", "exist", "no such file", "Check the path."))
    if isinstance(error, PermissionError):
        advice = "Ask for leave to read it, or copy it where you may."
        return TableError(explain(label, "file", "be readable", "permission denied", advice))
    kind = other_kind(path)
    if kind is not None:
        return _misnamed(path, label, kind)
    if isinstance(error, UnicodeDecodeError) or "invalid UTF8" in found:
        line = _first_line_not_utf8(path)
        at = f" in line {line}" if line else ""
        advice = "Save it as UTF-8."
        return TableError(explain(label, "file", "be UTF-8 text", f"other bytes{at}", advice))
    advice = "The file may be cut short or damaged: write or fetch it again."
    if isinstance(error, gzip.BadGzipFile):
        rule, advice = "hold what its name says, csv.gz", "End its name in .csv if it is a csv."
        return TableError(explain(label, "file", rule, "a file that is not packed", advice))
    if "Parquet magic bytes" in found:
        found = "a file that does not end as parquet does"
    return TableError(explain(label, "file", "be readable", found, advice))


def _misnamed(path: Path, label: str, kind: tuple[str, str]) -> TableError:
    ending = "csv.gz" if path.name.lower().endswith(".csv.gz") else path.suffix.lstrip(".").lower()
    rule = "be UTF-8 text" if kind[0] == UTF_16 else f"hold what its name says, {ending}"
    return TableError(explain(label, "file", rule, *kind))


def _first_line_not_utf8(path: Path) -> int | None:
    """Return the number of the first line of a csv that is not UTF-8, counted from 1."""
    try:
        with unpacked(path) as lines:
            for number, line in enumerate(lines, start=1):
                try:
                    line.decode("utf-8")
                except UnicodeDecodeError:
                    return number
    except (OSError, EOFError, zlib.error):
        return None
    return None
