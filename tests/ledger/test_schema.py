"""Versions of the schema: from an old one to the newest, whole or not at all."""

import sqlite3

import pytest
import sqlalchemy as sa

from miner.errors import LedgerError
from miner.ledger import open_ledger, rows, schema
from miner.ledger.places import Place


def made_as_version_1(where: str, items) -> list:
    """A ledger as the first version of the program made it; returns its entries."""
    place = Place(where, wait_seconds=5)
    with place.appending(create=True) as connection:
        schema.migrate(connection, 0, 1, "2025-01-01T00:00:00.000000Z")
        return list(rows.add_entries(connection, items, "Ann", "then", "2025", "x"))


def state(where: str) -> tuple[int, set[str]]:
    """The version, and the names of the indexes on the entries."""
    with Place(where, wait_seconds=5).reading() as connection:
        indexes = sa.inspect(connection).get_indexes(schema.ENTRIES)
        return schema.version_of(connection), {index["name"] for index in indexes}


INDEXES = {"ledger_entries_rule", "ledger_entries_quarter", "ledger_entries_kind"}


def test_a_ledger_of_version_1_is_brought_up_to_date(where, decision):
    before = made_as_version_1(where, [decision(), decision("r2")])
    version, indexes = state(where)
    assert version == 1
    assert not indexes & INDEXES
    with open_ledger(where, read_only=True) as ledger:  # reading needs no migration, makes none
        assert list(ledger.entries()) == before
    assert state(where)[0] == 1
    with open_ledger(where) as ledger:
        assert list(ledger.entries()) == before
        assert ledger.verify().broken is None
        ledger.append([decision("r3")], who="a", why="b")
        assert ledger.verify().count == 3
    version, indexes = state(where)
    assert version == schema.NEWEST == 2
    assert indexes >= INDEXES
    with open_ledger(where) as ledger:  # and once is enough
        assert ledger.verify().count == 3
    with Place(where, wait_seconds=5).reading() as connection:
        versions = connection.scalars(sa.select(schema.versions.c.version)).all()
    assert sorted(versions) == [1, 2]


def test_a_new_ledger_and_a_migrated_one_are_made_alike(tmp_path, decision):
    made_as_version_1(str(tmp_path / "old.db"), [decision()])
    for name in ("old.db", "new.db"):
        open_ledger(tmp_path / name).close()
    old, new = (
        sqlite3.connect(tmp_path / name).execute(
            "SELECT type, name, sql FROM sqlite_master ORDER BY name"
        ).fetchall()
        for name in ("old.db", "new.db")
    )  # fmt: skip
    assert old == new
    assert len(new) > 8


def test_a_migration_that_fails_leaves_the_old_version(where, decision, monkeypatch):
    before = made_as_version_1(where, [decision()])
    right = schema.STEPS
    wrong = [*schema._second(Place(where, wait_seconds=5).dialect), "CREATE nonsense"]
    monkeypatch.setattr(schema, "STEPS", (right[0], lambda dialect: wrong))
    with pytest.raises(LedgerError, match=r"must answer; got .*syntax error"):
        open_ledger(where)
    version, indexes = state(where)
    assert version == 1
    assert not indexes & INDEXES
    monkeypatch.setattr(schema, "STEPS", right)
    with open_ledger(where) as ledger:
        assert list(ledger.entries()) == before
    assert state(where)[0] == 2


def test_a_ledger_of_a_newer_program_is_refused(where, decision):
    with open_ledger(where) as ledger:
        ledger.append([decision()], who="a", why="b")
    with Place(where, wait_seconds=5).appending() as connection:
        connection.execute(schema.versions.insert().values(version=3, stamp="x"))
    for read_only in (True, False):
        with pytest.raises(LedgerError, match=r"of version 2 or older; got version 3\. A newer"):
            open_ledger(where, read_only=read_only)


def test_somebody_elses_database_is_left_alone(tmp_path):
    path = tmp_path / "desk.db"
    with sqlite3.connect(path) as connection:
        connection.execute("CREATE TABLE trades (price)")
    content = path.read_bytes()
    with pytest.raises(LedgerError, match="be a file of its own; got a database that holds other"):
        open_ledger(path)
    assert path.read_bytes() == content


def test_sqlite_is_told_to_be_safe(tmp_path, decision):
    path = tmp_path / "x.db"
    with open_ledger(path) as ledger:
        ledger.append([decision()], who="a", why="b")
    with Place(str(path), wait_seconds=5).appending() as connection:
        asked = ("journal_mode", "synchronous")
        found = [connection.exec_driver_sql(f"PRAGMA {name}").scalar() for name in asked]
        strict = connection.exec_driver_sql("PRAGMA table_list").mappings().all()
    assert found == ["delete", 3]  # 3: EXTRA
    assert {row["name"] for row in strict if row["strict"]} == {schema.ENTRIES, schema.VERSIONS}
    with sqlite3.connect(path) as connection:  # whoever made a write-ahead log of it
        connection.execute("PRAGMA journal_mode = WAL")
    with open_ledger(path) as ledger:
        ledger.append([decision()], who="a", why="b")
    assert sqlite3.connect(path).execute("PRAGMA journal_mode").fetchone() == ("delete",)
