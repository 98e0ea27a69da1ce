"""The slow twin's definitions on worlds small enough to work out by hand, and its nulls' laws."""

from collections import Counter
from dataclasses import replace
from itertools import product

import naive
import numpy as np
import pytest
from naive import World
from scipy.optimize import minimize
from scipy.stats import chi2
from sklearn.linear_model import LogisticRegression

ALL = ("boom", "all")


def small_world(**changes: object) -> World:
    """Two entities over 40 sessions, discovery 0..19, holdout 26..39; lookback 2, horizon 3."""
    world = World(
        n_sessions=40,
        alerts=frozenset(),
        events=frozenset(),
        known=("e", "f"),
        targets=("boom",),
        lookback=2,
        horizon=3,
        rest=3,
        max_size=2,
        min_triggers=1,
        min_hits=1,
        discovery_end=19,
        holdout_start=26,
    )
    return replace(world, **changes)


def logs(entity: str, **sessions: list[int]) -> frozenset[tuple[str, str, int]]:
    """Rows of a log: one type per keyword."""
    return frozenset((entity, kind, t) for kind, ts in sessions.items() for t in ts)


# --- counting -------------------------------------------------------------------------------


def test_triggers_by_hand():
    """Lookback 2, rest 3: a is on at 0-1, 3-4, 5-6 joined to it, 8-9, 12-13 and 30-31."""
    world = small_world(alerts=logs("e", a=[0, 3, 5, 8, 12, 30], b=[4, 13, 29]))
    on = [t for t in range(40) if naive.is_on(world, "e", ("a",), t)]
    assert on == [0, 1, 3, 4, 5, 6, 8, 9, 12, 13, 30, 31]
    # Session 0 was off before; 3 is rested (3 - 0 >= 3); 8 and 12 as well.
    assert naive.triggers(world, "e", ("a",)) == (0, 3, 8, 12, 30)
    # Complete when the later of the two comes, in either order.
    assert naive.triggers(world, "e", ("a", "b")) == (4, 13, 30)
    # With a longer rest, edge 8 is lost for good and starts no rest of its own.
    assert naive.triggers(replace(world, rest=6), "e", ("a",)) == (0, 8, 30)
    assert naive.triggers(replace(world, rest=9), "e", ("a",)) == (0, 12, 30)


def test_what_counts_as_followed():
    """The horizon starts after the trigger's own session."""
    world = small_world(events=logs("e", boom=[7]))
    assert [t for t in range(40) if naive.followed(world, "boom", ("e", t))] == [4, 5, 6]


def test_eligible_and_open_cells():
    """Lookback inside the study, horizon inside the segment, coverage asked at t."""
    coverage = (("e", "a", None, 9), ("e", "b", 8, 11), ("e", "b", 11, None), ("f", "", 17, None))
    world = small_world(alerts=logs("e", a=[3], b=[3]), coverage=coverage)

    def sessions(cells: tuple[naive.Cell, ...], entity: str) -> list[int]:
        return [t for e, t in cells if e == entity]

    discovery, holdout = naive.discovery(world), naive.holdout(world)
    assert sessions(naive.open_cells(world, ALL, discovery), "e") == list(range(1, 17))
    assert sessions(naive.open_cells(world, ALL, discovery), "f") == []
    assert sessions(naive.open_cells(world, ALL, holdout), "f") == list(range(26, 37))
    eligible = {
        combination: sessions(naive.eligible_cells(world, ALL, discovery, combination), "e")
        for combination in naive.all_combinations("ab", 2)
    }
    assert eligible[("a",)] == list(range(1, 10))
    assert eligible[("b",)] == list(range(8, 17))
    assert eligible["a", "b"] == [8, 9]
    for cell in product(world.known, range(40)):
        for combination, found in eligible.items():
            is_eligible = naive.is_eligible(world, ALL, discovery, combination, cell)
            assert is_eligible == (cell[0] == "e" and cell[1] in found)


def test_labels_units_and_overlaps():
    """The latest start wins where spans overlap; no label means no stratum, but pooled."""
    spans = (
        ("e", None, None, "large"),
        ("e", -3, 20, "small"),
        ("e", 5, 7, "large"),
        ("f", 10, None, "small"),
    )
    world = small_world(strata=spans, pooled=True)
    assert [naive.stratum_at(world, "e", t) for t in (0, 4, 5, 7, 8, 20, 21)] == [
        *("small", "small", "large", "large", "small", "small", "large"),
    ]
    assert naive.stratum_at(world, "f", 9) == ""
    assert naive.peer_at(world, "f", 9) == ""
    assert naive.peer_at(world, "f", 10) == "small"
    assert naive.units(world) == [("boom", "large"), ("boom", "small"), ("boom", "all")]
    assert naive.units(replace(world, pooled=False)) == [("boom", "large"), ("boom", "small")]
    assert naive.units(small_world()) == [ALL]
    by_unit = [len(naive.open_cells(world, unit, (0, 19))) for unit in naive.units(world)]
    assert by_unit == [3, 13 + 7, 32]  # f has no stratum on sessions 1 to 9
    clash = small_world(strata=(("e", 3, None, "large"), ("e", 3, 9, "small")))
    with pytest.raises(ValueError, match="start together"):
        naive.stratum_at(clash, "e", 5)


def test_windows_family_and_candidates():
    """Windows reach s-H-L+1 .. s-1; the family never looks at events."""
    world = small_world(
        alerts=logs("e", a=[4, 9, 16], b=[8, 10], c=[17]) | logs("f", a=[2]) | logs("?", a=[5]),
        events=logs("e", boom=[1, 8, 9, 18, 20]) | logs("f", boom=[3]) | logs("?", boom=[6]),
        min_triggers=2,
        min_hits=2,
    )
    # No open cell before session 1 (the lookback is 2), and 20 is after discovery.
    windows = naive.pre_event_windows(world, ALL)
    assert windows == [set("a"), set("b"), set("ac"), set("a")]
    wider = naive.pre_event_windows(replace(world, lookback=3), ALL)
    assert wider == [set("a"), set("ab"), set("ac"), set("a")]
    # b has one edge only, at 8; a + b one, at 9; a + c one, at 17, too late for the horizon.
    family = naive.family(world, ALL)
    assert family == {("a",): (("e", 4), ("e", 9), ("e", 16), ("f", 2))}
    assert len(naive.family(replace(world, min_triggers=1), ALL)) == 3
    assert naive.candidates(world, ALL) == [("a",)]
    # Followed: e on 5 to 8, 15, 16 and f on 1, 2, of sessions 1 to 16 each.
    assert naive.base_rate(world, ALL, (0, 19), ("a",)) == (6 + 2) / 32


# --- margins --------------------------------------------------------------------------------


def random_table(seed: int, n_e: int, n_t: int, n_groups: int) -> tuple[np.ndarray, ...]:
    """Open cells, Z and peer codes; entities may change group half way."""
    rng = np.random.default_rng(seed)
    is_open = rng.random((n_e, n_t)) < 0.85
    z = is_open & (rng.random((n_e, n_t)) < 0.4)
    peer = np.repeat(rng.integers(0, n_groups, n_e)[:, None], n_t, axis=1)
    movers = rng.random(n_e) < 0.3
    peer[movers, n_t // 2 :] = 0
    return is_open, z, peer


@pytest.mark.parametrize("seed", range(6))
def test_margins_are_held(seed):
    """Expected row and column sums equal the observed ones, sure lines included."""
    is_open, z, peer = random_table(seed, 9, 25, 2)
    z[3] = False
    z[4] = is_open[4]
    q = naive.fit_margins(is_open, z, peer)
    assert (np.isnan(q) == ~is_open).all()
    assert (q[3][is_open[3]] == 0).all()
    assert (q[4][is_open[4]] == 1).all()
    assert np.nanmean((q > 0) & (q < 1)) > 0.1
    q = np.nan_to_num(q)
    np.testing.assert_allclose(q.sum(1), z.sum(1), atol=1e-10)
    for group in range(2):
        mine = peer == group
        np.testing.assert_allclose((q * mine).sum(0), (z & mine).sum(0), atol=1e-10)


def mixed_table() -> tuple[np.ndarray, ...]:
    """A table in which nothing is sure, so that every estimate is finite."""
    for seed in range(100):
        is_open, z, peer = random_table(seed, 10, 14, 1)
        if (naive.peel(is_open, z) == is_open).all() and not naive.forced_cells(is_open, z).any():
            return is_open, z, peer
    raise AssertionError("no such table among the seeds")


def test_margins_against_a_general_optimiser():
    """Minus the log likelihood of the Rasch model, minimised by scipy's BFGS."""
    is_open, z, peer = mixed_table()
    e, t = np.nonzero(is_open)
    y = z[e, t].astype(float)

    def loss(parameters: np.ndarray) -> tuple[float, np.ndarray]:
        logit = parameters[e] + parameters[10 + t]
        miss = 1 / (1 + np.exp(-logit)) - y
        slope = np.bincount(e, miss, 10).tolist() + np.bincount(t, miss, 14).tolist()
        return float((np.logaddexp(0, logit) - y * logit).sum()), np.array(slope)

    best = minimize(loss, np.zeros(24), jac=True, method="BFGS", options={"gtol": 1e-9}).x
    expected = 1 / (1 + np.exp(-(best[e] + best[10 + t])))
    np.testing.assert_allclose(naive.fit_margins(is_open, z, peer)[e, t], expected, atol=1e-7)


def test_margins_against_logistic_regression():
    """scikit-learn without penalty, dummies for entities and for (peer group, session)."""
    is_open, z, peer = mixed_table()
    peer = peer + (np.arange(10) >= 5)[:, None]  # two groups, columns of five
    free = naive.peel(np.hstack([is_open & (peer == 0), is_open & (peer == 1)]), np.hstack([z, z]))
    is_open = free[:, :14] | free[:, 14:]
    e, t = np.nonzero(is_open)
    line = peer[e, t] * 14 + t
    assert len(e) > 60
    assert len(set(line.tolist())) > 15
    dummies = np.zeros((len(e), 10 + 28))
    dummies[np.arange(len(e)), e] = 1
    dummies[np.arange(len(e)), 10 + line] = 1
    model = LogisticRegression(C=np.inf, fit_intercept=False, tol=1e-10, max_iter=20000)
    expected = model.fit(dummies, z[e, t]).predict_proba(dummies)[:, 1]
    found = naive.fit_margins(is_open, z, peer)[e, t]
    assert ((found > 0) & (found < 1)).all()
    np.testing.assert_allclose(found, expected, atol=2e-5)


# Rows 0-1 must fill columns 0-1 and rows 2-3 must leave columns 2-3 empty, yet no line is sure.
NEAR_STAIRS = np.array([[1, 1, 1, 0], [1, 1, 0, 1], [1, 0, 0, 0], [0, 1, 0, 0]], dtype=bool)


def test_forced_cells_by_every_table():
    """A cell is forced when all tables with the same margins agree on it (own enumeration)."""
    rng = np.random.default_rng(11)
    beyond_peeling = 0
    for trial in range(30):
        is_open = rng.random((4, 4)) < 0.85
        z = rng.random((4, 4)) < 0.5
        if trial % 2:
            z = NEAR_STAIRS[rng.permutation(4)][:, rng.permutation(4)]
        z = z & is_open
        where = np.argwhere(is_open)
        tables = np.array(list(product((False, True), repeat=len(where))))
        full = np.zeros((len(tables), 4, 4), dtype=bool)
        full[:, where[:, 0], where[:, 1]] = tables
        same = (full.sum(1) == z.sum(0)).all(1) & (full.sum(2) == z.sum(1)).all(1)
        agree = (full[same] == z).all(0) & is_open
        assert (naive.forced_cells(is_open, z) == agree).all()
        beyond_peeling += int((agree & naive.peel(is_open, z)).any())
    assert beyond_peeling >= 2


def test_an_estimate_at_infinity_takes_its_limit():
    """The forced cells are what they are, and the others a coin's toss."""
    is_open = np.ones((4, 4), dtype=bool)
    assert naive.peel(is_open, NEAR_STAIRS).all()
    q = naive.fit_margins(is_open, NEAR_STAIRS, np.zeros((4, 4), dtype=int))
    expected = np.full((4, 4), 0.5)
    expected[:2, :2], expected[2:, 2:] = 1, 0
    np.testing.assert_allclose(q, expected, atol=1e-12)


# --- exchanges, own timing, shuffle ---------------------------------------------------------


def test_exchanges_reach_every_table_of_the_margins():
    """90 square 0/1 tables of order 4 have all sums 2, and interchanges join them (Ryser 1957)."""
    table = np.array([[1, 1, 0, 0], [1, 1, 0, 0], [0, 0, 1, 1], [0, 0, 1, 1]])
    events = {(f"e{i}", "boom", 5 + 4 * j) for i, j in np.argwhere(table)}
    world = small_world(events=frozenset(events), known=("e0", "e1", "e2", "e3"))
    assert len(naive.exchange_orbit(world, ALL, (0, 19))) == 90
    # Two peer groups hold their own sums: e0, e1 cannot move, nor can e2, e3.
    peers = tuple((f"e{i}", None, None, "north" if i < 2 else "south") for i in range(4))
    assert len(naive.exchange_orbit(replace(world, peers=peers), ALL, (0, 19))) == 1
    # e0 is covered only while sessions 5 and 9 can be foreseen, so it keeps its events.
    coverage = (("e0", "", None, 8), ("e1", "", None, None))
    coverage += (("e2", "", None, None), ("e3", "", None, None))
    assert len(naive.exchange_orbit(replace(world, coverage=coverage), ALL, (0, 19))) == 15


def test_hits_over_the_orbit_follow_hoeffding_1951():
    """One event per entity: hits are a sum over a random permutation of C."""
    c = np.array([[3, 0, 1, 2], [1, 2, 0, 0], [0, 1, 4, 1], [2, 0, 1, 1]])
    names, sessions = [f"e{i}" for i in range(4)], [20, 40, 60, 80]
    world = small_world(
        n_sessions=200,
        discovery_end=99,
        holdout_start=150,
        known=tuple(names),
        lookback=1,
        horizon=8,
        rest=1,
        alerts=frozenset(
            (names[i], "a", sessions[j] - 8 + 2 * k)
            for i, j in product(range(4), range(4))
            for k in range(c[i, j])
        ),
        events=frozenset((names[i], "boom", sessions[i]) for i in range(4)),
    )
    cells = naive.eligible_triggers(world, ALL, (0, 99), ("a",))
    assert len(cells) == c.sum()
    orbit = naive.exchange_orbit(world, ALL, (0, 99))
    assert len(orbit) == 24
    hits = []
    for events in orbit:
        drawn = replace(world, events=frozenset((e, "boom", s) for e, s in events))
        hits.append(sum(naive.followed(drawn, "boom", cell) for cell in cells))
    assert (np.mean(hits), np.var(hits)) == pytest.approx((4.75, 5.6875))
    d = c - c.mean(0) - c.mean(1)[:, None] + c.mean()
    assert (c.sum() / 4, (d**2).sum() / 3) == pytest.approx((4.75, 5.6875))
    assert sum(h >= np.trace(c) for h in hits) == 2


def test_a_long_chain_visits_the_orbit_evenly():
    """Two groups, a change of group and a late start; chi-square over all states."""
    peers = (("a", None, 9, "n"), ("a", 10, None, "s"))
    peers += tuple((name, None, None, "n" if name in "bc" else "s") for name in "bcd")
    world = small_world(
        known=("a", "b", "c", "d"),
        horizon=2,
        events=logs("a", boom=[5, 14]) | logs("b", boom=[8, 13]) | logs("c", boom=[7, 8, 13])
        | logs("d", boom=[5, 17]),
        peers=peers,
        coverage=tuple((name, "", 6 if name == "b" else None, None) for name in "abcd"),
    )  # fmt: skip
    orbit = naive.exchange_orbit(world, ALL, (0, 19))
    rng = np.random.default_rng(0)
    events, visits, n = naive.events_in_reach(world, ALL, (0, 19)), Counter(), 3000
    for _ in range(n):
        events = naive.exchange_sweep(world, ALL, (0, 19), events, rng)
        visits[frozenset(events)] += 1
    assert 4 <= len(orbit) <= 60
    assert set(visits) == orbit
    even = n / len(orbit)
    statistic = sum((visits[state] - even) ** 2 / even for state in orbit)
    # Neighbouring sweeps are correlated, so three times the quantile is allowed.
    assert statistic < 3 * chi2.ppf(0.999, len(orbit) - 1)


def test_reach_and_slot_groups():
    """The group is asked at the last open cell that could have foreseen the session."""
    world = small_world(
        events=logs("e", boom=[1, 6, 12, 18, 22]) | logs("nobody", boom=[6]),
        coverage=(("e", "", None, 10), ("e", "", 17, None)),
        peers=(("e", None, 9, "n"), ("e", 10, None, "s")),
        known=("e",),
    )
    # 1: before the first full lookback; 18: reached from 17 only in vain, as 17 + 3 > 19.
    assert naive.events_in_reach(world, ALL, (0, 19)) == [("e", 6), ("e", 12)]
    groups = [naive.slot_group(world, ALL, (0, 19), "e", s) for s in (10, 11, 12, 13, 14)]
    assert groups == ["n", "s", "s", "s", None]


def test_own_timing_turns_the_eligible_life():
    """The two entities of the hundred turns (own enumeration) as a world."""
    a, y = ("1001000010", "0100010000"), ("1101000010", "0110001000")
    names = ("e", "f")
    world = small_world(
        lookback=1,
        horizon=1,
        rest=1,
        discovery_end=10,
        alerts=frozenset((names[i], "a", t) for i in (0, 1) for t in range(10) if a[i][t] == "1"),
        events=frozenset(
            (names[i], "boom", t + 1) for i in (0, 1) for t in range(10) if y[i][t] == "1"
        ),
    )
    assert naive.own_timing(world, ALL, (0, 10), ("a",)) == pytest.approx(0.08)
    none = replace(world, events=frozenset())
    assert naive.own_timing(none, ALL, (0, 10), ("a",)) == 1.0


def test_plain_shuffle_stays_in_the_life_and_finds_the_planted():
    """Alerts keep entity, type and segment; the p-value is that of a lone fair draw."""
    world = small_world(
        known=("e",),
        lookback=1,
        horizon=1,
        rest=1,
        alerts=logs("e", a=[4, 30]),
        events=logs("e", boom=[5]),
        coverage=(("e", "", 2, 11),),
    )
    rng = np.random.default_rng(4)
    drawn = [naive.shuffle_alerts(world, (0, 19), rng).alerts for _ in range(400)]
    assert all(len(alerts) == 1 for alerts in drawn)
    places = Counter(t for alerts in drawn for _, _, t in alerts)
    assert set(places) == set(range(2, 12))
    # One place of ten is a hit: the p-value is near 1/10.
    p = naive.shuffle_p(world, ALL, (0, 19), ("a",), 600, rng)
    assert p == pytest.approx(0.1, abs=0.04)
