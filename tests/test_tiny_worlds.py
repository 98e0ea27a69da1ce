"""The whole twin on forty tiny worlds: they exercise what they should, and the story holds."""

import csv
import tomllib
from collections import Counter
from datetime import date
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import naive
import numpy as np
import pytest
from naive import World
from tiny_worlds import random_world, write_study

SEEDS = range(40)
FDR = ALPHA = 0.05


@cache
def hunted(seed: int) -> tuple[World, list[dict[str, Any]]]:
    """A world and its rows, worked out once."""
    world = random_world(seed)
    return world, naive.hunt(world, FDR, ALPHA)


def rules_of(rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The rows that became rules, in order."""
    return sorted((r for r in rows if r["rule_order"] is not None), key=lambda r: r["rule_order"])


@pytest.mark.slow
def test_the_worlds_exercise_every_part():
    verdicts: Counter[str] = Counter()
    worlds: Counter[str] = Counter()
    for seed in SEEDS:
        world, rows = hunted(seed)
        rules = rules_of(rows)
        verdicts.update(row["verdict"] for row in rows)
        worlds["rules"] += bool(rules)
        worlds["several main rules"] += sum(r["sharpens"] is None for r in rules) > 1
        worlds["explained"] += any(r["explained_by"] is not None for r in rows)
        worlds["sharpening"] += any(r["sharpens"] is not None for r in rules)
        worlds["coverage"] += world.coverage is not None
        worlds["several units"] += len(naive.units(world)) > 1
        worlds["no groups"] += world.strata is None and world.peers is None
        worlds["peers alone"] += world.strata is None and world.peers is not None
        worlds["tied p"] += len({r["p_value"] for r in rows if r["p_value"] < 1}) < sum(
            r["p_value"] < 1 for r in rows
        )
        sizes = [len(naive.family(world, unit)) for unit in naive.units(world)]
        worlds["not all proposed"] += sum(sizes) > len(rows)
        worlds["rest above horizon"] += world.rest > world.horizon
    assert worlds["rules"] >= 30
    assert min(worlds.values()) >= 5, worlds
    assert min(verdicts[v] for v in ("confirmed", "refuted", "underpowered")) >= 5, verdicts
    assert min(verdicts["explained"], verdicts["not significant"]) >= 100, verdicts


def test_coverage_and_groups_matter():
    """Cells closed, cells open but not eligible, cells without a label, triggers that move."""
    seen: Counter[str] = Counter()
    for seed in SEEDS:
        world, _ = hunted(seed)
        segment, target = naive.discovery(world), world.targets[0]
        inside = [
            (entity, t)
            for entity in world.known
            for t in range(world.lookback - 1, world.discovery_end - world.horizon + 1)
        ]
        cells = set(naive.open_cells(world, (target, "all"), segment))
        seen["closed"] += len(inside) > len(cells)
        some = naive.eligible_cells(world, (target, "all"), segment, ("memo",))
        seen["open but not eligible"] += len(some) < len(cells)
        labels = {entity: [] for entity in world.known}
        for entity, t in inside:
            labels[entity].append(naive.peer_at(world, entity, t))
        seen["no label"] += any("" in row and set(row) != {""} for row in labels.values())
        seen["moves"] += any(len(set(row) - {""}) > 1 for row in labels.values())
        spans = [s[0] for s in world.strata or world.peers or ()]
        seen["two spans"] += len(spans) > len(set(spans))
    assert min(seen.values()) >= 8, seen


@pytest.mark.parametrize("seed", SEEDS)
def test_the_story_holds(seed):
    """What is true of every hunt, whatever it finds."""
    world, rows = hunted(seed)
    segment = naive.discovery(world)
    assert all(tuple(row)[: len(naive.COLUMNS)] == tuple(naive.COLUMNS) for row in rows)
    family_size = sum(len(naive.family(world, unit)) for unit in naive.units(world))
    q_values = naive.adjust_p([row["p_value"] for row in rows], family_size, "bh")
    rules = rules_of(rows)
    main = [row for row in rules if row["sharpens_order"] is None]
    assert [row["rule_order"] for row in rules] == list(range(1, len(rules) + 1))

    for row, q in zip(rows, q_values, strict=True):
        unit = row["target"], row["stratum"]
        combination = tuple(row["combination"].split(" + "))
        cells = naive.eligible_triggers(world, unit, segment, combination)
        assert row["triggers"] == len(cells) >= world.min_triggers
        assert 0 <= row["hits"] <= row["triggers"]
        assert row["q_value"] == q
        assert row["precision_low"] <= row["precision"] <= row["precision_high"]
        for (entity, t), (next_entity, after) in pairwise(cells):
            assert entity != next_entity or after - t >= world.rest
        # A combination is explained when it passed at first and is no rule.
        is_explained = row["q_value"] <= FDR and row["rule_order"] is None
        assert (row["verdict"] == "explained") == is_explained
        assert (row["explained_by"] is not None) == is_explained
        if is_explained:
            assert rules[row["explained_by_order"] - 1]["combination"] == row["explained_by"]
        assert (row["holdout_triggers"] is None) == (row["rule_order"] is None)

    # The first rule has its first standing; each later one stands on what was left.
    if rules:
        first = rules[0]
        assert first["step"].hits == first["hits"]
        assert first["step"].p == first["p_value"]
        assert first["q_value"] <= FDR
    for row in rules:
        assert world.min_triggers <= row["step"].triggers <= row["triggers"]
        if row["sharpens_order"] is not None:
            smaller = rules[row["sharpens_order"] - 1]
            assert (smaller["target"], smaller["stratum"]) == (row["target"], row["stratum"])
            parts = set(row["combination"].split(" + "))
            assert set(smaller["combination"].split(" + ")) < parts
            assert row["judgement"].sharper_p is not None
    for row in main:
        assert row["step"].p <= FDR

    adjusted = naive.holm([row["holdout_p_value"] for row in rules])
    for row, p in zip(rules, adjusted, strict=True):
        judgement = row["judgement"]
        assert (row["verdict"] == "confirmed") == (p <= ALPHA)
        if p > ALPHA:
            assert (row["verdict"] == "refuted") == (judgement.power >= 0.8)
        assert judgement.p_holm == p


def test_discovery_does_not_see_the_holdout():
    """Logs after the end of discovery change no number of discovery."""
    seen = 0
    for seed in range(8):
        world, rows = hunted(seed)
        end = world.discovery_end
        blind = World(
            **{
                **world.__dict__,
                "alerts": frozenset(a for a in world.alerts if a[2] <= end),
                "events": frozenset(e for e in world.events if e[2] <= end),
            }
        )
        again = naive.hunt(blind, FDR, ALPHA)
        columns = [c for c in naive.COLUMNS if "holdout" not in c and c != "verdict"]
        assert [[row[c] for c in columns] for row in again] == [
            [row[c] for c in columns] for row in rows
        ]
        seen += len(rules_of(rows))
    assert seen >= 8


def test_noise_seldom_makes_rules():
    """Without the planted link rules are rare; by passes no more than bh."""
    with_rules = 0
    for seed in range(12):
        world = random_world(seed, planted=False)
        rows = naive.hunt(world, FDR, ALPHA)
        with_rules += bool(rules_of(rows))
    assert with_rules <= 3  # 5 % of worlds, 12 of them: more than 3 has chance .002
    world, rows = hunted(0)
    stricter = naive.hunt(world, FDR, ALPHA, adjust="by")
    assert all(b["q_value"] >= a["q_value"] for a, b in zip(rows, stricter, strict=True))
    assert any(b["q_value"] > a["q_value"] for a, b in zip(rows, stricter, strict=True))


def test_a_set_that_adds_nothing_gives_way():
    """Where a third type is nearly always on, the pair is reported and not the triple."""
    rng = np.random.default_rng(8)
    alerts, events = set(), set()
    names = tuple(f"e{i}" for i in range(12))
    for name in names:
        for t in rng.choice(np.arange(2, 115, 6), 9, replace=False):
            alerts |= {(name, "a", int(t)), (name, "b", int(t))}
            if rng.random() < 0.7:
                events.add((name, "boom", int(t) + 1))
        alerts |= {(name, "c", t) for t in range(120) if t % 29}
        alerts |= {(name, k, int(t)) for k in "ab" for t in rng.integers(0, 120, 12)}
        events |= {(name, "boom", int(t)) for t in rng.integers(0, 120, 3)}
    world = World(
        n_sessions=120,
        alerts=frozenset(alerts),
        events=frozenset(events),
        known=names,
        targets=("boom",),
        lookback=1,
        horizon=1,
        rest=1,
        max_size=3,
        min_triggers=5,
        min_hits=2,
        discovery_end=80,
        holdout_start=83,
    )
    rows = {row["combination"]: row for row in naive.hunt(world, FDR, ALPHA)}
    assert rows["a + b + c"]["q_value"] <= FDR
    assert [row["combination"] for row in rules_of(list(rows.values()))] == ["a + b"]
    assert rows["a + b + c"]["explained_by"] == "a + b"
    assert rows["a + b"]["verdict"] == "confirmed"


def read(path: Path) -> list[dict[str, str]]:
    """Rows of a csv file."""
    with path.open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


@pytest.mark.parametrize("seed", range(12))
def test_a_study_on_disk_is_the_world(seed, tmp_path):
    """Read back with the csv module, the tables give the world's sets and spans."""
    world, _ = hunted(seed)
    settings = tomllib.loads(write_study(world, tmp_path / "study").read_text(encoding="utf-8"))
    folder = tmp_path / "study"

    def session(text: str) -> int | None:
        return (date.fromisoformat(text[:10]) - date(2021, 1, 1)).days if text else None

    for name in ("alerts", "events"):
        rows = read(folder / f"{name}.csv")
        assert all(row["time"].endswith(" 12:00:00") for row in rows)
        log = {(row["entity"], row["type"], session(row["time"])) for row in rows}
        assert log == getattr(world, name)
        assert len(log) == len(rows) > 20
    if world.coverage is not None:
        rows = read(folder / "coverage.csv")
        spans = [(r["entity"], r["type"], session(r["start"]), session(r["end"])) for r in rows]
        assert tuple(spans) == world.coverage
    for spans, label in ((world.strata, "band"), (world.peers, "sector")):
        if spans is not None:
            rows = read(folder / "groups.csv")
            found = [(r["entity"], session(r["start"]), session(r["end"]), r[label]) for r in rows]
            assert tuple(found) == spans
    assert settings["events"]["targets"] == list(world.targets)
    start = session(settings["holdout"]["start"])
    assert start == world.holdout_start
    assert start - 1 - settings["holdout"]["embargo"] == world.discovery_end
    assert settings["holdout"]["embargo"] >= world.horizon + world.lookback
    assert session(settings["sessions"]["end"]) == world.n_sessions - 1

    write_study(world, tmp_path / "shuffled", shuffle_rows_seed=3)
    for path in folder.glob("*.csv"):
        plain, mixed = read(path), read(tmp_path / "shuffled" / path.name)
        assert plain != mixed
        assert sorted(map(str, plain)) == sorted(map(str, mixed))
