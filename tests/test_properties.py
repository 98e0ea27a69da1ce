"""What must not change an answer: order of rows, names, threads, silent entities, later data."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import naive
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tiny_worlds import random_world, write_study

from miner import Hunt, hunt, load_study
from miner.columns import CANDIDATE_COLUMNS, JOINER
from miner.kernels import bits, windows

KEY = ["target", "stratum", "combination"]
NUMBERS = list(CANDIDATE_COLUMNS)[3:15]
DISCOVERY = list(CANDIDATE_COLUMNS)[:18]
PLAIN = {"groups": "none", "coverage": False, "two_targets": False, "fades": False}
SEEDS = [1, 3, 9]


def run(world: naive.World, folder: Path, n_workers: int = 1, **options: object) -> Hunt:
    """The hunt of a world on disk, without the walk-forward, its files in folder/run."""
    study = load_study(write_study(world, folder, **options))  # type: ignore[arg-type]
    study = replace(study, holdout=study.holdout.model_copy(update={"folds": 0}))
    return hunt(study, folder / "run", n_workers=n_workers)


def renamed(world: naive.World, name: Callable[[str], str], kind: Callable[[str], str]):
    """The world with other names for its entities and alert types."""
    spans = {}
    for field in ("coverage", "strata", "peers"):
        rows = getattr(world, field)
        if rows is not None and field == "coverage":
            rows = tuple((name(e), kind(k) if k else k, a, b) for e, k, a, b in rows)
        elif rows is not None:
            rows = tuple((name(e), a, b, label) for e, a, b, label in rows)
        spans[field] = rows
    return replace(
        world,
        alerts=frozenset((name(e), kind(k), t) for e, k, t in world.alerts),
        events=frozenset((name(e), k, t) for e, k, t in world.events),
        known=tuple(sorted(map(name, world.known))),
        **spans,
    )


def assert_same_numbers(one: pd.DataFrame, other: pd.DataFrame) -> None:
    """Same rows in any order, same counts, numbers to nine digits."""
    one, other = (t.sort_values(KEY, ignore_index=True)[KEY + NUMBERS] for t in (one, other))
    assert len(one) > 10
    pd.testing.assert_frame_equal(one, other, rtol=1e-9, atol=1e-300, check_exact=False)


@pytest.mark.parametrize("seed", SEEDS)
def test_order_of_rows_and_number_of_workers_change_no_byte(seed, tmp_path):
    world = random_world(seed)
    run(world, tmp_path / "a", permutations=70)
    run(world, tmp_path / "b", n_workers=3, shuffle_rows_seed=5, permutations=70)
    for name in ("candidates.csv", "rules.csv", "quarters.csv", "candidates.parquet"):
        one, other = ((tmp_path / x / "run" / name).read_bytes() for x in "ab")
        assert one == other, name
        assert len(one) > 100


@pytest.mark.parametrize("seed", SEEDS)
def test_other_names_in_the_same_order_change_names_only(seed, tmp_path):
    world = random_world(seed)
    other = renamed(world, lambda e: f"x {e}é", lambda k: f"{k}, or so")
    run(world, tmp_path / "a")
    run(other, tmp_path / "b")
    one, two = (pd.read_csv(tmp_path / x / "run" / "candidates.csv", dtype=str) for x in "ab")
    for column in ("combination", "sharpens", "explained_by"):
        two[column] = two[column].str.replace(", or so", "")
    pd.testing.assert_frame_equal(one, two)


@pytest.mark.parametrize("seed", SEEDS)
def test_other_names_in_another_order_change_no_number(seed, tmp_path):
    world = random_world(seed)
    order = {e: f"e{(7 * i) % 13:02d}" for i, e in enumerate(world.known)}
    kinds = {"delay": "z", "gap": "b", "halt": "y", "memo": "a", "spike": "c"}
    other = renamed(world, lambda e: order.get(e, e), lambda k: kinds.get(k, k))
    one, two = run(world, tmp_path / "a").candidates, run(other, tmp_path / "b").candidates
    back = {new: old for old, new in kinds.items()}
    two["combination"] = [
        JOINER.join(sorted(back[k] for k in text.split(JOINER))) for text in two["combination"]
    ]
    assert_same_numbers(one, two)


@pytest.mark.parametrize("seed", SEEDS)
def test_a_silent_entity_changes_base_rates_only(seed, tmp_path):
    """It has no alerts and no events: margins, and with them every p, stay as they are."""
    world = random_world(seed, groups="none", coverage=True)
    other = replace(
        world,
        known=(*world.known, "silent"),
        coverage=(*(world.coverage or ()), ("silent", "", None, None)),
    )
    one, two = run(world, tmp_path / "a").candidates, run(other, tmp_path / "b").candidates
    assert (two["base_rate"] < one["base_rate"]).all()
    two["base_rate"] = one["base_rate"]
    assert_same_numbers(one, two)


@pytest.mark.parametrize("seed", SEEDS)
def test_discovery_is_blind_to_what_comes_after_it(seed, tmp_path):
    """Everything later than discovery's last session is drawn anew: not a bit may change."""
    world = random_world(seed)
    rng = np.random.default_rng(seed)
    last, n = world.discovery_end, world.n_sessions

    def redrawn(log, kinds):
        kept = {row for row in log if row[2] <= last}
        draws = [rng.choice(x, 200).tolist() for x in (world.known, kinds, range(last + 1, n))]
        return frozenset(kept | set(zip(*draws, strict=True)))

    other = replace(
        world,
        alerts=redrawn(world.alerts, naive.alert_types(world)),
        events=redrawn(world.events, world.targets),
    )
    one, two = run(world, tmp_path / "a"), run(other, tmp_path / "b")
    pd.testing.assert_frame_equal(
        one.candidates[DISCOVERY], two.candidates[DISCOVERY], check_exact=True
    )
    steps = [[rule["step"] for rule in result.record["rules"]] for result in (one, two)]
    assert steps[0] == steps[1]
    later = [result.rules["holdout_hits"].tolist() for result in (one, two)]
    assert later[0] != later[1] or not later[0]


@pytest.mark.parametrize("seed", SEEDS)
def test_the_holdout_is_blind_to_events_before_it(seed, tmp_path):
    """Hits there need events after its first session; only which rules there are may change."""
    world = random_world(seed)
    moved = frozenset(
        (e, x, t - 1 if 0 < t < world.holdout_start - 1 else t) for e, x, t in world.events
    )
    one, two = run(world, tmp_path / "a"), run(replace(world, events=moved), tmp_path / "b")
    columns = KEY + list(CANDIDATE_COLUMNS)[18:26]
    both = one.rules[columns].merge(two.rules[columns], on=KEY, suffixes=("", "_b"))
    for column in columns[3:]:
        assert both[column].tolist() == pytest.approx(both[f"{column}_b"].tolist(), nan_ok=True)
    assert (one.candidates["hits"].sum(), len(one.rules)) != (0, 0)


@given(st.integers(0, 2**32 - 1), st.integers(1, 6))
def test_events_beyond_the_horizon_or_before_are_no_hits(seed, horizon):
    """Any event outside [t + 1, t + horizon] may move about outside it."""
    rng = np.random.default_rng(seed)
    n, t = 40, int(rng.integers(0, 30))
    session = np.unique(rng.integers(0, n, 8))
    outside = np.array([s for s in range(n) if not t < s <= t + horizon])
    is_inside = (session > t) & (session <= t + horizon)
    moved = np.unique(np.where(is_inside, session, rng.choice(outside, session.size)))
    zero = np.zeros(n, dtype=int)
    flags = [
        bits.unpack(windows.mark_windows(zero[: s.size], s, 1, n, horizon), n)[0, t]
        for s in (session, moved)
    ]
    assert flags[0] == flags[1] == is_inside.any()


def test_westfall_young_is_the_same_for_any_workers_and_rows(tmp_path):
    world = random_world(3)
    options = {"adjust": "westfall-young", "permutations": 300}
    one = run(world, tmp_path / "a", **options)
    two = run(world, tmp_path / "b", n_workers=3, shuffle_rows_seed=1, **options)
    pd.testing.assert_frame_equal(one.candidates, two.candidates, check_exact=True)
    q = one.candidates["q_value"] * 301
    np.testing.assert_allclose(q, q.round(), atol=1e-9)
    assert one.record["counts"] == two.record["counts"]
    assert set(one.record["counts"]["passed"]) == {"bh", "by", "westfall-young"}
