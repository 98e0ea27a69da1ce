"""Several at once: nothing is lost, nothing is decided twice."""

import subprocess
import sys
from pathlib import Path

import pytest

from miner.errors import LedgerError
from miner.ledger import open_ledger

ROOT = Path(__file__).parents[2]
WRITERS, APPENDS = 4, 50

APPEND = """
import sys
from miner.ledger import Item, open_ledger
where, writer, appends = sys.argv[1], int(sys.argv[2]), int(sys.argv[3])
with open_ledger(where) as ledger:
    for k in range(appends):
        body = {"before": "live", "after": "watch", "writer": writer, "k": k}
        items = [Item("decision", "r", None, body | {"part": part}) for part in range(1 + k % 3)]
        ledger.append(items, who=f"writer {writer}", why="all at once")
"""

SPEND = """
import sys
from miner.ledger import Item, open_ledger
where, reviewer = sys.argv[1], sys.argv[2]
with open_ledger(where) as ledger:
    for k in range(20):
        with ledger.exclusive() as turn:
            past = list(turn.entries(kinds=["hypothesis"]))
            left = 1 - sum(entry.body["level"] for entry in past)
            body = {"p": 0.5, "level": left / 2, "rejected": False, "procedure": reviewer}
            turn.append([Item("hypothesis", f"{reviewer}-{k}", "2025Q3", body)],
                        who=reviewer, why="half of what is left")
"""


def run_together(script: str, where: str, arguments: list[list[str]]) -> None:
    running = [
        subprocess.Popen([sys.executable, "-c", script, where, *each], cwd=ROOT,
                         stderr=subprocess.PIPE, text=True)
        for each in arguments
    ]  # fmt: skip
    errors = [process.communicate()[1] for process in running]
    assert [process.returncode for process in running] == [0] * len(running), errors


def test_four_writers_who_begin_a_ledger_together(where):
    arguments = [[str(writer), str(APPENDS)] for writer in range(WRITERS)]
    run_together(APPEND, where, arguments)
    with open_ledger(where) as ledger:
        entries = list(ledger.entries())
        assert ledger.verify().broken is None
        assert ledger.verify().count == len(entries)
    expected = [(k, part) for k in range(APPENDS) for part in range(1 + k % 3)]
    for writer in range(WRITERS):
        mine = [entry for entry in entries if entry.body["writer"] == writer]
        assert [(entry.body["k"], entry.body["part"]) for entry in mine] == expected
        for entry in mine:  # nobody came between the items of one append
            first = entries[entry.number - 1 - entry.body["part"]]
            assert (first.body["writer"], first.body["k"]) == (writer, entry.body["k"])


def test_a_budget_is_not_spent_twice(where):
    run_together(SPEND, where, [["ann"], ["bo"], ["cy"]])
    with open_ledger(where) as ledger:
        entries = list(ledger.entries())
    assert len(entries) == 60
    assert {entry.who for entry in entries} == {"ann", "bo", "cy"}
    left = 1.0
    for entry in entries:
        assert entry.body["level"] == left / 2
        left = 1 - sum(e.body["level"] for e in entries[: entry.number])


def test_whoever_waits_too_long_is_told(where, decision):
    with open_ledger(where) as ledger, open_ledger(where, wait_seconds=0.2) as other:
        with ledger.exclusive() as turn:
            turn.append([decision()], who="a", why="b")
            with pytest.raises(LedgerError, match=r"(locked|lock timeout)\. Somebody else is writ"):
                other.append([decision()], who="c", why="d")
            assert list(other.entries()) == []  # and readers see what was before
        assert len(list(other.entries())) == 1
        other.append([decision()], who="c", why="d")
        assert other.verify().count == 2
