"""The result of a database query, chunk by chunk, as arrow arrays under the table's own names."""

from __future__ import annotations

import datetime as dt
import hashlib
import re
import sqlite3
import uuid
from collections.abc import Callable, Iterator, Sequence
from decimal import Decimal
from pathlib import Path
from typing import Any

import pyarrow as pa

from ..errors import TableError, explain
from ..settings import TableSettings, mask_credentials, redact_url
from ..settings.paths import is_file, where_it_leads
from .files import Columns
from .headers import Wanted, match_columns

_CHUNK_ROWS = 50_000
# what a query must not do, the database is asked to refuse
_READ_ONLY = {
    "sqlite": ("PRAGMA query_only = ON",),
    "postgresql": ("SET default_transaction_read_only = on", "SET TRANSACTION READ ONLY"),
}
_ATTACH = 24  # the action code SQLITE_ATTACH of SQLite's C interface
_WRITES = re.compile("readonly database|read-only transaction")


class RowsHash:
    """A fingerprint of rows that does not depend on the order a database returns them in:
    the sum of the rows' SHA-256 modulo 2**256."""

    def __init__(self) -> None:
        self._total = 0

    def add(self, rows: Sequence[Any]) -> None:
        """Take in a chunk of rows."""
        self._total += sum(
            int.from_bytes(hashlib.sha256(repr(tuple(row)).encode()).digest(), "big")
            for row in rows
        )

    def hexdigest(self) -> str:
        """Return the fingerprint of the rows so far."""
        return f"{self._total % 2**256:064x}"


def _refuse_other_files(connection: Any) -> None:
    """An attached database would be made where there is none, even by a query that only reads."""
    connection.set_authorizer(
        lambda action, *_: sqlite3.SQLITE_DENY if action == _ATTACH else sqlite3.SQLITE_OK
    )


def read_query(
    settings: TableSettings, folder: Path, wanted: Wanted, rows_hash: RowsHash
) -> Iterator[Columns]:
    """Yield a query's wanted columns chunk by chunk, streamed, and hash all its rows.

    The path of an SQLite file is relative to `folder`. Raises `TableError`, without credentials.
    """
    try:
        import sqlalchemy
        from sqlalchemy.exc import SQLAlchemyError
    except ImportError as error:
        advice = "Install it: pip install sqlalchemy."
        rule, found = "have SQLAlchemy installed to read a database", "no such package"
        raise TableError(explain(f"[{wanted.table}]", "source", rule, found, advice)) from error
    label = redact_url(settings.source)
    engine = None
    try:
        url = _located(sqlalchemy.make_url(settings.source), folder, label)
        engine = sqlalchemy.create_engine(url, poolclass=sqlalchemy.NullPool)
        options = {"stream_results": True, "no_parameters": True, "max_row_buffer": _CHUNK_ROWS}
        with engine.connect() as connection:
            for statement in _READ_ONLY.get(url.get_backend_name(), ()):
                connection.exec_driver_sql(statement)
            if url.get_backend_name() == "sqlite":
                _refuse_other_files(connection.connection.driver_connection)
            connection.execution_options(**options)  # from here on rows are streamed
            result = connection.exec_driver_sql(settings.query or "")
            if not result.returns_rows:
                raise _no_select(label, "none")
            header = list(result.keys())
            matched = match_columns(header, wanted, label)
            at = {column: header.index(name) for column, name in matched.items()}
            for rows in result.partitions(_CHUNK_ROWS):
                rows_hash.add(rows)
                yield {
                    column: _as_text(
                        [row[k] for row in rows], matched[column], column not in wanted.names, label
                    )
                    for column, k in at.items()
                }
    except (SQLAlchemyError, ImportError, ValueError) as error:
        found = _without_credentials(error, settings.source)
        if _WRITES.search(found):
            raise _no_select(label, found) from None
        advice = "Check the URL and the query; the database's own driver must be installed."
        # the original is not chained: it may hold the URL
        raise TableError(explain(label, "database", "answer the query", found, advice)) from None
    finally:
        if engine is not None:
            engine.dispose()


def _no_select(label: str, found: str) -> TableError:
    rule = "return rows and change nothing"
    return TableError(explain(label, "query", rule, found, "Write a select."))


def _located(url: Any, folder: Path, label: str) -> Any:
    """Place an SQLite file relative to the study's folder; it must exist, or one is made."""
    name = url.database
    if url.get_backend_name() != "sqlite" or not name or name == ":memory:":
        return url
    if name.startswith("file:"):
        return url
    path = folder / name
    if not is_file(path):
        advice = where_it_leads(name, folder, (".db", ".sqlite", ".sqlite3"))
        raise TableError(explain(label, "database", "exist", "no such file", advice))
    return url.set(database=str(path))


def _as_text(values: Sequence[Any], column: str, is_value: bool, label: str) -> pa.Array:
    """Return a column as text. A time or number that is none becomes text, refused later."""
    plain: Callable[[Any], str | None] = _time_text if is_value else _name_text
    try:
        return pa.array([v if type(v) is str else plain(v) for v in values], pa.string())
    except TypeError as error:
        rule, advice = "hold text or whole numbers", "Turn it into text in the query."
        raise TableError(explain(label, f"column {column}", rule, str(error), advice)) from None


def _time_text(value: Any) -> str | None:
    if isinstance(value, dt.date):  # a datetime is a date
        return value.isoformat()
    return None if value is None else str(value)


def _name_text(value: Any) -> str | None:
    """Return a name; raises `TypeError` for what is no text and no whole number."""
    if value is None:
        return None
    if isinstance(value, bytes):
        return value.decode("utf-8")
    if isinstance(value, Decimal) and value % 1 == 0:
        return str(int(value))
    if isinstance(value, int | uuid.UUID) and not isinstance(value, bool):
        return str(value)
    raise TypeError(f"{value!r} of type {type(value).__name__}")


def _without_credentials(error: Exception, source: str) -> str:
    """Return the first line of a database's own message, user and password blanked out."""
    text = str(getattr(error, "orig", None) or error).strip().splitlines()[:1]
    found = text[0] if text else type(error).__name__
    return mask_credentials(found, source)[:200].rstrip(".")
