"""Hypothesis over settings and small logs, through the real commands hunt, check and scan."""

from __future__ import annotations

import datetime as dt
import json
import math
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pandas as pd
from hypothesis import HealthCheck, given, seed, settings
from hypothesis import strategies as st

from miner.settings.sections import SECTIONS
from tests.fuzz.running import run

FIRST = dt.date(2021, 1, 1)
NAMES = (
    "a",
    "b",
    "A",
    "NA",
    "007",
    "",
    " ",
    "=1+1",
    "x" * 300,
    "\u202eabc",
    "e\u0301",
    "é",
    "a\nb",
    '"',
)
KINDS = ("one", "two", "three", "", "nan", "+", "one + two", ",")
TIMES = (
    "2021-02-30", "1677-09-21", "2262-04-12", "9999-12-31 23:59:59", "0001-01-01", "0", "-1",
    "1612137600", "1612137600000", "NaT", "now", "12:00", "2021-03-28 02:30:00", "2020-02-29", "",
    "2021-02-01T10:00Z", "2021-02-01 10:00:00+05:30", "2021-02-01 25:00", "01/02/2021",
)  # fmt: skip
ODD: tuple[Any, ...] = (
    0, 1, 2, 3, -1, 7, 59, 10**6, 2**31, 2**63, 2**70, 0.0, 0.5, -0.5, 1.0, 1.5, 1e-300, 1e308,
    math.nan, math.inf, True, False, "", " ", "a", "daily", "weekdays", "XNYS", "XXXX", "dates.csv",
    "all", "2021-02-01", "16:00", "25:00", "UTC", "Europe/London", "nowhere", "bh", "by",
    "westfall-young", "hazard", "../alerts.csv", "/etc/passwd", "*.csv", "[", "\u0000",
    "sqlite:///none.db", "postgresql://u:p@h/d", [], [1], ["one"], ["upset", "upset"], [[]], {},
    {"entity": "entity"}, {"entity": ""}, {"time": "entity"}, {"nothing": "here"},
    dt.date(2021, 2, 1), dt.date(1, 1, 1), dt.date(9999, 12, 31), dt.time(16), dt.time(0),
)  # fmt: skip
MULTIPLIES_WORK = {"permutations", "placebo", "shuffle", "folds"}


def toml(value: Any) -> str:
    """A value as TOML."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else str(value)
    if isinstance(value, dt.date | dt.time):
        return value.isoformat()
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(k)} = {toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, str):
        return json.dumps(value).replace("\\u0000", "\\u0000")
    return str(value)


def stamp(rng: np.random.Generator, odd: float) -> str:
    """Mostly a good stamp within three months."""
    if rng.random() < odd:
        return str(rng.choice(TIMES))
    day = FIRST + dt.timedelta(days=int(rng.integers(0, 91)))
    return f"{day}{rng.choice(['', ' 12:00:00', 'T17:30', ' 16:00:00.000001'])}"


def tables(rng: np.random.Generator, odd: float) -> dict[str, list[list[str]]]:
    """Head and rows of the tables of a study, a share of the cells odd."""
    n = int(rng.choice([0, 1, 40, 150, 400], p=[0.05, 0.05, 0.2, 0.4, 0.3]))

    def name(good: str, bad: tuple[str, ...] = NAMES) -> str:
        return bad[rng.integers(len(bad))] if rng.random() < odd else str(rng.choice(good.split()))

    def bound() -> str:
        return "" if rng.random() < 0.6 else stamp(rng, odd)

    log = ["entity", "time", "type"]
    rows = [[name("a b c d"), stamp(rng, odd), name("one two three", KINDS)] for _ in range(n)]
    found = {
        "alerts": [log, *rows],
        "events": [log, *([name("a b c d"), stamp(rng, odd), "upset"] for _ in range(n // 5))],
    }
    if rng.random() < 0.4:
        head = ["entity", "start", "end", "band", "sector"]
        rows = [
            [name("a b c d"), bound(), bound(), name("x y"), name("x y")]
            for _ in range(rng.integers(0, 8))
        ]
        found["groups"] = [head, *rows]
    if rng.random() < 0.4:
        rows = [
            [name("a b c d"), name("one two") if rng.random() < 0.3 else "", bound(), bound()]
            for _ in range(rng.integers(0, 8))
        ]
        found["coverage"] = [["entity", "type", "start", "end"], *rows]
    if rng.random() < 0.25:
        rows = []
        for entity in "abc":
            close = 50 * np.exp(np.cumsum(rng.normal(0, 0.03, 91)))
            for t in np.flatnonzero(rng.random(91) < 0.95).tolist():
                odd_price = ("", "-1", "0", "nan", "1e400", "x")[rng.integers(6)]
                price = odd_price if rng.random() < odd / 4 else f"{close[t]:.4f}"
                rows.append([entity, str(FIRST + dt.timedelta(days=t)), price])
        found["prices"] = [["entity", "date", "close"], *rows]
    return found


@st.composite
def sections(draw: st.DrawFn, has: frozenset[str]) -> dict[str, Any]:
    """Settings: a study that can run, with up to three keys of any section replaced."""
    given_: dict[str, Any] = {
        "alerts": {
            "source": "alerts.csv",
            "bad_rows": draw(st.sampled_from(["error", "set-aside", "set-aside"])),
        },
        "events": {"source": "events.csv", "bad_rows": "set-aside"},
        "sessions": {
            "calendar": draw(st.sampled_from(["daily", "weekdays", "XNYS"])),
            "start": FIRST,
            "end": FIRST + dt.timedelta(days=90),
        },
        "windows": {
            "lookback": draw(st.integers(1, 4)),
            "horizon": draw(st.integers(1, 4)),
            "rest": draw(st.integers(0, 6)),
        },
        "mining": {"min_triggers": draw(st.integers(1, 3)), "min_hits": 1},
        "testing": {"placebo": 1, "permutations": 20, "fdr": draw(st.sampled_from([0.05, 0.9]))},
        "holdout": {"folds": 1},
    }
    if "groups" in has:
        used = draw(
            st.sampled_from([{"strata": "band"}, {"peers": "sector"}, {}, {"strata": "none"}])
        )
        given_["groups"] = {"source": "groups.csv", "bad_rows": "set-aside", **used}
    if "coverage" in has:
        given_["coverage"] = {"source": "coverage.csv", "bad_rows": "set-aside"}
    if "prices" in has:
        given_["prices"] = {
            "source": "prices.csv",
            "bad_rows": "set-aside",
            "volatility_sessions": 10,
        }
        given_["prices"]["jumps"] = draw(st.sampled_from(["error", "break", "keep"]))
    for _ in range(draw(st.sampled_from([0, 0, 1, 1, 1, 2]))):
        name = draw(st.sampled_from([*SECTIONS, "nothing"]))
        keys = [*SECTIONS[name].model_fields, "nothing"] if name in SECTIONS else ["key"]
        key = draw(st.sampled_from(keys))
        value = draw(st.sampled_from(ODD))
        if key in MULTIPLIES_WORK and isinstance(value, int | float) and value > 100:
            continue  # as long a run as was asked for is no fault
        if draw(st.integers(0, 19)) == 0:
            given_[name] = value
        elif isinstance(given_.setdefault(name, {}), dict):
            given_[name][key] = value
    return given_


@st.composite
def texts(draw: st.DrawFn, text: str) -> bytes:
    """The text, at times with bytes cut out, doubled or put in."""
    raw = text.encode("utf-8", "surrogatepass")
    for _ in range(draw(st.sampled_from([0] * 30 + [1, 3]))):
        i = draw(st.integers(0, len(raw)))
        j = min(len(raw), i + draw(st.sampled_from([0, 1, 1, 5, 40])))
        odd = [
            b"",
            raw[i:j] * 2,
            b"\x00",
            b"\xff\xfe",
            b'"',
            b"\n",
            b",",
            b"\xef\xbb\xbf",
            b"]",
            b"=",
        ]
        raw = raw[:i] + draw(st.sampled_from(odd)) + raw[j:]
    return raw


@st.composite
def files(draw: st.DrawFn) -> dict[str, bytes]:
    """The files of a study by name."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    drawn = tables(rng, draw(st.sampled_from([0.0, 0.0, 0.001, 0.02])))
    found: dict[str, bytes] = {}
    for name, rows in drawn.items():
        frame = pd.DataFrame(rows[1:], columns=rows[0])
        found[f"{name}.csv"] = draw(texts(frame.to_csv(index=False)))
    said = draw(sections(frozenset(drawn)))
    lines = []
    for name, keys in said.items():
        if isinstance(keys, dict):
            lines += [f"[{name}]", *(f"{json.dumps(k)} = {toml(v)}" for k, v in keys.items())]
        else:
            lines = [f"{name} = {toml(keys)}", *lines]
    found["study.toml"] = draw(texts("\n".join(lines) + "\n"))
    return found


@st.composite
def books(draw: st.DrawFn) -> bytes:
    """A rule book with up to two keys replaced."""
    rule: dict[str, Any] = {
        "target": "upset",
        "combination": draw(st.sampled_from([["one"], ["one", "two"], ["one", "three", "two"]])),
        "lookback": draw(st.integers(1, 4)),
        "horizon": draw(st.integers(1, 4)),
        "rest": draw(st.integers(0, 6)),
    }
    said: dict[str, Any] = {
        "calendar": "daily",
        "start": str(FIRST),
        "close": "16:00",
        "timezone": "UTC",
    }
    for _ in range(draw(st.sampled_from([0, 0, 0, 0, 1, 2]))):
        part = draw(st.sampled_from([rule, said]))
        more = (
            ["status", "note", "stratum", "precision", "id", "nothing"] if part is rule else ["end"]
        )
        part[draw(st.sampled_from([*part, *more]))] = draw(st.sampled_from(ODD))
    lines = ["format = 1", "[sessions]", *(f"{k} = {toml(v)}" for k, v in said.items())]
    lines += ["[[rule]]", *(f"{k} = {toml(v)}" for k, v in rule.items())]
    return draw(texts("\n".join(lines) + "\n"))


def write(folder: Path, content: dict[str, bytes]) -> None:
    """Write files into a folder."""
    for name, raw in content.items():
        (folder / name).write_bytes(raw)


def try_study(content: dict[str, bytes], command: str, seen: Counter[str]) -> None:
    """Hunt or check a study."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        write(folder, content)
        arguments = [command, str(folder / "study.toml"), "--workers", "1"]
        if command == "hunt":
            arguments += ["--output", str(folder / "run")]
        seen[f"{command}, exit {run(arguments, folder)}"] += 1


def try_scan(content: dict[str, bytes], book: bytes, as_of: str, seen: Counter[str]) -> None:
    """Scan a log with a book."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        write(folder, {"alerts.csv": content["alerts.csv"], "book.toml": book})
        arguments = ["scan", str(folder / "book.toml"), "--alerts", str(folder / "alerts.csv")]
        arguments += ["--format", "json"] + (["--as-of", as_of] if as_of else [])
        seen[f"scan, exit {run(arguments, folder)}"] += 1


def trial(n_examples: int, number: int, seen: Counter[str]) -> Callable[[], None]:
    """A test of so many examples, drawn by a number; failing ones are shrunk and shown."""
    as_of = st.sampled_from(["", "2021-02-10", "2021-03-01", "2021-03-31", "9999-12-31"])

    @seed(number)
    @settings(
        max_examples=n_examples,
        deadline=None,
        database=None,
        suppress_health_check=list(HealthCheck),
        print_blob=True,
    )
    @given(files(), st.sampled_from(["hunt", "hunt", "check", "scan"]), books(), as_of)
    def one(content: dict[str, bytes], command: str, book: bytes, day: str) -> None:
        if command == "scan":
            try_scan(content, book, day, seen)
        else:
            try_study(content, command, seen)

    return one
