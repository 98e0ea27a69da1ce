"""From a table's settings to its chunks: which files or query, and the fingerprint of each."""

from __future__ import annotations

import glob
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path

from ..errors import TableError, explain
from ..settings import TableSettings, redact_url
from .databases import RowsHash, read_query
from .files import Columns, read_file, sha256_of
from .headers import Wanted


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
    """

    settings: TableSettings
    folder: Path
    wanted: Wanted
    fingerprints: dict[str, str] = field(default_factory=dict)

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
        with ThreadPoolExecutor(max_workers=1) as pool:  # hashing runs beside reading
            hashes = {label: pool.submit(sha256_of, path) for label, path in files.items()}
            try:
                for label, path in files.items():
                    yield from _numbered(label, read_file(path, label, self.wanted))
                self.fingerprints.update((label, h.result()) for label, h in hashes.items())
            finally:
                pool.shutdown(wait=False, cancel_futures=True)


def find_files(source: str, folder: Path, table: str) -> dict[str, Path]:
    """Return label -> path of the files a path or glob names, sorted by label.

    The label is the path as given, relative to `folder` where the source is.
    Raises `TableError` where there is none.
    """
    if (folder / source).is_file():
        return {Path(source).as_posix(): folder / source}
    found = sorted(glob.glob(source, root_dir=folder, recursive=True))
    files = {Path(name).as_posix(): folder / name for name in found if (folder / name).is_file()}
    if not files:
        is_pattern = glob.has_magic(source)
        rule = "match at least one file" if is_pattern else "be a file that exists"
        advice = f"Paths are relative to the folder of the settings, {folder}."
        raise TableError(explain(f"[{table}]", "source", rule, f'"{source}"', advice))
    return files


def _numbered(label: str, chunks: Iterator[Columns]) -> Iterator[Chunk]:
    first_row = 1
    for columns in chunks:
        n_rows = len(next(iter(columns.values())))
        yield Chunk(label, first_row, columns, n_rows)
        first_row += n_rows
