"""Writers and servers that are killed: nothing acknowledged is lost, nothing is half written.

The study at its full length, 200 kills each: ``python -m tests.ledger.kills``.
"""

import re
import subprocess
import sys
from pathlib import Path

import pytest

from miner.ledger import open_ledger
from tests.ledger.kills import Heard, Tally, look, transaction

ROOT = Path(__file__).parents[2]


def study(*arguments: str) -> list[list[str]]:
    """Run the study in a process of its own, which forks; returns its table's cells."""
    run = subprocess.run([sys.executable, "-m", "tests.ledger.kills", *arguments], cwd=ROOT,
                         capture_output=True, text=True, check=False)  # fmt: skip
    assert run.returncode == 0, run.stdout + run.stderr
    rows = [line for line in run.stdout.splitlines() if re.match(r"\| (SQLite|PostgreSQL)", line)]
    return [[cell.strip() for cell in row.strip("|").split("|")] for row in rows]


def assert_meant_something(row: list[str], kills: int) -> None:
    _, done, _, during, _, _, acknowledged, entries, *bad = row
    assert int(done) == kills
    assert int(during) > 0
    assert int(entries.replace(",", "")) > int(acknowledged.replace(",", "")) > kills / 2
    assert bad == ["0", "0", "0"]


@pytest.mark.slow
def test_writers_killed_on_sqlite():
    (row,) = study("--database", "sqlite", "--kills", "20")
    assert_meant_something(row, 20)


@pytest.mark.postgresql
def test_writers_and_servers_killed_on_postgresql():
    writers, servers = study("--database", "postgresql", "--kills", "20", "--server-kills", "4")
    assert_meant_something(writers, 20)
    assert_meant_something(servers, 4)


@pytest.fixture
def written(where):
    """Three transactions of one writer, each of more than one item, and what it said of them."""
    numbers = [n for n in range(50) if len(transaction(7, n)) > 1][:3]
    heard = Heard(begun=list(numbers), done={})
    with open_ledger(where) as ledger:
        for number in numbers:
            added = ledger.append(transaction(7, number), who="w", why=f"transaction {number}")
            heard.done[number] = added[0].number, added[-1].number
    return where, heard, numbers


def looked_at(where: str, heard: Heard) -> Tally:
    tally = Tally("x")
    look(where, {7: heard}, tally)
    return tally


def test_the_study_counts_what_is_whole(written):
    where, heard, numbers = written
    tally = looked_at(where, heard)
    assert tally.is_good
    assert (tally.acknowledged, tally.during) == (3, 0)
    heard.done.pop(numbers[2])  # killed after the commit, before it could say so
    heard.begun.append(99)  # killed before
    tally = looked_at(where, heard)
    assert tally.is_good
    assert (tally.acknowledged, tally.during, tally.during_kept) == (2, 2, 1)


def test_the_study_sees_what_is_lost(written):
    where, heard, numbers = written
    heard.done[99] = 100, 101
    assert looked_at(where, heard).lost == 1
    del heard.done[99]
    first, last = heard.done[numbers[0]]
    heard.done[numbers[0]] = first + 1, last + 1
    assert looked_at(where, heard).lost == 1


def test_the_study_sees_what_is_partial(written):
    where, heard, _ = written
    number = next(n for n in range(60, 99) if len(transaction(7, n)) > 1)
    with open_ledger(where) as ledger:
        ledger.append(transaction(7, number)[:-1], who="w", why=f"transaction {number}")
    tally = looked_at(where, heard)
    assert (tally.partial, tally.lost) == (1, 0)
    assert not tally.is_good
