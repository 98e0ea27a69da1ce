"""Overlap, greedy order and smallest sets against counting by hand and by trying every subset."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import naive
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tiny_worlds import random_world, write_study

from miner import load_study
from miner.assemble import assemble
from miner.redundancy import (
    greedy_order,
    overlap,
    redundancy,
    redundancy_table,
    smallest_cover,
)
from miner.time_split import Segment


@dataclass(frozen=True)
class Named:
    """A rule by name."""

    target: str
    stratum: str
    combination: tuple[str, ...]
    lookback: int
    horizon: int
    rest: int


def cells(pairs):
    pairs = sorted(set(pairs))
    return tuple(np.array([p[i] for p in pairs], dtype=np.int32) for i in range(2))


pairs = st.lists(st.tuples(st.integers(0, 3), st.integers(0, 12)), max_size=12)


@given(pairs, pairs, st.integers(0, 4))
def test_overlap_is_counted_by_hand(one, other, within):
    a, b = set(one), set(other)
    near = sum(any(e == f and abs(s - t) <= within for f, s in b) for e, t in a)
    back = sum(any(e == f and abs(s - t) <= within for f, s in a) for e, t in b)
    shared = (near + back) / 2
    found = overlap([cells(one), cells(other)], [within, within])
    if a or b:
        assert found[0, 1] == found[1, 0] == pytest.approx(shared / (len(a) + len(b) - shared))
    else:
        assert np.isnan(found).all()
    if within == 0 and (a or b):
        assert found[0, 1] == pytest.approx(len(a & b) / len(a | b))  # Jaccard 1901
    if a:
        assert found[0, 0] == 1.0


covers = st.integers(1, 7).flatmap(
    lambda n: st.lists(st.lists(st.booleans(), min_size=n, max_size=n), min_size=1, max_size=12)
)


@given(
    covers, st.lists(st.integers(1, 50), min_size=7, max_size=7), st.sampled_from([0.5, 0.9, 1.0])
)
def test_the_smallest_set_is_the_smallest_of_all(columns, triggers, share):
    caught = np.array(columns).T
    n_rules = caught.shape[0]
    weight = np.array(triggers[:n_rules])
    found, is_proven = smallest_cover(caught, weight, share)
    total = int(caught.any(axis=0).sum())
    wanted = int(np.ceil(round(share * total, 9)))
    assert is_proven

    def reaches(chosen):
        return caught[list(chosen)].any(axis=0).sum() >= wanted if chosen else wanted == 0

    assert reaches(found)
    good = [c for k in range(n_rules + 1) for c in combinations(range(n_rules), k) if reaches(c)]
    best = min((len(c), int(weight[list(c)].sum())) for c in good)
    assert (len(found), int(weight[list(found)].sum())) == best


@given(covers)
def test_greedy_takes_the_most_new_events_each_time(columns):
    caught = np.array(columns).T
    n_triggers = np.arange(caught.shape[0])[::-1].copy()
    order = greedy_order(caught, n_triggers)
    assert sorted(order) == list(range(caught.shape[0]))
    so_far = np.zeros(caught.shape[1], dtype=bool)
    gains = []
    for i, r in enumerate(order):
        new = [int((caught[x] & ~so_far).sum()) for x in order[i:]]
        assert new[0] == max(new)
        ties = [x for x, n in zip(order[i:], new, strict=True) if n == new[0]]
        assert n_triggers[r] == n_triggers[ties].min()
        gains.append(new[0])
        so_far |= caught[r]
    assert gains == sorted(gains, reverse=True)


def test_greedy_can_be_beaten_and_the_smallest_set_beats_it():
    """The classical trap: the largest rule first needs three, the other two alone do it."""
    caught = np.array([[1, 1, 1, 1, 0, 0], [1, 1, 0, 0, 1, 0], [0, 0, 1, 1, 0, 1]], dtype=bool)
    triggers = np.array([5, 5, 5])
    assert greedy_order(caught, triggers) == [0, 1, 2]
    assert smallest_cover(caught, triggers, 1.0) == ((1, 2), True)


def test_one_busy_rule_is_fewer_than_two_quiet_ones():
    caught = np.array([[1, 1], [1, 0], [0, 1], [1, 1]], dtype=bool)
    assert smallest_cover(caught, np.array([100, 1, 1, 90]), 1.0) == ((3,), True)


@pytest.mark.parametrize("seed", [3, 5])
def test_a_studys_rules_are_compared_as_the_twin_counts_them(seed, tmp_path):
    world = random_world(seed, groups="strata", coverage=False, pooled=True, two_targets=False)
    inputs = assemble(load_study(write_study(world, tmp_path)))
    windows = world.lookback, world.horizon, world.rest
    rules = [
        Named("upset", stratum, combination, *windows)
        for combination in (("delay", "gap"), ("delay",), ("delay", "gap", "halt"), ("memo",))
        for stratum in ("all", "large")
    ]
    last = world.n_sessions - 1
    (found,) = redundancy(Segment(inputs.panel, 0, last), rules, inputs.calendar.dates)
    calls = [
        set(naive.eligible_triggers(world, (r.target, r.stratum), (0, last), r.combination))
        for r in rules
    ]
    events = {(e, t) for e, x, t in world.events if x == "upset" and e in world.known}
    caught = [
        {(e, s) for e, s in events if any((e, t) in c for t in range(s - world.horizon, s))}
        for c in calls
    ]
    table = redundancy_table(found)
    so_far, taken = set(), set()
    months = (last - world.horizon - world.lookback + 2) * 12 / 365.25
    for row in table.to_dict("records"):
        r = row["rule"]
        assert row["new_events"] == len(caught[r] - so_far)
        so_far |= caught[r]
        taken |= calls[r]
        assert row["events"] == len(so_far)
        assert row["calls_a_month"] == pytest.approx(len(taken) / months)
    assert found.events_caught == len(so_far) > 5
    assert found.is_proven
    reached = set().union(*(caught[r] for r in found.smallest))
    assert len(reached) >= 0.9 * len(so_far)
    for a, b in combinations(range(len(rules)), 2):
        union = len(calls[a] | calls[b])
        assert found.jaccard[a, b] == pytest.approx(len(calls[a] & calls[b]) / union)
        assert found.jaccard_near[a, b] >= found.jaccard[a, b] - 1e-12
    assert table["in_smallest"].sum() == len(found.smallest)
    assert pd.isna(table["overlap"].iloc[0])
    assert table["overlap"].iloc[1:].between(0, 1).all()


def test_rules_that_catch_nothing_need_no_set():
    assert smallest_cover(np.zeros((3, 4), dtype=bool), np.array([1, 2, 3]), 0.9) == ((), True)
    assert smallest_cover(np.zeros((2, 0), dtype=bool), np.array([1, 2]), 0.9) == ((), True)
