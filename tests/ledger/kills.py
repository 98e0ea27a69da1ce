"""``python -m tests.ledger.kills [--kills 200] [--server-kills 40] [--report FILE]``

Kills a process that appends to a ledger, again and again, at random moments: SIGKILL to the writer
(SQLite and PostgreSQL), and SIGKILL to all of the PostgreSQL server at once. After every kill the
ledger is opened again, and looked at: is every append that was acknowledged there, whole, where it
was said to be; is nothing there in part; does the chain of hashes hold. Ends with status 1 if not.
"""

from __future__ import annotations

import argparse
import itertools
import os
import random
import signal
import sys
import tempfile
import time
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path

from miner.errors import LedgerError
from miner.ledger import Entry, Item, open_ledger
from tests.ledger.server import Server, running

FRESH = 10  # kills after which a new ledger is begun: making one is killed too
MOST_ITEMS, LONGEST_TEXT = 12, 3000
EARLY = 8  # one kill in so many may come while the ledger is being opened; the others later
LONGEST_WAIT = 0.3  # seconds
LONGEST_SERVER_WAIT = 1.0


@dataclass
class Tally:
    """What was done and what was found, over all kills of one kind."""

    name: str
    kills: int = 0
    opening: int = 0  # killed before the first append began
    during: int = 0  # killed while an append was under way
    during_kept: int = 0  # of those, found whole
    unclean: int = 0  # SQLite: a journal was left to roll back; PostgreSQL: the server was killed
    acknowledged: int = 0
    entries: int = 0
    lost: int = 0
    partial: int = 0
    broken: list[str] = field(default_factory=list)

    @property
    def is_good(self) -> bool:
        return not (self.lost or self.partial or self.broken)


@dataclass
class Heard:
    """What a writer said before it died: appends begun, and acknowledged with their numbers."""

    begun: list[int]
    done: dict[int, tuple[int, int]]


def transaction(writer: int, number: int) -> list[Item]:
    """The items of a writer's transaction: the same whenever they are asked for."""
    draws = random.Random(writer * 1_000_003 + number)
    parts = draws.randint(1, MOST_ITEMS)
    return [
        Item("decision", f"rule-{draws.randint(0, 5)}", "2025Q3",
             {"before": "live", "after": "watch", "writer": writer, "transaction": number,
              "part": part, "parts": parts, "text": "é\n" * draws.randint(0, LONGEST_TEXT // 2)})
        for part in range(parts)
    ]  # fmt: skip


def write_without_end(where: str, writer: int, told: int) -> None:
    """Append until killed, telling each append before and after it, unbuffered."""
    with open_ledger(where) as ledger:
        for number in itertools.count():
            items = transaction(writer, number)
            os.write(told, f"begin {number}\n".encode())
            added = ledger.append(items, who=f"writer {writer}", why=f"transaction {number}")
            os.write(told, f"done {number} {added[0].number} {added[-1].number}\n".encode())


def killed(
    where: str, writer: int, wait: float, is_early: bool, kill: Callable[[int], object]
) -> Heard:
    """Start a writer, kill it (or its server) a while after its start, or after its first append
    has begun, and return what it had said."""
    heard, told = os.pipe()
    pid = os.fork()
    if pid == 0:
        os.close(heard)
        status = 1
        try:
            write_without_end(where, writer, told)
        except LedgerError:
            status = 0  # its server was killed: it is told so, and not by a traceback
        except BaseException:
            traceback.print_exc()
        finally:
            os._exit(status)
    os.close(told)
    first = b"" if is_early else os.read(heard, 1000)
    time.sleep(wait)
    kill(pid)
    with os.fdopen(heard, "rb") as pipe:
        lines = [line.split() for line in (first + pipe.read()).decode().splitlines()]
    _, status = os.waitpid(pid, 0)
    if not os.WIFSIGNALED(status) and os.WEXITSTATUS(status) != 0:
        raise RuntimeError(f"writer {writer} failed by itself")
    begun = [int(line[1]) for line in lines if line[0] == "begin"]
    done = {int(x[1]): (int(x[2]), int(x[3])) for x in lines if x[0] == "done"}
    return Heard(begun, done)


def look(where: str, seen: dict[int, Heard], tally: Tally) -> None:
    """Open the ledger again and compare it with what all its writers said."""
    with open_ledger(where) as ledger:
        with ledger.exclusive():
            pass  # a server may still be at work for a client that is dead
        verified = ledger.verify()
        if verified.broken is not None:
            tally.broken.append(f"{tally.name}, entry {verified.broken}")
        entries = list(ledger.entries())
    by_transaction: dict[tuple[int, int], list[Entry]] = {}
    for entry in entries:
        key = entry.body["writer"], entry.body["transaction"]
        by_transaction.setdefault(key, []).append(entry)
    whole = set()
    for (writer, number), found in by_transaction.items():
        items = transaction(writer, number)
        is_whole = (
            [entry.body | {} for entry in found]
            == [{"contract": 1, **item.body} for item in items]
            and [entry.number for entry in found]
            == list(range(found[0].number, found[0].number + len(items)))
            and {entry.why for entry in found} == {f"transaction {number}"}
        )  # fmt: skip
        tally.partial += not is_whole
        if is_whole:
            whole.add((writer, number))
    for writer, heard in seen.items():
        for number, (first, last) in heard.done.items():
            found = by_transaction.get((writer, number), [])
            is_there = (writer, number) in whole and (first, last) == (
                found[0].number,
                found[-1].number,
            )
            tally.lost += not is_there
    newest = max(seen)
    heard = seen[newest]
    tally.kills += 1
    tally.opening += not heard.begun
    tally.acknowledged += len(heard.done)
    tally.entries += sum(entry.body["writer"] == newest for entry in entries)
    for number in set(heard.begun) - set(heard.done):
        tally.during += 1
        tally.during_kept += (newest, number) in whole


def sigkill(pid: int) -> None:
    """Kill a writer."""
    os.kill(pid, signal.SIGKILL)


def kill_writers(
    name: str, places: Iterator[str], kills: int, seed: int, restarts: Server | None = None
) -> Tally:
    """Kill writers, or with ``restarts`` the server they write to, and look each time."""
    draws, tally = random.Random(seed), Tally(name)
    where, seen = "", {}
    for k in range(kills):
        if k % FRESH == 0:
            where, seen = next(places), {}
        writer = seed * 10_000 + k
        is_early = k % EARLY == 0
        if restarts is None:
            wait = draws.uniform(0, LONGEST_WAIT)
            seen[writer] = killed(where, writer, wait, is_early, sigkill)
            tally.unclean += Path(f"{where}-journal").exists()
        else:
            wait = draws.uniform(0, LONGEST_SERVER_WAIT)
            seen[writer] = killed(where, writer, wait, is_early, lambda _pid: restarts.kill())
            restarts.start()
            tally.unclean += 1
        look(where, seen, tally)
        if not tally.is_good:
            break
    return tally


def files(folder: Path) -> Iterator[str]:
    """New places for SQLite ledgers."""
    for k in itertools.count():
        yield str(folder / f"ledger-{k}.db")


def schemas(server: Server, prefix: str) -> Iterator[str]:
    """New places on a server: schemas of one database, which are made faster than databases."""
    import psycopg

    for k in itertools.count():
        with psycopg.connect(server.url(), autocommit=True) as connection:
            connection.execute(f"CREATE SCHEMA {prefix}_{k}")
        yield f"{server.url()}&options=-csearch_path%3D{prefix}_{k}"


@contextmanager
def _server(wanted: bool) -> Iterator[Server | None]:
    with running() if wanted else nullcontext() as server:
        yield server


def study(kinds: list[str], kills: int, server_kills: int, seed: int) -> list[Tally]:
    """Make all kills of the kinds asked for."""
    tallies = []
    if "sqlite" in kinds and kills:
        with tempfile.TemporaryDirectory() as folder:
            name = "SQLite, writer killed"
            tallies.append(kill_writers(name, files(Path(folder)), kills, seed))
    with _server("postgresql" in kinds and bool(kills or server_kills)) as server:
        if server is not None and kills:
            name = "PostgreSQL, writer killed"
            tallies.append(kill_writers(name, schemas(server, "writer"), kills, seed + 1))
        if server is not None and server_kills:
            name = "PostgreSQL, server killed"
            places = schemas(server, "server")
            tallies.append(kill_writers(name, places, server_kills, seed + 2, server))
    return tallies


HEADER = (
    "| | kills | before the first append | during an append | of those kept whole | recoveries "
    "| appends acknowledged | entries | lost | partial | chains broken |"
)


def table(tallies: list[Tally]) -> str:
    """The tallies as a table in Markdown."""
    lines = [HEADER, "|---" * 11 + "|"]
    lines += [
        f"| {t.name} | {t.kills} | {t.opening} | {t.during} | {t.during_kept} | {t.unclean} "
        f"| {t.acknowledged:,} | {t.entries:,} | {t.lost} | {t.partial} | {len(t.broken)} |"
        for t in tallies
    ]
    return "\n".join(lines)


def main() -> None:
    """Run the study asked for and print its table."""
    parser = argparse.ArgumentParser(prog="python -m tests.ledger.kills", description=__doc__)
    parser.add_argument("--kills", type=int, default=200, help="of writers, on each database")
    parser.add_argument("--server-kills", type=int, default=40)
    parser.add_argument("--database", choices=["sqlite", "postgresql"], nargs="*",
                        default=["sqlite", "postgresql"])  # fmt: skip
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--report", type=Path, metavar="FILE", help="write the table there")
    asked = parser.parse_args()
    tallies = study(asked.database, asked.kills, asked.server_kills, asked.seed)
    text = table(tallies)
    print(text)
    for line in [line for tally in tallies for line in tally.broken]:
        print(line)
    if asked.report is not None:
        asked.report.write_text(text + "\n", encoding="utf-8")
    if not all(tally.is_good for tally in tallies):
        sys.exit(1)


if __name__ == "__main__":
    main()
