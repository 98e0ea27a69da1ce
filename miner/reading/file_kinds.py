"""Which files are tables, and what to try with those that are not."""

from __future__ import annotations

from pathlib import Path

_EXPORT = "Export it as csv or parquet and name that file."
_ADVICE: tuple[tuple[tuple[str, ...], str], ...] = (
    ((".xlsx", ".xls", ".xlsm", ".xlsb", ".ods"),
     "That is a spreadsheet: export the sheet as csv (UTF-8) or parquet and name that file."),
    ((".csv.zip", ".csv.bz2", ".csv.xz", ".csv.zst", ".zip", ".7z", ".tar", ".tgz"),
     "Unpack it, or pack the csv with gzip as .csv.gz."),
    ((".tsv", ".txt", ".tab", ".dat"),
     "If it holds columns parted by commas, end its name in .csv; else export it as csv."),
    ((".pkl", ".pickle"), f"A pickle can run code and is never read. {_EXPORT}"),
    ((".db", ".sqlite", ".sqlite3"),
     'Write source = "sqlite:///{label}" and a query to read that database.'),
    ((".gz",), "End its name in .csv.gz if it is a packed csv."),
)  # fmt: skip


def advice_on(label: str) -> str:
    """Return what to try with a file whose name ends in none that is read."""
    name = label.lower()
    for endings, advice in _ADVICE:
        if name.endswith(endings):
            return advice.format(label=label)
    return _EXPORT


UTF_16 = "UTF-16 or UTF-32 text"
_MAGIC: tuple[tuple[bytes, str, str], ...] = (
    (b"\x1f\x8b", "a gzip-packed file", "If it is a packed csv, end its name in .csv.gz."),
    (b"PAR1", "a parquet file", "End its name in .parquet."),
    (b"PK\x03\x04", "a zip file or spreadsheet", _EXPORT),
    (b"\xff\xfe", UTF_16, "Save it as UTF-8."),
    (b"\xfe\xff", UTF_16, "Save it as UTF-8."),
    (b"\xd0\xcf\x11\xe0", "an old spreadsheet", _EXPORT),
    (b"SQLite format 3", "an SQLite database", 'Write source = "sqlite:///..." and a query.'),
    (b"<!DOCTYPE", "a web page", "Was a login page saved in place of the export?"),
    (b"<html", "a web page", "Was a login page saved in place of the export?"),
    (b"{", "JSON", _EXPORT),
    (b"[{", "JSON", _EXPORT),
)  # fmt: skip
_KIND_OF_ENDING = {".csv.gz": "a gzip-packed file", ".parquet": "a parquet file"}


def other_kind(path: Path) -> tuple[str, str] | None:
    """Return what a file seems to be by its first bytes and what to try, if not what it is called.

    None where nothing shows, or the file cannot be read.
    """
    try:
        with path.open("rb") as file:
            head = file.read(32).lstrip()
    except OSError:
        return None
    for magic, kind, advice in _MAGIC:
        if head[: len(magic)].lower() == magic.lower():
            is_called_so = any(
                path.name.lower().endswith(ending) and kind == its_kind
                for ending, its_kind in _KIND_OF_ENDING.items()
            )
            return None if is_called_so else (kind, advice)
    return None
