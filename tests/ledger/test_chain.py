"""The chain of hashes against a twin of its own, and everything that breaks it."""

import hashlib
import json

import pytest
import sqlalchemy as sa

from miner.errors import LedgerError
from miner.ledger import Broken, Verified, open_ledger
from miner.ledger.places import Place

GUARDS = ("ledger_entries_no_update", "ledger_entries_no_delete", "ledger_entries_follow")


def twin_hash(entry) -> str:
    """The hash of an entry, by the module's words alone."""
    body = json.dumps(entry.body, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    texts = {k: json.dumps(getattr(entry, k), ensure_ascii=False)
             for k in ("kind", "previous", "quarter", "rule", "stamp", "who", "why")}  # fmt: skip
    texts |= {"body": body, "number": str(entry.number)}
    line = "{" + ",".join(f'"{key}":{texts[key]}' for key in sorted(texts)) + "}"
    return hashlib.sha256(line.encode("utf-8")).hexdigest()


def change(where: str, *statements: str) -> None:
    """Change a ledger as somebody would who has first removed its guards."""
    place = Place(where, wait_seconds=5)
    with place.appending() as connection:
        if place.file is not None:
            for name in GUARDS:
                connection.exec_driver_sql(f"DROP TRIGGER IF EXISTS {name}")
        else:
            connection.exec_driver_sql("ALTER TABLE ledger_entries DISABLE TRIGGER USER")
        for statement in statements:
            assert connection.exec_driver_sql(statement).rowcount > 0


@pytest.fixture
def filled(where, decision):
    with open_ledger(where) as ledger:
        ledger.append([decision(word="é")], who="Ann", why="first")
        ledger.append([decision("r2", None), decision("r3"), decision("r4")], who="Bo", why="more")
        ledger.append([decision("r5")], who="Ann", why="last")
    return where


def test_hashes_are_those_of_the_twin_and_chain(filled):
    with open_ledger(filled, read_only=True) as ledger:
        entries = list(ledger.entries())
        assert len(entries) == 5
        assert [entry.hash for entry in entries] == [twin_hash(entry) for entry in entries]
        assert [entry.previous for entry in entries] == ["0" * 64, *(e.hash for e in entries[:-1])]
        assert ledger.verify() == Verified(5, entries[-1].hash, None)
        assert ledger.verify(known=entries[2].hash) == Verified(5, entries[-1].hash, None)
        ledger.verify().raise_if_broken("x")


def test_an_empty_ledger_is_whole(where):
    with open_ledger(where) as ledger:
        assert ledger.verify() == Verified(0, None, None)
        assert ledger.verify(known="a" * 64).broken is not None


@pytest.mark.parametrize(
    "column", ["stamp", "kind", "rule", "quarter", "who", "why", "previous", "hash"]
)
def test_a_changed_field_is_found(filled, column):
    other = "0" * 64 if column in ("previous", "hash") else "other"
    change(filled, f"UPDATE ledger_entries SET {column} = '{other}' WHERE number = 3")
    with open_ledger(filled) as ledger:
        verified = ledger.verify()
        before = list(ledger.entries())[1]
    assert (verified.count, verified.last_hash) == (2, before.hash)
    assert verified.broken.number == 3
    with pytest.raises(LedgerError, match="`entry 3` must be as it was written"):
        verified.raise_if_broken("x")


@pytest.mark.parametrize(
    "body",
    ['{"after":"watch","before":"live","contract":1,"x":1}', "{}", "[]", "no json", '{"a":NaN}',
     '{"before":"live","after":"watch","contract":1}'],
)  # fmt: skip
def test_a_changed_body_is_found(filled, body):
    change(filled, f"UPDATE ledger_entries SET body = '{body}' WHERE number = 3")
    with open_ledger(filled) as ledger:
        assert ledger.verify().broken.number == 3
        assert "changed" in ledger.verify().broken.problem


def test_a_body_that_is_no_json_is_told_by_whoever_reads_it(filled):
    change(filled, "UPDATE ledger_entries SET body = 'no json' WHERE number = 3")
    with open_ledger(filled) as ledger, pytest.raises(LedgerError, match="miner ledger verify"):
        list(ledger.entries())


def test_holes_strangers_and_exchanged_entries_are_found(filled):
    change(filled, "DELETE FROM ledger_entries WHERE number = 3")
    with open_ledger(filled) as ledger:
        assert ledger.verify().broken == Broken(
            3, "missing: the next entry that is there has number 4"
        )
    change(filled, "UPDATE ledger_entries SET number = 3 WHERE number = 4")
    with open_ledger(filled) as ledger:
        assert ledger.verify().broken.number == 3
        assert "follow" in ledger.verify().broken.problem
    change(filled, "UPDATE ledger_entries SET number = -1 WHERE number = 1")
    with open_ledger(filled) as ledger:
        assert ledger.verify().broken.number == 1


def test_a_removed_tail_shows_by_a_hash_noted_earlier(filled):
    with open_ledger(filled) as ledger:
        noted = ledger.last().hash
    change(filled, "DELETE FROM ledger_entries WHERE number = 5")
    with open_ledger(filled) as ledger:
        assert ledger.verify().broken is None
        verified = ledger.verify(known=noted)
    assert verified.count == 4
    assert verified.broken.number == 5
    assert "end was removed" in verified.broken.problem


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE ledger_entries SET who = 'x' WHERE number = 2",
        "DELETE FROM ledger_entries",
        "DELETE FROM ledger_entries WHERE number = 5",
        "UPDATE ledger_versions SET version = 7",
        "DELETE FROM ledger_versions",
        "INSERT INTO ledger_entries SELECT number + 2, stamp, kind, rule, quarter, who, why, body,"
        " hash, 'h' FROM ledger_entries WHERE number = 5",
        "INSERT INTO ledger_entries SELECT number + 1, stamp, kind, rule, quarter, who, why, body,"
        " previous, 'h' FROM ledger_entries WHERE number = 5",
        "INSERT OR REPLACE INTO ledger_entries SELECT number, stamp, kind, rule, quarter, 'x', why,"
        " body, previous, 'h' FROM ledger_entries WHERE number = 5",
        "INSERT INTO ledger_entries SELECT * FROM ledger_entries WHERE number = 5",
        "TRUNCATE ledger_entries",
    ],
)
def test_the_database_itself_refuses_changes(filled, statement):
    """Whoever opens the database with another program is held to the same."""
    place = Place(filled, wait_seconds=5)
    sqlite_only, postgresql_only = "OR REPLACE" in statement, "TRUNCATE" in statement
    if (place.file is None and sqlite_only) or (place.file is not None and postgresql_only):
        statement = "DELETE FROM ledger_entries WHERE number = 1"
    with place.engine.connect() as connection:
        raw = connection.connection.dbapi_connection
        cursor = raw.cursor()
        with pytest.raises(Exception, match=r"a ledger only grows|an entry has to follow"):
            cursor.execute(statement)
        raw.rollback()
    with open_ledger(filled) as ledger:
        assert ledger.verify().count == 5
        assert ledger.verify().broken is None


def test_reading_cannot_write(filled):
    place = Place(filled, wait_seconds=5)
    insert = "INSERT INTO ledger_versions VALUES (9, 'x')"
    with pytest.raises(LedgerError, match=r"read-?only"), place.reading() as connection:
        connection.execute(sa.text(insert))
    with place.appending() as connection:
        connection.execute(sa.text(insert))
