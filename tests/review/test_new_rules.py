"""The window's hunt beside the book, and the online procedure over the ledger's history."""

from __future__ import annotations

import numpy as np
import pytest

from miner import load_study
from miner.assemble import assemble
from miner.ledger import Item, open_ledger
from miner.review.new_rules import study_of_window
from miner.sequential.online import Tested, next_levels
from tests.review.desk import make_desk, rule, small_world


@pytest.fixture
def world():
    return small_world(6)


def by_name(result, fate):
    return {r.name: r for r in result.hunt.rules if r.fate == fate}


def test_a_rule_the_book_does_not_have_is_new_and_tested_once(tmp_path, world):
    desk = make_desk(tmp_path, world, [rule("c", "d")])
    first = desk.review("2021Q3", with_hunt=True)
    (pair,) = by_name(first, "new").values()
    assert pair.name == "a + b"
    (level,) = next_levels("lord++", [], 1)
    assert pair.level == pytest.approx(level)
    assert pair.is_rejected == (pair.p_holdout <= level)
    assert not pair.is_tested_before
    with open_ledger(desk.ledger, read_only=True) as ledger:
        (test,) = ledger.entries(kinds=["hypothesis"])
        (hunt,) = ledger.entries(kinds=["hunt"])
    assert (test.rule, test.quarter, test.body["rejected"]) == (
        pair.id, "2021Q3", pair.is_rejected,
    )  # fmt: skip
    assert hunt.body["rules"] == [pair.id]
    assert hunt.body["family"] == first.hunt.family
    second = desk.review("2021Q4", with_hunt=True)
    again = by_name(second, "new")["a + b"]
    assert again.is_tested_before
    assert (again.level, again.is_rejected) == (pair.level, pair.is_rejected)
    assert "tested in 2021Q3 and never again" in again.reason
    assert second.hunt.tests_so_far == len([r for r in second.hunt.rules if r.level is not None])
    assert desk.review("2021Q4", with_hunt=True).entries is None


def test_persisting_explained_and_gone(tmp_path, world):
    """Where a + b triggers, a did within the look-back: a book with a explains a + b."""
    held = make_desk(tmp_path / "held", world, [rule("a", "b"), rule("c", "d")])
    result = held.review("2021Q3", with_hunt=True)
    assert set(by_name(result, "persisting")) == {"a + b"}
    gone = by_name(result, "gone")["c + d"]
    assert gone.level is None
    assert "window" in gone.reason
    near = make_desk(tmp_path / "near", world, [rule("a")])
    explained = by_name(near.review("2021Q3", with_hunt=True), "explained")["a + b"]
    assert explained.level is None
    assert explained.overlap > 0.5
    assert explained.like == rule("a").id
    with open_ledger(near.ledger, read_only=True) as ledger:
        assert not list(ledger.entries(kinds=["hypothesis"]))


def test_levels_go_on_from_the_whole_history(tmp_path, world):
    desk = make_desk(tmp_path, world, [rule("c", "d")])
    past = [Tested(0.5, 0.002, False), Tested(1e-6, 0.003, True)]
    items = [
        Item("hypothesis", f"old{i}", "2020Q4",
             {"p": t.p, "level": t.level, "rejected": t.is_rejected, "procedure": "lord++"})
        for i, t in enumerate(past)
    ]  # fmt: skip
    with open_ledger(desk.ledger) as ledger:
        ledger.append(items, who="ida", why="earlier")
    result = desk.review("2021Q3", with_hunt=True)
    (pair,) = by_name(result, "new").values()
    assert pair.level == pytest.approx(next_levels("lord++", past, 1)[0])
    assert (result.hunt.tests_so_far, result.hunt.found_so_far) == (3, 1 + pair.is_rejected)


def test_the_windows_holdout_moves_with_it(tmp_path, world):
    desk = make_desk(tmp_path, world, [rule("c", "d")])
    study = load_study(desk.folder / "study.toml")
    assert study.holdout.start is not None
    moved = study_of_window(study)
    assert (moved.holdout.start, moved.holdout.share) == (None, 0.3)
    assert moved.testing.placebo == 0
    result = desk.review("2021Q3", with_hunt=True)
    dates = assemble(study).calendar.dates
    n = int(np.searchsorted(dates, np.datetime64("2021-10-01")))
    assert result.hunt.last == "2021-09-30"
    assert result.hunt.holdout_first == str(dates[n - round(0.3 * n)])
