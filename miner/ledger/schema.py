"""The ledger's tables, as an ordered list of steps from nothing to the newest version.

A step that was ever released stays as it is: ledgers were made by it. A change of the schema is a
new step at the end, in both dialects. The tables refuse changes themselves: entries are numbered
without holes, each must hold the hash of the one before, and none can be updated or deleted.
"""

from __future__ import annotations

import sqlalchemy as sa

ENTRIES = "ledger_entries"
VERSIONS = "ledger_versions"
COLUMNS = (
    "number", "stamp", "kind", "rule", "quarter", "who", "why", "body", "previous", "hash",
)  # fmt: skip

entries = sa.table(
    ENTRIES,
    sa.column("number", sa.BigInteger),
    *(sa.column(name, sa.Text) for name in COLUMNS[1:]),
)
versions = sa.table(VERSIONS, sa.column("version", sa.Integer), sa.column("stamp", sa.Text))

APPEND_ONLY = "a ledger only grows"
NO_HOLE = "an entry has to follow the last one"

_REFUSE_IN_POSTGRESQL = f"""
CREATE FUNCTION ledger_refuse() RETURNS trigger LANGUAGE plpgsql AS
$$ BEGIN RAISE EXCEPTION '{APPEND_ONLY}'; END $$"""

_FOLLOW_IN_POSTGRESQL = f"""
CREATE FUNCTION ledger_follow() RETURNS trigger LANGUAGE plpgsql AS
$$
DECLARE
    last_number bigint;
    last_hash text;
BEGIN
    SELECT number, hash INTO last_number, last_hash
        FROM {ENTRIES} ORDER BY number DESC LIMIT 1;
    IF NEW.number <> coalesce(last_number, 0) + 1
        OR (last_hash IS NOT NULL AND NEW.previous <> last_hash) THEN
        RAISE EXCEPTION '{NO_HOLE}';
    END IF;
    RETURN NEW;
END
$$"""


def _tables(dialect: str) -> list[str]:
    whole, end = ("INTEGER", " STRICT") if dialect == "sqlite" else ("bigint", "")
    return [
        f"""CREATE TABLE {ENTRIES} (
            number {whole} PRIMARY KEY, stamp TEXT NOT NULL, kind TEXT NOT NULL, rule TEXT,
            quarter TEXT, who TEXT NOT NULL, why TEXT NOT NULL, body TEXT NOT NULL,
            previous TEXT NOT NULL, hash TEXT NOT NULL UNIQUE){end}""",
        f"CREATE TABLE {VERSIONS} (version {whole} PRIMARY KEY, stamp TEXT NOT NULL){end}",
    ]


def _guards(dialect: str) -> list[str]:
    tables = (ENTRIES, VERSIONS)
    if dialect == "sqlite":
        refusals = [
            f"""CREATE TRIGGER {table}_no_{change} BEFORE {change} ON {table}
                BEGIN SELECT RAISE(ABORT, '{APPEND_ONLY}'); END"""
            for table in tables
            for change in ("update", "delete")
        ]
        # also stops INSERT OR REPLACE, which deletes without asking the triggers above
        follow = f"""CREATE TRIGGER {ENTRIES}_follow BEFORE INSERT ON {ENTRIES}
            WHEN NEW.number <> (SELECT coalesce(max(number), 0) + 1 FROM {ENTRIES})
                OR NEW.previous <> coalesce(
                    (SELECT hash FROM {ENTRIES} ORDER BY number DESC LIMIT 1), NEW.previous)
            BEGIN SELECT RAISE(ABORT, '{NO_HOLE}'); END"""
        return [*refusals, follow]
    refusals = [
        f"""CREATE TRIGGER {table}_only_grows BEFORE UPDATE OR DELETE OR TRUNCATE ON {table}
            FOR EACH STATEMENT EXECUTE FUNCTION ledger_refuse()"""
        for table in tables
    ]
    follow = f"""CREATE TRIGGER {ENTRIES}_follow BEFORE INSERT ON {ENTRIES}
        FOR EACH ROW EXECUTE FUNCTION ledger_follow()"""
    return [_REFUSE_IN_POSTGRESQL, _FOLLOW_IN_POSTGRESQL, *refusals, follow]


def _first(dialect: str) -> list[str]:
    """1: the entries and the versions, both append-only."""
    return _tables(dialect) + _guards(dialect)


def _second(dialect: str) -> list[str]:
    """2: a rule's life and a quarter's entries are found without reading the whole ledger."""
    return [
        f"CREATE INDEX {ENTRIES}_{column} ON {ENTRIES} ({column}, number)"
        for column in ("rule", "quarter", "kind")
    ]


STEPS = (_first, _second)
NEWEST = len(STEPS)  # every version so far can be read without being migrated


def migrate(connection: sa.Connection, at: int, to: int, stamp: str) -> None:
    """Take a ledger from version ``at`` (0: none) to version ``to``, inside the transaction.

    Parameters
    ----------
    stamp : when, as entries have it
    """
    for version in range(at + 1, to + 1):
        for statement in STEPS[version - 1](connection.dialect.name):
            connection.exec_driver_sql(statement)
        connection.execute(versions.insert().values(version=version, stamp=stamp))


def version_of(connection: sa.Connection) -> int:
    """The version of the ledger that is there, 0 for none."""
    if not sa.inspect(connection).has_table(VERSIONS):
        return 0
    return connection.scalar(sa.select(sa.func.max(versions.c.version))) or 0


def other_tables(connection: sa.Connection) -> list[str]:
    """Names of tables that are no ledger's."""
    names = sa.inspect(connection).get_table_names()
    return sorted(set(names) - {ENTRIES, VERSIONS})
