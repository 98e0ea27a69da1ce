"""Where a ledger is kept: SQLite and PostgreSQL behind two kinds of transaction, to read and to
append. Everything that differs between the two is here.

SQLite: rollback journal, since a write-ahead log is unsafe on network shares; ``synchronous``
EXTRA, which is FULL and flushes the folder too, so that not even the removal of the journal, which
is the commit, can be lost. Appends begin by taking the lock (BEGIN IMMEDIATE).

PostgreSQL: appends begin by taking an advisory lock, so that numbers have no holes and what was
read stays true; commits wait for the disk whatever the server's default is. Reads are read-only
transactions.
"""

from __future__ import annotations

import logging
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import sqlalchemy as sa
from sqlalchemy.exc import ArgumentError, SQLAlchemyError

from miner.errors import LedgerError, explain
from miner.settings.values import is_url, mask_credentials, redact_url

SQLITE, POSTGRESQL = "sqlite", "postgresql"
SCHEMES = {
    "sqlite": SQLITE,
    "sqlite+pysqlite": SQLITE,
    "postgres": POSTGRESQL,
    "postgresql": POSTGRESQL,
    "postgresql+psycopg": POSTGRESQL,
}
LOCK = 0x6C65_6467_6572  # of the advisory lock: "ledger"
APPENDING = "ledger_appending"
_ADVICE = (
    # what is in the database's own words, what to try
    ("locked", "Somebody else is writing; try again."),
    ("lock timeout", "Somebody else is writing; try again."),
    ("disk is full", "Free some space; what was there is unharmed, nothing was entered."),
    ("disk i/o error", "Is the disk full? What was there is unharmed, nothing was entered."),
    ("no space left", "Free some space on the server; nothing was entered."),
    ("readonly", "Allow writing to the file and its folder."),
    ("read-only", "Name a server that can be written to."),
    ("permission denied", "Ask whoever keeps the database for the right to select and insert."),
    ("not a database", "Name another file: this one is no SQLite database."),
    ("malformed", "Bring back a copy: the file is damaged."),
)
_ELSE_FILE = "The folder has to exist, and both have to be yours to write."
_ELSE_SERVER = (
    "Check the URL, and that the server runs. If it stopped answering during an append, look "
    "whether that was entered before you repeat it."
)


class Place:
    """A ledger's database. Every transaction has a connection of its own.

    Parameters
    ----------
    where : path of a SQLite file, or a database URL
    wait_seconds : how long to wait for somebody else's append

    Raises
    ------
    LedgerError : it is neither, or the driver for it is not installed
    """

    def __init__(self, where: str | Path, *, wait_seconds: float) -> None:
        self.source = str(where)
        self.label = redact_url(self.source)
        self.wait_seconds = wait_seconds
        url = self._url()
        self.dialect = url.get_backend_name()
        self.file = Path(url.database or "") if self.dialect == SQLITE else None
        try:
            file = self.file
            self.engine = self._postgresql(url) if file is None else self._sqlite(file)
        except ImportError:
            advice = "Install it: .venv/bin/pip install '.[postgresql]' where this program lies."
            rule, found = "have its driver installed (psycopg)", "no such package"
            raise LedgerError(explain(self.label, "ledger", rule, found, advice)) from None

    def _url(self) -> sa.URL:
        if not is_url(self.source):
            return sa.URL.create("sqlite", database=self.source)
        try:
            url = sa.make_url(self.source)
        except (ArgumentError, ValueError):  # their messages may hold the password
            url = None
        scheme = "no URL" if url is None else url.drivername
        if url is None or scheme not in SCHEMES:
            rule = "be a file, or a URL that begins with sqlite:/// or postgresql://"
            raise LedgerError(explain(self.label, "ledger", rule, scheme))
        if SCHEMES[scheme] == POSTGRESQL:
            return url.set(drivername="postgresql+psycopg")
        if url.database in (None, "", ":memory:") or url.query:
            advice = "Write sqlite:///NAME.db, or just the path."
            raise LedgerError(
                explain(self.label, "ledger", "be a file", "no plain path of one", advice)
            )
        return url

    def _sqlite(self, file: Path) -> sa.Engine:
        def connect() -> Any:
            import sqlite3

            # rw also for reading: what a killed writer left has to be rolled back first
            uri = f"{file.absolute().as_uri()}?mode=rw"
            connection = sqlite3.connect(
                uri, uri=True, timeout=self.wait_seconds, isolation_level=None
            )
            connection.execute("PRAGMA synchronous = EXTRA")
            connection.execute("PRAGMA fullfsync = ON")
            return connection

        engine = sa.create_engine("sqlite://", creator=connect, poolclass=sa.NullPool)

        @sa.event.listens_for(engine, "begin")
        def begin(connection: sa.Connection) -> None:
            if not connection.get_execution_options().get(APPENDING):
                connection.exec_driver_sql("PRAGMA query_only = ON")
                connection.exec_driver_sql("BEGIN")
                return
            journal = connection.exec_driver_sql("PRAGMA journal_mode = DELETE").scalar()
            if journal != "delete":
                advice = "Name a file that only ledgers are kept in."
                raise LedgerError(
                    explain(self.label, "journal mode", "be DELETE", str(journal), advice)
                )
            connection.exec_driver_sql("BEGIN IMMEDIATE")

        return engine

    def _postgresql(self, url: sa.URL) -> sa.Engine:
        engine = sa.create_engine(
            url,
            poolclass=sa.NullPool,
            connect_args={"connect_timeout": max(2, round(min(self.wait_seconds, 30)))},
        )
        # of a lost connection the driver would also tell on standard error, if nobody listens
        logging.getLogger("psycopg").addHandler(logging.NullHandler())

        @sa.event.listens_for(engine, "begin")
        def begin(connection: sa.Connection) -> None:
            if not connection.get_execution_options().get(APPENDING):
                connection.exec_driver_sql("SET TRANSACTION READ ONLY")
                return
            # so that what is read after the lock is what others committed before it
            connection.exec_driver_sql("SET TRANSACTION ISOLATION LEVEL READ COMMITTED")
            if connection.exec_driver_sql("SHOW fsync").scalar() != "on":
                rule, found = "run with fsync on", "off"
                advice = "Without it a crash of the server's machine loses what was entered."
                raise LedgerError(explain(self.label, "server", rule, found, advice))
            connection.exec_driver_sql(
                "SELECT set_config('synchronous_commit', 'on', true)"
                " WHERE current_setting('synchronous_commit') = 'off'"
            )
            timeout = f"{max(1, round(self.wait_seconds * 1000))}ms"
            connection.execute(
                sa.text("SELECT set_config('lock_timeout', :t, true)"), {"t": timeout}
            )
            connection.execute(sa.text("SELECT pg_advisory_xact_lock(:n)"), {"n": LOCK})

        return engine

    @contextmanager
    def reading(self) -> Iterator[sa.Connection]:
        """A transaction that can change nothing.

        Raises
        ------
        LedgerError : the database does not answer
        """
        with self._transaction({}) as connection:
            yield connection

    @contextmanager
    def appending(self, *, create: bool = False) -> Iterator[sa.Connection]:
        """A transaction that nobody else's append can come between; on disk when it ends.

        Raises
        ------
        LedgerError : the database does not answer, or somebody else holds it for too long
        """
        if create and self.file is not None and not self.file.exists():
            try:
                self.file.touch()
            except OSError as error:
                rule, found = "be a file that can be made", f"the system's error: {error.strerror}"
                advice = "The folder has to exist and be yours to write."
                raise LedgerError(explain(self.label, "ledger", rule, found, advice)) from error
        with self._transaction({APPENDING: True}) as connection:
            yield connection

    @contextmanager
    def _transaction(self, options: dict[str, Any]) -> Iterator[sa.Connection]:
        if self.file is not None and not self.file.is_file():
            found = "something else" if self.file.exists() else "no such file"
            advice = "Check the path; a ledger is made when something is first entered."
            raise LedgerError(explain(self.label, "ledger", "be a ledger's file", found, advice))
        try:
            with (
                self.engine.connect().execution_options(**options) as connection,
                connection.begin(),
            ):
                yield connection
        except SQLAlchemyError as error:
            raise self._told(error) from None  # the original may hold the URL

    def _told(self, error: SQLAlchemyError) -> LedgerError:
        own = str(getattr(error, "orig", None) or error).strip().splitlines()[:1]
        found = mask_credentials(own[0] if own else type(error).__name__, self.source)
        found = found[:200].rstrip(".")
        lower = found.lower()
        other = _ELSE_FILE if self.file is not None else _ELSE_SERVER
        advice = next((advice for words, advice in _ADVICE if words in lower), other)
        return LedgerError(explain(self.label, "ledger", "answer", found, advice))

    def close(self) -> None:
        """Let go of the database."""
        self.engine.dispose()
