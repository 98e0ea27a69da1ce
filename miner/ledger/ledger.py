"""A ledger: entries that are only ever added to, each chained to the one before."""

from __future__ import annotations

import datetime as dt
import getpass
from collections.abc import Callable, Collection, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any

import sqlalchemy as sa

from miner.errors import LedgerError, explain
from miner.settings.values import nearest

from . import chain, schema
from .places import Place
from .records import Entry, Item, Verified
from .rows import (
    add_entries,
    as_entry,
    as_stored,
    conditions,
    last_number,
    page_of,
    rule_names,
)

BEFORE_ALL = -(2**62)  # a number that no entry has, not even one that somebody forged


def open_ledger(
    where: str | Path, *, create: bool = True, read_only: bool = False, wait_seconds: float = 60.0
) -> Ledger:
    """Open a ledger, bringing its schema up to date.

    Parameters
    ----------
    where : path of a SQLite file, or a URL (sqlite:///, postgresql://)
    create : make it if it is not there
    read_only : neither make nor change anything
    wait_seconds : how long to wait for others who are writing

    Raises
    ------
    LedgerError : it is not there, is no ledger, is of a newer version of this program, or its
        database does not answer
    """
    place = Place(where, wait_seconds=wait_seconds)
    version = _version(place)
    if version == 0 and (read_only or not create):
        raise LedgerError(explain(place.label, "ledger", *_nothing_in(place)))
    if version < schema.NEWEST and not read_only:
        with place.appending(create=create) as connection:
            version = _known(schema.version_of(connection), place)  # others may have been here
            if version == 0 and place.file is not None and schema.other_tables(connection):
                rule, found = "be a file of its own", "a database that holds other tables"
                raise LedgerError(explain(place.label, "ledger", rule, found, "Name another file."))
            schema.migrate(connection, version, schema.NEWEST, _now())
    return Ledger(place, read_only=read_only)


def has_ledger(where: str | Path) -> bool:
    """Whether there is a ledger already.

    Raises
    ------
    LedgerError : what is there cannot be read
    """
    place = Place(where, wait_seconds=60.0)
    try:
        return _version(place) > 0
    finally:
        place.close()


def _nothing_in(place: Place) -> tuple[str, str, str]:
    if place.file is None or not place.file.exists():
        return "be there", "nothing", "Check where it is."
    if place.file.stat().st_size == 0:
        advice = "Nothing was ever entered in it; check the path."
        return "hold a ledger", "an empty file", advice
    return "hold a ledger", "a database without one", "Check the path."


def _version(place: Place) -> int:
    if place.file is not None and not place.file.exists():
        return 0
    with place.reading() as connection:
        return _known(schema.version_of(connection), place)


def _known(version: int, place: Place) -> int:
    if version > schema.NEWEST:
        rule = f"be of version {schema.NEWEST} or older"
        advice = "A newer version of this program made it: use that one."
        raise LedgerError(explain(place.label, "ledger", rule, f"version {version}", advice))
    return version


def login_name() -> str:
    """The name of whoever runs this, as far as the system knows."""
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):  # no such user in the system's list
        return "unknown"


class Turn:
    """What one who holds the ledger alone can do: read what is there, and append to it."""

    def __init__(self, connection: sa.Connection, now: Callable[[], str], label: str) -> None:
        self._connection = connection
        self._now = now
        self._label = label

    def append(self, items: Sequence[Item], *, who: str, why: str) -> tuple[Entry, ...]:
        """Add entries; they are in the ledger once the turn has ended. See ``Ledger.append``."""
        return add_entries(self._connection, items, who, why, self._now(), self._label)

    def entries(
        self,
        *,
        kinds: Collection[str] | None = None,
        rule: str | None = None,
        quarter: str | None = None,
        after: int = 0,
    ) -> Iterator[Entry]:
        """The entries there are, appended ones included. See ``Ledger.entries``."""
        wanted = conditions(kinds, rule, quarter)
        last = last_number(self._connection)
        while rows := page_of(self._connection, wanted, after, last):
            yield from (as_entry(row, self._label) for row in rows)
            after = rows[-1].number

    def verify(self) -> Verified:
        """Check every entry there is and the chain of hashes. See ``Ledger.verify``."""
        return chain.verify(self._stored())

    def _stored(self) -> Iterator[chain.Stored]:
        last, after = last_number(self._connection), BEFORE_ALL
        while rows := page_of(self._connection, [], after, last):
            yield from (as_stored(row) for row in rows)
            after = rows[-1].number


class Ledger:
    """A ledger, as ``open_ledger`` returns it; to be used in a ``with`` block or closed.

    Any number of processes and threads can use one database at once.
    """

    def __init__(self, place: Place, *, read_only: bool) -> None:
        self._place = place
        self._read_only = read_only

    @property
    def label(self) -> str:
        """Where it is, without user or password."""
        return self._place.label

    def append(self, items: Sequence[Item], *, who: str, why: str) -> tuple[Entry, ...]:
        """Add entries in one transaction: all of them or none. They are on disk when this returns.

        Raises
        ------
        LedgerError : an item is not what its kind must be, or the database does not take them
        """
        with self.exclusive() as turn:
            added = turn.append(items, who=who, why=why)
        return added

    @contextmanager
    def exclusive(self) -> Iterator[Turn]:
        """Hold the ledger alone, to read, decide and append with nobody coming between.

        Everything appended in the block is one transaction: on disk when the block ends, gone if it
        raises. Others who want to append wait, so compute what is slow before it.

        Raises
        ------
        LedgerError : somebody else holds it for too long, or the database does not answer
        """
        if self._read_only:
            rule, found = "be open for writing", "one open for reading only"
            raise LedgerError(explain(self.label, "ledger", rule, found))
        with self._place.appending() as connection:
            yield Turn(connection, _now, self.label)

    def entries(
        self,
        *,
        kinds: Collection[str] | None = None,
        rule: str | None = None,
        quarter: str | None = None,
        after: int = 0,
    ) -> Iterator[Entry]:
        """The entries that are there when the first is asked for, in the order of their numbers.

        Parameters
        ----------
        kinds, rule, quarter : only those of these
        after : only those with a larger number

        Raises
        ------
        LedgerError : one cannot be read, or the database does not answer
        """
        for rows in self._pages(conditions(kinds, rule, quarter), after):
            yield from (as_entry(row, self.label) for row in rows)

    def _pages(self, wanted: Sequence[Any], after: int) -> Iterator[Sequence[Any]]:
        """Rows, a page and short transaction at a time, so that no reader holds up a writer."""
        last = None
        while True:
            with self._place.reading() as connection:
                last = last_number(connection) if last is None else last
                rows = page_of(connection, wanted, after, last)
            if not rows:
                return
            yield rows
            after = rows[-1].number

    def life(self, rule: str, *, must_be_known: bool = False) -> tuple[Entry, ...]:
        """Everything about one rule, oldest first.

        Where it ``must_be_known``, the beginning of its id is enough if no other begins so.

        Raises
        ------
        LedgerError : there is nothing about it although ``must_be_known``
        """
        found = tuple(self.entries(rule=rule))
        if not found and must_be_known:
            with self._place.reading() as connection:
                names = rule_names(connection)
            begun = [name for name in names if rule and name.startswith(rule)]
            if len(begun) == 1:
                return self.life(begun[0])
            advice = f"Several begin so: {', '.join(begun[:5])}." if begun else nearest(rule, names)
            told = explain(self.label, "rule", "be one the ledger knows", f'"{rule}"', advice)
            raise LedgerError(told)
        return found

    def last(self) -> Entry | None:
        """The last entry, or None in an empty ledger."""
        with self._place.reading() as connection:
            number = last_number(connection)
            rows = page_of(connection, [], number - 1, number)
        return as_entry(rows[0], self.label) if rows else None

    def verify(self, known: str | None = None) -> Verified:
        """Check every entry and the chain of hashes; stops at the first that is not whole.

        Parameters
        ----------
        known : a hash noted earlier. It has to be that of an entry: a removed tail shows only so
        """
        rows = (row for page in self._pages([], BEFORE_ALL) for row in page)
        return chain.verify((as_stored(row) for row in rows), known)

    def close(self) -> None:
        """Let go of the database."""
        self._place.close()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def _now() -> str:
    return dt.datetime.now(dt.UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")
