"""A query may read and nothing else, on a PostgreSQL server too."""

from __future__ import annotations

from pathlib import Path

import pytest

from miner.errors import TableError
from miner.read_tables import read_log
from miner.settings import study_from_dict

WRITING = (
    "delete from notes returning *",
    "drop table notes",
    "select * from notes; delete from notes",
    "commit; delete from notes",
    "with gone as (delete from notes returning *) select * from gone",
    "select 'a' as entity, emptied() as time, 'x' as type",
)


@pytest.mark.postgresql
def test_a_query_changes_nothing(tmp_path: Path) -> None:
    import psycopg

    from tests.ledger.server import running

    with running() as server:
        with psycopg.connect(server.url(), autocommit=True) as connection:
            connection.execute("create table notes (entity text, time timestamptz, type text)")
            connection.execute("insert into notes values ('a', '2021-01-02 10:00Z', 'x')")
            connection.execute(
                "create function emptied() returns text language sql as "
                "$$ delete from notes; select '2021-01-02' $$"
            )

        def read(query: str) -> int:
            alerts = {"source": server.url(), "query": query}
            keys = {"alerts": alerts, "events": {"source": "e.csv"}}
            return len(read_log(study_from_dict(keys, tmp_path), "alerts"))

        assert read("select * from notes") == 1
        for query in WRITING:
            with pytest.raises(TableError):
                read(query)
        with pytest.raises(TableError, match="must return rows and change nothing"):
            read(WRITING[-1])
        assert read("select * from notes") == 1
