"""How time and memory of a hunt grow with each of its counts, the others held."""

from __future__ import annotations

import itertools
import json
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
from hashlib import sha256
from pathlib import Path

import numpy as np

from tests.benchmarks.measure import HERE, BenchmarkError, hunt
from tests.benchmarks.sizes import FEWEST_TRIGGERS, REFERENCE, Size, study_of
from tests.benchmarks.tables import gigabytes, seconds, table

DOUBLINGS = 4
SHARE_OF_TOTAL = 0.05  # a stage below this at the largest size is not looked at
LEAST_SECONDS = 0.05  # below this a clock tells more of the machine than of growth
BENT = 1.2  # slopes above this are more than noise around 1
FREE_MEMORY = 0.7  # of what is available: the largest memory that is expected to go well
WHOLE = "whole run"


@dataclass(frozen=True)
class Point:
    """One hunt: the changed count, wall seconds by stage, processor seconds, peak bytes, family,
    events."""

    count: float
    seconds: dict[str, float]
    cpu: float
    peak: int
    family: int
    events: int


def held(scale: float) -> Size:
    """What the others are held at: a quarter of the reference's entities and exchanges.

    Ten triggers are asked for, few enough for the family to be whole at nearly every size, so that
    it does not grow with counts that are not its own.
    """
    return replace(
        REFERENCE,
        n_entities=max(40, round(scale * REFERENCE.n_entities / 4)),
        permutations=REFERENCE.permutations // 4,
        min_triggers=FEWEST_TRIGGERS,
    )


def _sets(size: Size) -> int:
    """Combinations that there are."""
    return sum(math.comb(size.n_types, k) for k in range(1, size.max_size + 1))


def _doubled(field: str, first: float) -> Callable[[Size], list[Size]]:
    kind = type(getattr(REFERENCE, field))
    return lambda base: [
        replace(base, **{field: kind(first * 2**step)}) for step in range(DOUBLINGS + 1)
    ]


def _entities(base: Size) -> list[Size]:
    return [replace(base, n_entities=base.n_entities * 2**n) for n in range(DOUBLINGS + 1)]


DIMENSIONS: dict[str, Callable[[Size], list[Size]]] = {
    "entities": _entities,
    "sessions": _doubled("n_sessions", 1250 / 4),
    "types": _doubled("n_types", 10),
    "max_size": lambda base: [replace(base, max_size=n) for n in range(1, DOUBLINGS + 2)],
    "events": _doubled("base_rate", 0.025 / 4),
    "exchanges": _doubled("permutations", 500),
}
COUNTS: dict[str, Callable[[Size, int], float]] = {
    "entities": lambda size, events: size.n_entities,
    "sessions": lambda size, events: size.n_sessions,
    "types": lambda size, events: _sets(size),
    "max_size": lambda size, events: _sets(size),
    "events": lambda size, events: events,
    "exchanges": lambda size, events: size.permutations,
}
COUNTED_IN = {"types": "combinations of so many types", "max_size": "combinations of up to so many"}


def measure(
    name: str, lines: Path, *, scale: float, repeats: int, limit: float, folder: Path
) -> Iterator[Point | str]:
    """Points of one dimension, smallest first, or why there are no more.

    Each is kept in ``lines`` under the sources it was measured with, and not measured again. The
    next is left out where time or memory would, growing as they did, pass ``limit`` seconds or what
    is free.
    """
    done: list[Point] = []
    for size in DIMENSIONS[name](held(scale)):
        key = _key(size, repeats)
        point = _kept(lines, key)
        if point is None:
            stop = _too_large(done, limit)
            if stop:
                yield f"no {name} beyond {done[-1].count:,.0f}: {stop}"
                return
            try:
                runs = [hunt(study_of(size), folder / "run", limit=limit) for _ in range(repeats)]
            except BenchmarkError as error:
                yield f"no {name} beyond {done[-1].count if done else 0:,.0f}: {error}"
                return
            best = min(runs, key=lambda run: run.use.wall)
            events = best.record["counts"]["tables"]["events"]["used"]
            point = Point(
                0.0,
                best.seconds | {WHOLE: best.use.wall},
                best.use.cpu,
                best.use.peak,
                best.family,
                events,
            )
            lines.parent.mkdir(parents=True, exist_ok=True)
            with lines.open("a", encoding="utf-8") as out:
                out.write(json.dumps({"key": key, **asdict(point)}) + "\n")
        point = replace(point, count=COUNTS[name](size, point.events))
        done.append(point)
        yield point


def _key(size: Size, repeats: int) -> str:
    digest = sha256(f"{asdict(size)} {repeats}".encode())
    for path in sorted((HERE / "miner").rglob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()[:24]


def _kept(lines: Path, key: str) -> Point | None:
    if lines.exists():
        for line in lines.read_text(encoding="utf-8").splitlines():
            row = json.loads(line)
            if row.pop("key") == key:
                return Point(**row)
    return None


def _too_large(done: Sequence[Point], limit: float) -> str | None:
    """Why the next point would be too large, judged by the last step; None if it would not."""
    if len(done) < 2:
        return None
    before, last = done[-2], done[-1]
    step = max(2.0, last.seconds[WHOLE] / before.seconds[WHOLE])
    expected = last.seconds[WHOLE] * step
    if expected > limit:
        return f"about {expected:,.0f} s expected, {limit:,.0f} allowed"
    memory = last.peak * max(2.0, last.peak / before.peak)
    free = _free_memory()
    if free is not None and memory > FREE_MEMORY * free:
        return f"about {memory / 1e9:.1f} GB expected, {free / 1e9:.1f} free"
    return None


def _free_memory() -> int | None:
    info = Path("/proc/meminfo")
    if not info.exists():
        return None
    for line in info.read_text(encoding="utf-8").splitlines():
        if line.startswith("MemAvailable"):
            return int(line.split()[1]) * 1024
    return None


def slope(points: Sequence[Point], values: Sequence[float]) -> float:
    """Fitted power of growth: of log values on log counts; NaN where there is too little to fit."""
    count = np.array([p.count for p in points], dtype=float)
    value = np.array(values, dtype=float)
    some = (value >= LEAST_SECONDS) & (count > 0)
    if np.unique(count[some]).size < 2:
        return math.nan
    return float(np.polyfit(np.log(count[some]), np.log(value[some]), 1)[0])


def last_slope(points: Sequence[Point], values: Sequence[float]) -> float:
    """Power of growth over the last step, where what does not grow weighs least."""
    return slope(points[-2:], values[-2:])


def first_to_bend(points: Sequence[Point]) -> str:
    """The stage that first grows faster than its count, and where, in words."""
    stages = [
        name
        for name, value in points[-1].seconds.items()
        if name != WHOLE and value >= SHARE_OF_TOTAL * points[-1].seconds[WHOLE]
    ]
    for before, after in itertools.pairwise(points):
        steep = {
            name: slope((before, after), (before.seconds.get(name, 0.0), after.seconds[name]))
            for name in stages
            if name in after.seconds
        }
        bent = {name: power for name, power in steep.items() if power > BENT}
        if bent:
            name = max(bent, key=lambda n: after.seconds[n] - before.seconds.get(n, 0.0))
            return (
                f"first to grow faster than its count: {name}, power {bent[name]:.2f} from "
                f"{before.count:,.0f} to {after.count:,.0f}"
            )
    return "no stage grows faster than its count"


def text(name: str, points: Sequence[Point], notes: Sequence[str]) -> str:
    """One dimension's table: a row a size, then the powers of growth, then what bends first."""
    stages = [n for n in points[-1].seconds if n != WHOLE]
    head = [COUNTED_IN.get(name, name), "family", *stages, f"**{WHOLE}**", "processor", "peak, GB"]
    rows = [
        [
            f"{p.count:,.0f}",
            f"{p.family:,}",
            *(seconds(p.seconds.get(stage, 0.0)) for stage in [*stages, WHOLE]),
            seconds(p.cpu),
            gigabytes(p.peak),
        ]
        for p in points
    ]
    columns = [[p.seconds.get(stage, 0.0) for p in points] for stage in [*stages, WHOLE]]
    columns += [[p.cpu for p in points], [p.peak / 1e9 for p in points]]
    for what, fit in (("power, fitted", slope), ("power, last step", last_slope)):
        rows.append([what, "", *(_power(fit(points, values)) for values in columns)])
    said = "; ".join([first_to_bend(points), *notes])
    return f"**{name}**: {said}.\n\n{table(head, rows)}"


def _power(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.2f}"
