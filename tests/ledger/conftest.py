"""New places for ledgers: a SQLite file, or a schema of a PostgreSQL server of the tests' own."""

import itertools
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from miner.ledger import Item
from tests.ledger.kills import schemas
from tests.ledger.server import Server, running

_prefixes = itertools.count()


@pytest.fixture(scope="session")
def server() -> Iterator[Server]:
    """A running server; without PostgreSQL's programs its tests fail."""
    with running() as started:
        yield started


@pytest.fixture(params=["sqlite", pytest.param("postgresql", marks=pytest.mark.postgresql)])
def where(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """A place with no ledger yet."""
    if request.param == "sqlite":
        return str(tmp_path / "a ledger?.db")
    return next(schemas(request.getfixturevalue("server"), f"test_{next(_prefixes)}"))


@pytest.fixture
def decision() -> Callable[..., Item]:
    """Makes an item of the smallest kind."""

    def make(rule: str = "r1", quarter: str | None = "2025Q3", **more: object) -> Item:
        return Item("decision", rule, quarter, {"before": "live", "after": "watch", **more})

    return make
