"""Entries as rows of a ledger's table, inside a transaction: added, chosen, and read back."""

from __future__ import annotations

import json
from collections.abc import Collection, Sequence
from typing import Any

import sqlalchemy as sa

from miner.errors import LedgerError, explain

from . import chain
from .kinds import check_text, checked
from .records import Entry, Item
from .schema import entries as table

PAGE = 2000  # entries read at a time


def add_entries(
    connection: sa.Connection, items: Sequence[Item], who: str, why: str, stamp: str, label: str
) -> tuple[Entry, ...]:
    """Check items, chain them to the last entry, and insert them.

    Raises
    ------
    LedgerError : an item is not what its kind must be, or who or why is not said
    """
    said = {"stamp": stamp, "who": check_text(who, label, "who")}
    said["why"] = check_text(why, label, "why")
    fields = [{**said, **checked(item, f"item {i}")} for i, item in enumerate(items, start=1)]
    if not fields:
        return ()
    last = connection.execute(
        sa.select(table.c.number, table.c.hash).order_by(table.c.number.desc()).limit(1)
    ).first()
    number, previous = (last.number, last.hash) if last else (0, chain.GENESIS)
    added = tuple(chain.chained(fields, number, previous))
    connection.execute(
        table.insert(),
        [vars(entry) | {"body": chain.canonical(entry.body)} for entry in added],
    )
    return added


def conditions(
    kinds: Collection[str] | None, rule: str | None, quarter: str | None
) -> list[sa.ColumnElement[bool]]:
    """What an entry has to be to be chosen; None chooses all."""
    wanted: list[sa.ColumnElement[bool]] = []
    if kinds is not None:
        wanted.append(table.c.kind.in_(sorted(kinds)))
    if rule is not None:
        wanted.append(table.c.rule == rule)
    if quarter is not None:
        wanted.append(table.c.quarter == quarter)
    return wanted


def last_number(connection: sa.Connection) -> int:
    """The number of the last entry, 0 in an empty ledger."""
    return connection.scalar(sa.select(sa.func.max(table.c.number))) or 0


def rule_names(connection: sa.Connection) -> list[str]:
    """Every rule that something is entered about."""
    known = connection.scalars(sa.select(table.c.rule).distinct())
    return sorted(name for name in known if name is not None)


def page_of(
    connection: sa.Connection, wanted: Sequence[Any], after: int, last: int
) -> Sequence[Any]:
    """The next rows above number ``after`` and up to ``last``, at most ``PAGE``."""
    number = table.c.number
    query = sa.select(table).where(number > after, number <= last, *wanted)
    return connection.execute(query.order_by(number).limit(PAGE)).all()


def as_entry(row: Any, label: str) -> Entry:
    """A row as the entry it holds.

    Raises
    ------
    LedgerError : its body is not as it was written
    """
    stored = as_stored(row)
    if stored.entry is None:
        advice = "Check the whole ledger (miner ledger verify)."
        rule, found = "be as it was written", stored.problem
        raise LedgerError(explain(label, f"entry {row.number}", rule, found, advice))
    return stored.entry


def as_stored(row: Any) -> chain.Stored:
    """A row as the entry it holds, or why it holds none."""
    try:
        body = json.loads(row.body)
        if not isinstance(body, dict) or chain.canonical(body) != row.body:
            raise ValueError
    except (ValueError, RecursionError):
        return chain.Stored(row.number, None, "changed: its body is not as it was written")
    return chain.Stored(row.number, Entry(**{**row._mapping, "body": body}))
