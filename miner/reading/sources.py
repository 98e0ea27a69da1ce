"""From a table's settings to its chunks: which files or query, and the fingerprint of each."""

from __future__ import annotations

import glob
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path

from ..errors import TableError, explain
from ..settings import TableSettings, redact_url
from ..settings.paths import is_file, where_it_leads
from .databases import RowsHash, read_query
from .files import Columns, read_file, sha256_of
from .headers import Wanted

_LONGEST_SHOWN = 200


@dataclass(frozen=True)
class Chunk:
    """Some rows of one file: arrow arrays by the table's own column names."""

    file: str
    first_row: int  # of the file, counted from 1 below the header
    columns: Columns
    n_rows: int


@dataclass
class Source:
    """The chunks of one table; `fingerprints` is complete when they have all been read.

    fingerprints: path as given, or redacted URL and query -> SHA-256.
    paths: file, as chunks name it -> where it is; empty for a query.
    """

    settings: TableSettings
    folder: Path
    wanted: Wanted
    fingerprints: dict[str, str] = field(default_factory=dict)
    paths: dict[str, Path] = field(default_factory=dict)

    def chunks(self) -> Iterator[Chunk]:
        """Yield all rows in order, file by file. Raises `TableError`."""
        return self._from_query() if self.settings.is_database else self._from_files()

    def _from_query(self) -> Iterator[Chunk]:
        label, rows_hash = redact_url(self.settings.source), RowsHash()
        columns = read_query(self.settings, self.folder, self.wanted, rows_hash)
        yield from _numbered(label, columns)
        self.fingerprints[f"{label} {self.settings.query}"] = rows_hash.hexdigest()

    def _from_files(self) -> Iterator[Chunk]:
        files = find_files(self.settings.source, self.folder, self.wanted.table)
        self.paths.update(files)
        before = {label: _state_of(path) for label, path in files.items()}
        with ThreadPoolExecutor(max_workers=1) as pool:  # hashing runs beside reading
            hashes = {label: pool.submit(sha256_of, path) for label, path in files.items()}
            try:
                for label, path in files.items():
                    yield from _numbered(label, read_file(path, label, self.wanted))
                self.fingerprints.update((label, h.result()) for label, h in hashes.items())
            finally:
                pool.shutdown(wait=False, cancel_futures=True)
        for label, path in files.items():
            if _state_of(path) != before[label]:
                found = "one that another program has written to meanwhile"
                advice = "Start again when it is complete, or read a copy."
                raise TableError(explain(label, "file", "stay as it is", found, advice))


def _state_of(path: Path) -> tuple[int, ...]:
    """What tells whether a file has been written to; nothing for one that is gone."""
    try:
        info = path.stat()
    except OSError:
        return ()
    return info.st_ino, info.st_size, info.st_mtime_ns


def find_files(source: str, folder: Path, table: str) -> dict[str, Path]:
    """Return label -> path of the files a path or glob names, sorted by label.

    The label is the path as given, relative to `folder` where the source is.
    Raises `TableError` where there is none.
    """
    if is_file(folder / source):
        return {Path(source).as_posix(): folder / source}
    try:
        found = sorted(glob.glob(source, root_dir=folder, recursive=True))
    except (OSError, ValueError):  # a name that no system could hold
        found = []
    files = {Path(name).as_posix(): folder / name for name in found if is_file(folder / name)}
    if not files:
        is_pattern = glob.has_magic(source)
        rule = "match at least one file" if is_pattern else "be a file that exists"
        shown = source if len(source) <= _LONGEST_SHOWN else source[:_LONGEST_SHOWN] + "..."
        advice = where_it_leads(source, folder, (".csv", ".csv.gz", ".parquet"))
        raise TableError(explain(f"[{table}]", "source", rule, f'"{shown}"', advice))
    return files


def _numbered(label: str, chunks: Iterator[Columns]) -> Iterator[Chunk]:
    first_row = 1
    for columns in chunks:
        n_rows = len(next(iter(columns.values())))
        yield Chunk(label, first_row, columns, n_rows)
        first_row += n_rows
