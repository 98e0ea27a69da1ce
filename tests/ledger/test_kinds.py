"""What each kind of entry must say."""

import math

import numpy as np
import pytest

from miner.errors import LedgerError
from miner.ledger import KINDS, Item
from miner.ledger.kinds import checked

GOOD = {
    "hunt": {
        "study": "s", "settings_sha256": "0", "program": "1", "targets": ["t"], "family": 10,
        "proposed": 3, "passed": 2, "fdr": 0.05, "adjust": "bh", "rules": [],
    },
    "rule": {
        "target": "t", "stratum": "all", "combination": ["a", "b"], "lookback": 5, "horizon": 5,
        "rest": 0, "status": "live", "promise": 0.4, "expected": None, "adopted": "2025-01-01",
    },
    "outcome": {
        "entity": "e", "session": "2025-07-01", "close": "2025-07-08", "hit": False, "expected": 0,
    },
    "hypothesis": {"p": 1, "level": 0.01, "rejected": False, "procedure": "x"},
    "review": {
        "proposed": "keep", "reasons": [], "e_works": None, "e_promise": 1e9, "triggers": 3,
        "hits": 1, "expected_hits": 0.2, "interval": [0, 0.5],
    },
    "decision": {"before": "watch", "after": "live"},
}  # fmt: skip


def item(kind, rule="r", quarter="2025Q3", **changes):
    body = {key: value for key, value in (GOOD[kind] | changes).items() if value is not ...}
    return Item(kind, None if kind == "hunt" else rule, quarter, body)


def test_there_is_an_example_of_every_kind():
    assert set(GOOD) == set(KINDS)


@pytest.mark.parametrize("kind", KINDS)
def test_a_body_keeps_what_it_says_and_may_say_more(kind):
    given = item(kind, more={"deep": [1.5, None]})
    assert checked(given, "item 1")["body"] == {"contract": 1, **given.body}


@pytest.mark.parametrize(("kind", "key"), [(kind, key) for kind in KINDS for key in GOOD[kind]])
def test_every_key_is_asked_for_and_its_type_looked_at(kind, key):
    with pytest.raises(LedgerError, match=rf"`item 1 \({kind}\)`: `body.{key}` must be given"):
        checked(item(kind, **{key: ...}), "item 1")
    with pytest.raises(LedgerError, match=rf"`body.{key}"):
        checked(item(kind, **{key: {"a": "table"}}), "item 1")


@pytest.mark.parametrize(
    ("kind", "changes", "told"),
    [
        ("outcome", {"expected": 1.01}, "a number from 0 to 1; got 1.01"),
        ("outcome", {"expected": True}, "a number from 0 to 1; got true"),
        ("outcome", {"session": "2025-7-1"}, 'be a date; got "2025-7-1"'),
        ("outcome", {"session": "20250701"}, "be a date"),
        ("outcome", {"hit": 1}, "be true or false; got 1"),
        ("rule", {"status": "alive"}, "'retired'"),
        ("rule", {"combination": []}, "body.combination"),
        ("rule", {"lookback": 0}, "whole number of at least 1; got 0"),
        ("rule", {"promise": 44}, "from 0 to 1; got 44"),
        ("review", {"interval": [0.1]}, "body.interval"),
        ("review", {"e_works": -1}, "of at least 0; got -1"),
        ("hunt", {"family": 5.0}, "whole number"),
        ("hunt", {"rules": ["a", ""]}, r"body.rules.1. must not be empty"),
        ("decision", {"contract": 2}, "body.contract"),
        ("decision", {"x": math.nan}, "be plain JSON"),
        ("decision", {"x": np.int64(3)}, "be plain JSON.*int64"),
        ("decision", {"x": "\ud800"}, "half of a surrogate pair"),
        ("decision", {"x": {1, 2}}, "be plain JSON"),
    ],
)
def test_what_is_wrong_is_told(kind, changes, told):
    with pytest.raises(LedgerError, match=told):
        checked(item(kind, **changes), "item 1")


def test_a_list_that_holds_itself_is_told():
    endless: list = []
    endless.append(endless)
    with pytest.raises(LedgerError, match="be plain JSON"):
        checked(item("decision", x=endless), "item 1")


def test_rule_and_quarter_are_asked_for_where_they_belong():
    with pytest.raises(LedgerError, match=r"`kind` must be one of .*Did you mean `outcome`"):
        checked(Item("outcomes", "r", None, {}), "item 1")
    with pytest.raises(LedgerError, match="`rule` must be left out of a hunt"):
        checked(Item("hunt", "r", None, GOOD["hunt"]), "item 1")
    for kind in KINDS:
        if kind != "hunt":
            with pytest.raises(LedgerError, match="`rule` must not be empty"):
                checked(item(kind, rule=None), "item 1")
        if kind in ("outcome", "hypothesis", "review"):
            with pytest.raises(LedgerError, match="`quarter` must be given"):
                checked(item(kind, quarter=None), "item 1")
        else:
            assert checked(item(kind, quarter=None), "item 1")["quarter"] is None
        for quarter in ("2025Q5", "2025q3", "25Q3", " 2025Q3", "2025Q3\n", ""):
            with pytest.raises(LedgerError, match="`quarter` must be a quarter"):
                checked(item(kind, quarter=quarter), "item 1")
