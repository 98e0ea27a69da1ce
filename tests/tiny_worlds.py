"""Tiny random worlds for the twin, and the same worlds as a study on disk.

`random_world` draws a world with a planted pair and a sharper planted triple; its options turn on
coverage, groups that change, strata, pooling and a second target. `write_study` writes the
tables and settings of a world, so that the program itself can be run on it.
"""

import csv
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import numpy as np
from naive import Span, World

FIRST_DAY = date(2021, 1, 1)
TYPES = ("delay", "gap", "halt", "memo", "spike")


@dataclass(frozen=True)
class Options:
    """What a random world contains; None leaves the choice to the seed."""

    n_entities: int = 13
    coverage: bool | None = None
    groups: str | None = None  # "none", "strata", "peers" or "both"
    pooled: bool | None = None
    two_targets: bool | None = None
    planted: bool = True
    fades: bool | None = None  # the planted link ends with discovery


def entity_names(n: int) -> list[str]:
    """Names, two of which a careless reader takes for a missing value and a number."""
    return ["007", "NA", *(f"firm{i:02d}" for i in range(2, n))][:n]


def random_coverage(
    rng: np.random.Generator, entities: list[str], n_sessions: int
) -> list[tuple[str, str, int | None, int | None]]:
    """Whole lives, late starts, early ends, gaps, overlaps, lives of one type, and no life."""
    rows: list[tuple[str, str, int | None, int | None]] = []
    for entity in entities:
        kind = rng.integers(8)
        early = int(rng.integers(5, n_sessions // 3))
        late = int(rng.integers(2 * n_sessions // 3, n_sessions))
        if kind == 0:
            rows.append((entity, "", early, None))
        elif kind == 1:
            rows.append((entity, "", None, late))
        elif kind == 2:  # a gap
            rows += [(entity, "", -3, early), (entity, "", early + 8, n_sessions + 4)]
        elif kind == 3:  # every type on its own, one of them late and one not at all
            rows += [(entity, t, early if t == "memo" else None, None) for t in TYPES[1:]]
        elif kind == 4:  # all types early, two types later, overlapping
            rows.append((entity, "", 0, late))
            rows += [(entity, t, early, n_sessions - 1) for t in TYPES[:2]]
        else:
            rows.append((entity, "", None, None))
    return rows


def random_groups(
    rng: np.random.Generator, entities: list[str], n_sessions: int
) -> list[tuple[str, int | None, int | None, str, str]]:
    """(entity, first, last, band, sector) rows: fixed, moving, overlapping or ending early."""
    rows: list[tuple[str, int | None, int | None, str, str]] = []
    for i, entity in enumerate(entities):
        band, sector = ("large", "small")[i % 2], ("north", "south")[i // 2 % 2]
        other = "small" if band == "large" else "large"
        moves = int(rng.integers(10, n_sessions - 10))
        kind = rng.integers(8)
        if kind == 0:  # moves from one band to the other
            rows.append((entity, None, moves - 1, band, sector))
            rows.append((entity, moves, None, other, sector))
        elif kind == 1:  # the later start wins, then the first row holds again
            rows.append((entity, -5, None, band, sector))
            rows.append((entity, moves, moves + 9, other, "south"))
        elif kind == 2:  # no label later on
            rows.append((entity, 0, moves, band, sector))
        elif kind == 3:
            rows.append((entity, None, None, band, ""))
        else:
            rows.append((entity, None, None, band, sector))
    return rows


def random_world(seed: int, **options: object) -> World:
    """A world of about 13 entities, 140 sessions and 5 types; see Options."""
    opt = Options(**options)  # type: ignore[arg-type]
    rng = np.random.default_rng(seed)

    def choose(value: bool | None, chance: float) -> bool:
        drawn = bool(rng.random() < chance)
        return drawn if value is None else value

    entities = entity_names(opt.n_entities)
    n_sessions = int(rng.integers(130, 151))
    lookback, horizon = int(rng.integers(1, 4)), int(rng.integers(1, 4))
    drawn_groups = str(rng.choice(["none", "strata", "peers", "both"]))
    groups = drawn_groups if opt.groups is None else opt.groups
    has_coverage = choose(opt.coverage, 0.6)
    pooled = choose(opt.pooled, 0.5) and groups in ("strata", "both")
    targets = ("jump", "upset") if choose(opt.two_targets, 0.3) else ("upset",)
    discovery_end = int(0.62 * n_sessions)
    holdout_start = discovery_end + 1 + horizon + lookback + int(rng.integers(0, 3))

    # Background: alerts and events of busy and quiet names, and days that are bad for all.
    alerts: set[tuple[str, str, int]] = set()
    events: set[tuple[str, str, int]] = set()
    bad_days = set(rng.integers(0, n_sessions, 3).tolist())
    for entity in entities:
        busy = float(rng.uniform(0.4, 1.6))
        for t in range(n_sessions):
            shock = 8.0 if t in bad_days else 1.0
            alerts |= {(entity, k, t) for k in TYPES if rng.random() < 0.03 * busy}
            events |= {(entity, x, t) for x in targets if rng.random() < 0.015 * busy * shock}
    for entity in entities:  # the edges of the calendar
        if rng.random() < 0.3:
            alerts.add((entity, str(rng.choice(TYPES)), 0))
        if rng.random() < 0.3:
            events.add((entity, "upset", n_sessions - 1))

    # Planted: delay + gap is at times followed by an upset, with halt as well more often.
    fades = choose(opt.fades, 0.35)
    weak, strong = float(rng.uniform(0.1, 0.5)), float(rng.uniform(0.5, 1.0))
    if opt.planted:
        for entity in entities:
            t = int(rng.integers(0, 12))
            while t < n_sessions:
                triple = rng.random() < 0.4
                alerts |= {(entity, k, t) for k in ("delay", "gap")}
                if triple:
                    alerts.add((entity, "halt", t))
                link = 0.0 if fades and t > discovery_end else strong if triple else weak
                if rng.random() < link:
                    events.add((entity, "upset", t + int(rng.integers(1, horizon + 1))))
                t += horizon + int(rng.integers(4, 22))
    events = {event for event in events if event[2] < n_sessions}

    coverage = random_coverage(rng, entities, n_sessions) if has_coverage else None
    rows = random_groups(rng, entities, n_sessions) if groups != "none" else []
    strata: tuple[Span, ...] | None = None
    peers: tuple[Span, ...] | None = None
    if groups in ("strata", "both"):
        strata = tuple((e, first, last, band) for e, first, last, band, _ in rows)
    if groups in ("peers", "both"):
        peers = tuple((e, first, last, sector) for e, first, last, _, sector in rows)
    if has_coverage or rows:  # only with a table can a name be unknown
        alerts.add(("nobody", "delay", 20))
        events.add(("nobody", "upset", 21))
    return World(
        n_sessions=n_sessions,
        alerts=frozenset(alerts),
        events=frozenset(events),
        known=tuple(sorted(entities)),
        targets=targets,
        lookback=lookback,
        horizon=horizon,
        rest=horizon + int(rng.integers(0, 2)),
        max_size=3,
        min_triggers=int(rng.integers(4, 8)),
        min_hits=int(rng.integers(1, 4)),
        discovery_end=discovery_end,
        holdout_start=holdout_start,
        coverage=None if coverage is None else tuple(coverage),
        strata=strata,
        peers=peers,
        pooled=pooled,
    )


def day(t: int | None) -> str:
    """The date of session t; empty for an open end."""
    return "" if t is None else (FIRST_DAY + timedelta(days=t)).isoformat()


def write_table(path: Path, head: list[str], rows: list[list[str]], seed: int | None) -> None:
    """A csv file, its rows in the given order or shuffled."""
    if seed is not None:
        order = np.random.default_rng(seed).permutation(len(rows))
        rows = [rows[i] for i in order]
    with path.open("w", newline="", encoding="utf-8") as file:
        csv.writer(file).writerows([head, *rows])


def group_rows(world: World) -> tuple[list[str], list[list[str]]]:
    """Head and rows of the groups table; strata and peers may share rows or have their own."""
    strata, peers = world.strata or (), world.peers or ()
    if strata and peers:
        if [span[:3] for span in strata] != [span[:3] for span in peers]:
            raise ValueError("strata and peers must be spans of the same rows")
        head = ["entity", "start", "end", "band", "sector"]
        rows = [
            [e, day(first), day(last), band, sector]
            for (e, first, last, band), (_, _, _, sector) in zip(strata, peers, strict=True)
        ]
    else:
        head = ["entity", "start", "end", "band" if strata else "sector"]
        rows = [[e, day(first), day(last), label] for e, first, last, label in strata or peers]
    return head, rows


def write_study(
    world: World,
    folder: Path,
    shuffle_rows_seed: int | None = None,
    *,
    fdr: float = 0.05,
    alpha: float = 0.05,
    adjust: str = "bh",
    permutations: int = 20,
    placebo: int = 1,
) -> Path:
    """Write the world's tables and study.toml into the folder; returns the settings file.

    Session i is the date 2021-01-01 + i days; stamps are at 12:00, the close at 16:00.
    """
    folder.mkdir(parents=True, exist_ok=True)
    for name, log in (("alerts", world.alerts), ("events", world.events)):
        rows = [[entity, f"{day(t)} 12:00:00", kind] for entity, kind, t in sorted(log)]
        head = ["entity", "time", "type"]
        write_table(folder / f"{name}.csv", head, rows, shuffle_rows_seed)
    known: set[str] = set()
    tables = ""
    if world.strata is not None or world.peers is not None:
        head, rows = group_rows(world)
        known |= {row[0] for row in rows}
        write_table(folder / "groups.csv", head, rows, shuffle_rows_seed)
        tables += '\n[groups]\nsource = "groups.csv"\n'
        if world.strata is not None:
            tables += f'strata = "band"\npooled = {str(world.pooled).lower()}\n'
        if world.peers is not None:
            tables += 'peers = "sector"\n'
    if world.coverage is not None:
        rows = [[e, kind, day(first), day(last)] for e, kind, first, last in world.coverage]
        known |= {row[0] for row in rows}
        head = ["entity", "type", "start", "end"]
        write_table(folder / "coverage.csv", head, rows, shuffle_rows_seed)
        tables += '\n[coverage]\nsource = "coverage.csv"\n'
    if not tables:
        known = {row[0] for row in world.alerts | world.events}
    if known != set(world.known):
        raise ValueError(f"the tables would make {sorted(known)} known, not {world.known}")
    settings = f"""\
[study]
name = "tiny"

[alerts]
source = "alerts.csv"

[events]
source = "events.csv"
targets = [{", ".join(f'"{target}"' for target in world.targets)}]
{tables}
[sessions]
calendar = "daily"
close = "16:00"
timezone = "UTC"
start = "{day(0)}"
end = "{day(world.n_sessions - 1)}"

[windows]
lookback = {world.lookback}
horizon = {world.horizon}
rest = {world.rest}

[mining]
max_size = {world.max_size}
min_triggers = {world.min_triggers}
min_hits = {world.min_hits}

[testing]
adjust = "{adjust}"
fdr = {fdr}
permutations = {permutations}
placebo = {placebo}
seed = 7

[holdout]
start = "{day(world.holdout_start)}"
embargo = {world.holdout_start - world.discovery_end - 1}
alpha = {alpha}
"""
    path = folder / "study.toml"
    path.write_text(settings, encoding="utf-8")
    return path
