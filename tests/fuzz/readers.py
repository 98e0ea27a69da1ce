"""``python -m tests.fuzz.readers --seconds 60``: broken bytes into every reader of inputs.

With atheris installed the mutations are guided by what code they reach (libFuzzer); without it they
are blind. The first byte of an input says which reader it goes to. Allowed is a result, or the one
error the program has for wrong input.
"""

from __future__ import annotations

import argparse
import gzip
import io
import os
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np

HOME = Path(tempfile.gettempdir(), f"fuzz-readers-{os.getpid()}")
LOG = "entity,time,type\n" + "".join(
    f"n{i % 3},2021-01-{1 + i % 28:02d} 1{i % 9}:00:00+02:00,k{i % 2}\n" for i in range(12)
)
SPANS = "entity,start,end,band,sector,type\nn0,2021-01-01,,x,y,\nn1,,2021-03-01 10:00,x,z,k1\n"
BARS = "entity,date,open,high,low,close,volume\n" + "".join(
    f"n{i % 2},2021-01-{1 + i // 2:02d},10,11.5,9,1e1,100\n" for i in range(20)
)
STUDY = (
    '[alerts]\nsource = "alerts.csv"\ncolumns = {entity = "e"}\n[events]\nsource = "e*.csv"\n'
    'targets = ["a"]\n[sessions]\ncalendar = "XNYS"\nstart = "2021-01-04"\n[windows]\nrest = 3\n'
    "[testing]\nfdr = 0.1\n[holdout]\nshare = 0.3\nembargo = 10\n"
)
BOOK = (
    'format = 1\n[sessions]\ncalendar = "daily"\nclose = "16:00"\n[[rule]]\ntarget = "a"\n'
    'combination = ["k0", "k1"]\nlookback = 2\nhorizon = 3\nrest = 3\nstatus = "live"\n'
)
DATES = "date,close\n2021-01-04,16:00\n2021-01-05,13:00\n"


def _parquet(text: str) -> bytes:
    import pandas as pd

    raw = io.BytesIO()
    pd.read_csv(io.StringIO(text)).to_parquet(raw)
    return raw.getvalue()


def kinds() -> list[tuple[str, bytes, str]]:
    """File name, a good content and the table of every kind of input, in order of first byte."""
    return [
        ("alerts.csv", LOG.encode(), "alerts"),
        ("alerts.csv.gz", gzip.compress(LOG.encode(), mtime=0), "alerts"),
        ("alerts.parquet", _parquet(LOG), "alerts"),
        ("groups.csv", SPANS.encode(), "groups"),
        ("coverage.csv", SPANS.encode(), "coverage"),
        ("coverage.parquet", _parquet(SPANS), "coverage"),
        ("prices.csv", BARS.encode(), "prices"),
        ("prices.parquet", _parquet(BARS), "prices"),
        ("study.toml", STUDY.encode(), "settings"),
        ("book.toml", BOOK.encode(), "book"),
        ("dates.csv", DATES.encode(), "dates"),
    ]


def reader() -> Callable[[bytes], bool]:
    """What takes one input; says whether it was read. Raises what must not be raised."""
    from miner.errors import InputError
    from miner.read_tables import read_coverage, read_groups, read_log, read_prices
    from miner.rule_book import read_rule_book
    from miner.session_calendar import build_calendar
    from miner.settings import load_study, study_from_dict

    HOME.mkdir(exist_ok=True)
    all_kinds = kinds()

    def study(name: str, table: str, bad_rows: str) -> object:
        sections = {"alerts": {"source": "alerts.csv"}, "events": {"source": "events.csv"}}
        sections[table] = {"source": name, "bad_rows": bad_rows}
        if table == "groups":
            sections[table] |= {"strata": "band", "peers": "sector"}
        return study_from_dict(sections, HOME)

    def one(data: bytes) -> bool:
        if not data:
            return False
        name, _, table = all_kinds[data[0] % len(all_kinds)]
        bad_rows = "set-aside" if data[0] >= 128 else "error"
        (HOME / name).write_bytes(data[1:])
        try:
            if table == "settings":
                load_study(HOME / name)
            elif table == "book":
                read_rule_book(HOME / name)
            elif table == "dates":
                tables = {t: {"source": f"{t}.csv"} for t in ("alerts", "events")}
                given = study_from_dict(tables | {"sessions": {"calendar": "dates.csv"}}, HOME)
                build_calendar(given, 1_609_800_000_000_000, 1_612_000_000_000_000)
            else:
                given = study(name, table, bad_rows)
                if table == "alerts":
                    read_log(given, "alerts")
                else:
                    {"groups": read_groups, "coverage": read_coverage, "prices": read_prices}[
                        table
                    ](given)
        except InputError:
            return False
        return True

    return one


def seeds() -> list[bytes]:
    """A good input of every kind, in both ways with bad rows."""
    return [
        bytes([i + 11 * shift]) + raw for i, (_, raw, _) in enumerate(kinds()) for shift in (0, 12)
    ]


def mutated(rng: np.random.Generator, raw: bytes) -> bytes:
    """The input with some bytes changed, cut, doubled or put in; its first byte stays."""
    head, body = raw[:1], bytearray(raw[1:])
    for _ in range(int(rng.integers(1, 6))):
        i = int(rng.integers(0, len(body) + 1))
        j = min(len(body), i + int(rng.integers(0, 30)))
        kind = rng.integers(6)
        if kind == 0 and body:
            body[i % len(body)] ^= 1 << int(rng.integers(8))
        elif kind == 1:
            del body[i:j]
        elif kind == 2:
            body[i:i] = body[i:j] * int(rng.integers(1, 50))
        elif kind == 3:
            body[i:i] = rng.bytes(int(rng.integers(1, 5)))
        elif kind == 4:
            odd = [
                b"\x00",
                b'"',
                b",",
                b"\n",
                b"\r",
                b"\xff",
                b"9" * 30,
                b"-",
                b"NaN",
                b"\xef\xbb\xbf",
            ]
            body[i:i] = odd[rng.integers(len(odd))]
        else:
            body = body[:i]
    return head + bytes(body)


def blind(seconds: float, number: int) -> Counter[str]:
    """Mutate without guidance until time is up; raises on a fault, its input in the message."""
    take, rng, good, seen = reader(), np.random.default_rng(number), seeds(), Counter[str]()
    for raw in good:
        if not take(raw):
            raise AssertionError(f"a good input is refused: {raw[:80]!r}")
    stop = time.monotonic() + seconds
    while time.monotonic() < stop:
        raw = mutated(rng, good[rng.integers(len(good))])
        try:
            seen["read" if take(raw) else "refused"] += 1
        except Exception as error:
            raise AssertionError(f"{kinds()[raw[0] % 11][0]}: {raw!r}") from error
    return seen


def guided(seconds: float, number: int) -> None:
    """Mutate by coverage in a process of its own (it ends itself); raises on a fault."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for i, raw in enumerate(seeds()):
            (folder / f"seed{i}").write_bytes(raw)
        options = [f"-max_total_time={seconds:.0f}", f"-seed={number}", "-rss_limit_mb=3000"]
        options += ["-timeout=30", "-max_len=20000", f"-artifact_prefix={HOME}-"]
        code = "from tests.fuzz import readers; readers.guide()"
        command = [sys.executable, "-c", code, str(folder), *options]
        told = subprocess.run(command, capture_output=True, text=True)
        if told.returncode:
            raise AssertionError(told.stderr[-4000:])
        lines = [line for line in told.stderr.splitlines() if "cov:" in line or "DONE" in line]
        print(*lines[-2:], sep="\n", flush=True)


def guide() -> None:
    """What runs in that process."""
    import atheris

    with atheris.instrument_imports(include=["miner"]):
        take = reader()
    atheris.Setup(sys.argv, lambda data: take(data) and None)
    atheris.Fuzz()


def run(seconds: float, number: int) -> None:
    """Guided where atheris is there, else blind."""
    try:
        import atheris  # noqa: F401
    except ImportError:
        print("atheris is not installed: mutations are blind", flush=True)
        print(dict(blind(seconds, number)), flush=True)
    else:
        guided(seconds, number)


def main() -> None:
    """Run from the command line."""
    parser = argparse.ArgumentParser(prog="python -m tests.fuzz.readers", description=__doc__)
    parser.add_argument("--seconds", type=float, default=60)
    parser.add_argument("--number", type=int, default=1)
    parser.add_argument("--blind", action="store_true")
    asked = parser.parse_args()
    if asked.blind:
        print(dict(blind(asked.seconds, asked.number)))
    else:
        run(asked.seconds, asked.number)


if __name__ == "__main__":
    main()
