"""What goes in comes out: in order, whole, with who and why, and once."""

import dataclasses
import datetime as dt

import pytest

from miner.errors import LedgerError
from miner.ledger import Item, open_ledger, rows

HARD = "Zoë ' \" \\ \n\t = 𝄞 \u0000 \u2028 {}"


def test_what_is_appended_is_read_back_field_by_field(where, decision):
    items = [
        decision(text=HARD, numbers=[0.1, -0.0, 1e-300, 5e-324, 1.7976931348623157e308, 2**70],
                 nested={"b": [None, True, {"ä": ""}], "a": ("x", "y")}),
        Item("hypothesis", "r2", "2025Q4",
             {"p": 0, "level": 0.001, "rejected": True, "procedure": "some"}),
    ]  # fmt: skip
    before = dt.datetime.now(dt.UTC)
    with open_ledger(where) as ledger:
        added = ledger.append(items, who="Ann Öst", why="because; 'so'")
        assert ledger.last() == added[1]
    with open_ledger(where) as ledger:
        found = tuple(ledger.entries())
    assert found == added
    assert [entry.number for entry in found] == [1, 2]
    assert found[0].body == {
        "contract": 1, "before": "live", "after": "watch", "text": HARD,
        "numbers": [0.1, -0.0, 1e-300, 5e-324, 1.7976931348623157e308, 2**70],
        "nested": {"b": [None, True, {"ä": ""}], "a": ["x", "y"]},
    }  # fmt: skip
    assert str(found[0].body["numbers"][1]) == "-0.0"
    assert (found[1].kind, found[1].rule, found[1].quarter) == ("hypothesis", "r2", "2025Q4")
    assert {(entry.who, entry.why) for entry in found} == {("Ann Öst", "because; 'so'")}
    stamp = dt.datetime.fromisoformat(found[0].stamp)
    assert found[0].stamp == found[1].stamp
    assert before <= stamp <= dt.datetime.now(dt.UTC)


def test_entries_are_chosen_by_kind_rule_quarter_and_number(where, decision):
    with open_ledger(where) as ledger:
        ledger.append([decision("r1"), decision("r2"), decision("r1", None)], who="a", why="b")
        said = {"p": 0.5, "level": 0.1, "rejected": False, "procedure": "x"}
        ledger.append([Item("hypothesis", "r1", "2025Q4", said)], who="a", why="b")

        def numbers(**wanted):
            return [entry.number for entry in ledger.entries(**wanted)]

        assert numbers() == [1, 2, 3, 4]
        assert numbers(kinds=["decision"]) == [1, 2, 3]
        assert numbers(kinds=[]) == []
        assert numbers(rule="r1") == [1, 3, 4]
        assert numbers(quarter="2025Q3") == [1, 2]
        assert numbers(rule="r1", kinds=["decision", "review"], after=1) == [3]
        assert [entry.number for entry in ledger.life("r1")] == [1, 3, 4]
        assert ledger.life("none") == ()
        with pytest.raises(LedgerError, match=r"`rule` must be one the ledger knows.*`r1`"):
            ledger.life("r11", must_be_known=True)


def test_pages_are_seamless_and_end_where_they_began(where, decision, monkeypatch):
    monkeypatch.setattr(rows, "PAGE", 3)
    with open_ledger(where) as ledger:
        ledger.append([decision(at=k) for k in range(10)], who="a", why="b")
        reading = ledger.entries()
        first = next(reading)
        ledger.append([decision(at=10)], who="a", why="a half-used reader holds up nobody")
        assert [entry.body["at"] for entry in (first, *reading)] == list(range(10))
        assert ledger.verify().count == 11


def test_one_wrong_item_and_none_is_entered(where, decision):
    with open_ledger(where) as ledger:
        wrong = decision(before="life")
        with pytest.raises(LedgerError, match=r"item 2 \(decision\)"):
            ledger.append([decision(), wrong, decision()], who="a", why="b")
        assert ledger.last() is None
        assert ledger.append([], who="a", why="nothing to say") == ()
        assert ledger.append([decision()], who="a", why="b")[0].number == 1


def test_a_turn_sees_what_it_appended_and_nothing_stays_if_it_fails(where, decision):
    with open_ledger(where) as ledger:
        with ledger.exclusive() as turn:
            (one,) = turn.append([decision()], who="a", why="b")
            assert list(turn.entries()) == [one]
            (two,) = turn.append([decision("r2")], who="c", why="d")
            assert [entry.number for entry in turn.entries(rule="r2")] == [2]
        assert tuple(ledger.entries()) == (one, two)
        assert two.previous == one.hash
        with pytest.raises(ZeroDivisionError), ledger.exclusive() as turn:
            1 / len(turn.append([decision()], who="a", why="b")[1:])
        assert [entry.number for entry in ledger.entries()] == [1, 2]
        assert ledger.append([decision()], who="a", why="b")[0].number == 3


@pytest.mark.parametrize("blank", ["", "  ", None, "\0", "\ud800"])
def test_who_and_why_have_to_be_said(tmp_path, decision, blank):
    with open_ledger(tmp_path / "x.db") as ledger:
        with pytest.raises(LedgerError, match="`who` must"):
            ledger.append([decision()], who=blank, why="b")
        with pytest.raises(LedgerError, match="`why` must"):
            ledger.append([decision()], who="a", why=blank)
        assert ledger.last() is None


def test_a_ledger_to_read_takes_nothing(where, decision):
    for options in ({"read_only": True}, {"create": False}):
        with pytest.raises(LedgerError, match="`ledger` must be there; got nothing"):
            open_ledger(where, **options)
    with open_ledger(where) as ledger:
        (entry,) = ledger.append([decision()], who="a", why="b")
    with open_ledger(where, read_only=True) as ledger:
        assert tuple(ledger.entries()) == (entry,)
        with pytest.raises(LedgerError, match="must be open for writing"):
            ledger.append([decision()], who="a", why="b")
    with open_ledger(where, create=False) as ledger:
        assert ledger.append([decision()], who="a", why="b")[0].number == 2


def test_entries_are_frozen(tmp_path, decision):
    with open_ledger(tmp_path / "x.db") as ledger:
        (entry,) = ledger.append([decision()], who="a", why="b")
    with pytest.raises(dataclasses.FrozenInstanceError):
        entry.who = "somebody else"
