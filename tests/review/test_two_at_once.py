"""People who review at the same moment, on both databases: nothing twice, nothing lost."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from miner.ledger import open_ledger
from miner.rule_book import read_rule_book
from tests.ledger.kills import schemas
from tests.ledger.server import running
from tests.review.desk import make_desk, rule, small_world
from tests.review.test_ledger_and_review import numbers


@pytest.fixture(params=["sqlite", pytest.param("postgresql", marks=pytest.mark.postgresql)])
def where(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    if request.param == "sqlite":
        yield str(tmp_path / "ledger.db")
        return
    with running() as server:
        yield next(schemas(server, "reviews"))


def test_outcomes_tests_and_decisions_are_entered_once(tmp_path, where):
    desk = make_desk(tmp_path, small_world(6), [rule("c", "d", status="candidate"), rule("c")])
    desk.review("2021Q1", ledger=where)

    def run(who: str) -> object:
        return desk.review("2021Q3", ledger=where, who=who, n_workers=1, with_hunt=True)

    with ThreadPoolExecutor(3) as pool:
        results = list(pool.map(run, "ABC"))
    assert len([r for r in results if r.entries is not None]) == 1
    first = next(r for r in results if r.entries is not None)
    (new,) = [r for r in first.hunt.rules if r.fate == "new"]
    for other in results:
        assert numbers(other)["rules"] == numbers(first)["rules"]
        assert [r.level for r in other.hunt.rules if r.fate == "new"] == [new.level]
    done = [desk.review("2021Q3", ledger=where, who=who, accept=True) for who in "AB"]
    with open_ledger(where, read_only=True) as ledger:
        assert ledger.verify().broken is None
        every = list(ledger.entries())
    outcomes = [e for e in every if e.kind == "outcome"]
    assert len({(e.rule, e.body["entity"], e.body["session"]) for e in outcomes}) == len(outcomes)
    assert [e.rule for e in every if e.kind == "hypothesis"] == [new.id]
    assert len([e for e in every if e.kind == "hunt"]) == 1
    decisions = {e.rule: e.body["after"] for e in every if e.kind == "decision"}
    changed = {o.id: o.status_after for o in done[0].rules if o.status_after != o.status_before}
    assert decisions == changed
    assert changed
    statuses = {r.id: r.status for r in read_rule_book(desk.book).rule}
    assert changed.items() <= statuses.items()
    assert done[1].entries is None
