"""Clusters, the e-process, the confidence sequence and e-BH against twins and printed values."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from miner.sequential.clusters import CAUTION, HANG_TOGETHER, Clusters, hang_together
from miner.sequential.ebh import e_bh, e_bh_adjusted
from miner.sequential.evidence import alternatives, e_process
from miner.sequential.interval import confidence_sequence
from tests.sequential import slow_twins as slow


def alone(n: int) -> Clusters:
    """Every trigger by itself, all in one quarter."""
    return Clusters(np.arange(n), np.arange(n), np.zeros(n, dtype=int))


def hits(n_hits: int, n: int) -> np.ndarray:
    return np.arange(n) < n_hits


# Beta(1/2, 1/2) mixtures in closed form (incomplete Beta functions), recomputed with scipy
PRINTED = [
    ("two-sided", 8, 10, 0.5, 1.675781),
    ("two-sided", 10, 20, 0.2, 15.282658),
    ("two-sided", 0, 20, 0.2, 10.874174),
    ("two-sided", 12, 40, 0.15, 2.234739),
    ("up", 10, 20, 0.2, 21.655853),
    ("up", 5, 20, 0.1, 1.368921),
    ("down", 0, 20, 0.2, 36.743415),
    ("down", 2, 40, 0.2, 17.820264),
]


@pytest.mark.parametrize(("direction", "n_hits", "n", "rate", "value"), PRINTED)
def test_singletons_give_the_printed_mixtures(direction, n_hits, n, rate, value) -> None:
    made = e_process(hits(n_hits, n), np.full(n, rate), alone(n), 1, direction, restart_quarters=0)
    assert made.e_q[0] == pytest.approx(value, abs=5.1e-7)
    assert made.log_e_c[-1] == made.log_e_q[-1]


@pytest.mark.parametrize("direction", ["up", "down"])
@pytest.mark.parametrize(
    ("n_hits", "n", "rate"), [(31, 300, 0.12), (3, 60, 0.01), (500, 2000, 0.3)]
)
def test_singletons_give_the_closed_form(direction, n_hits, n, rate) -> None:
    from scipy.special import betainc, betaln

    above = np.array([1.0, 0.0]) if direction == "up" else np.array([0.0, 1.0])
    share = [above @ [1 - betainc(a, b, rate), betainc(a, b, rate)]
             for a, b in ((n_hits + 0.5, n - n_hits + 0.5), (0.5, 0.5))]  # fmt: skip
    log_e = betaln(n_hits + 0.5, n - n_hits + 0.5) - betaln(0.5, 0.5) + np.log(share[0] / share[1])
    log_e -= n_hits * np.log(rate) + (n - n_hits) * np.log(1 - rate)
    made = e_process(hits(n_hits, n), np.full(n, rate), alone(n), 1, direction, restart_quarters=0)
    assert made.log_e_q[0] == pytest.approx(log_e, abs=1e-6)


# a trigger that is sure to miss or to hit does so: else there is no bound to the evidence
TRIGGER = st.tuples(st.booleans(), st.floats(0.02, 0.9)) | st.sampled_from(
    [(False, 0.0), (True, 1.0)]
)
CLUSTER = st.lists(TRIGGER, min_size=1, max_size=3)


@settings(max_examples=25, deadline=None)
@given(
    st.lists(st.lists(CLUSTER, max_size=3), min_size=1, max_size=6),
    st.sampled_from(["up", "down", "two-sided"]),
    st.floats(0.05, 0.6),
    st.integers(1, 3),
)  # fmt: skip
def test_process_agrees_with_integration(quarters, direction, reference, every) -> None:
    flat = [(q, g) for q, groups in enumerate(quarters) for g in groups]
    code = np.repeat(np.arange(len(flat)), [len(g) for _, g in flat])
    quarter_c = np.array([q for q, _ in flat], dtype=int)
    groups = Clusters(code, quarter_c, quarter_c)
    is_hit = np.array([hit for _, g in flat for hit, _ in g], dtype=bool)
    rate = np.array([p for _, g in flat for _, p in g], dtype=float)
    n = len(quarters)
    made = e_process(is_hit, rate, groups, n, direction, reference, every)
    want = slow.with_restarts(quarters, direction, reference, every)
    np.testing.assert_allclose(made.e_q, want, rtol=1e-7)
    short = e_process(is_hit, rate, groups, n, direction, reference, every, False)
    np.testing.assert_allclose(short.log_e_q, made.log_e_q, rtol=1e-12, atol=1e-13)
    assert short.log_e_c.size == 0
    assert made.log_e_c.size == len(flat)
    assert made.n_triggers_q[-1] == is_hit.size
    plain = e_process(is_hit, rate, groups, n, direction, reference, 0)
    np.testing.assert_allclose(plain.log_e_q, made.log_since_q, atol=1e-12)


def test_mean_over_all_outcomes_is_one_whatever_the_dependence_inside_a_cluster() -> None:
    rate = np.array([0.1, 0.3, 0.3, 0.0])
    groups = Clusters(np.array([0, 1, 1, 2]), np.arange(3), np.array([0, 1, 2]))
    # the two of the middle cluster always share their outcome
    total = 0.0
    for a in (False, True):
        for b in (False, True):
            chance = (0.1 if a else 0.9) * (0.3 if b else 0.7)
            made = e_process(np.array([a, b, b, False]), rate, groups, 3, "up", 0.2, 1)
            total += chance * made.e_q[-1]
    assert total == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("direction", "inside"), [("up", -1), ("down", 1)])
def test_mean_is_at_most_one_inside_a_composite_null(direction, inside) -> None:
    n, rate = 6, 0.3
    means = []
    for truth in (rate, rate + 0.1 * inside):
        total = 0.0
        for pattern in range(2**n):
            is_hit = np.array([pattern >> i & 1 for i in range(n)], dtype=bool)
            made = e_process(is_hit, np.full(n, rate), alone(n), 1, direction)
            total += np.prod(np.where(is_hit, truth, 1 - truth)) * made.e_q[0]
        means.append(total)
    assert means[0] == pytest.approx(1.0, abs=1e-12)
    assert means[1] < 0.95


def test_alternatives_lie_on_the_side_asked_for() -> None:
    for direction, low, high in (("up", 0.3, 1), ("down", 0, 0.3), ("two-sided", 0, 1)):
        node, weight = alternatives(0.3, direction)
        assert node.min() > low
        assert node.max() < high
        assert weight.sum() == pytest.approx(1.0)


def test_nothing_seen_is_no_evidence() -> None:
    none = np.zeros(0, dtype=int)
    last = np.array([62, 125])
    groups = hang_together(none, none, none, 5, last)
    made = e_process(none.astype(bool), none.astype(float), groups, 2, "down")
    assert made.log_e_q.tolist() == [0.0, 0.0]
    seen = confidence_sequence(none.astype(bool), groups, 2)
    assert seen.low_q.tolist() == [0.0, 0.0]
    assert seen.high_q.tolist() == [1.0, 1.0]
    assert np.isnan(seen.centre_q).all()


def test_restart_sees_a_late_decay_that_the_whole_history_hides() -> None:
    quarter = np.repeat(np.arange(16), 30)
    random = np.random.default_rng(3)
    is_hit = random.random(quarter.size) < np.where(quarter < 8, 0.5, 0.15)
    groups = Clusters(np.arange(quarter.size), quarter, quarter)
    made = e_process(is_hit, np.full(quarter.size, 0.4), groups, 16, "down", 0.4)
    assert made.log_since_q[12] < np.log(20) < made.log_e_q[12]
    assert made.best_restart_q[12] == 8
    assert made.best_restart_q[:4].tolist() == [-1] * 4


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 4), st.integers(0, 3), st.integers(0, 118)), max_size=40),
       st.integers(1, 8), st.sampled_from(["peers", "dates", "entity"]))  # fmt: skip
def test_clusters_agree_with_their_twin(triggers, horizon, how) -> None:
    last = np.array([30, 62, 126])
    entity, peer, session = (np.array([t[i] for t in triggers], dtype=int) for i in range(3))
    groups = hang_together(entity, session, peer, horizon, last, how)
    key = {"peers": peer, "entity": entity, "dates": np.zeros_like(peer)}[how]
    made = {frozenset(np.nonzero(groups.code_i == c)[0].tolist())
            for c in range(groups.closed_c.size)}  # fmt: skip
    assert made == set(slow.clusters(key.tolist(), session.tolist(), horizon))
    assert (np.diff(groups.closed_c) >= 0).all()
    for c, members in enumerate(sorted(made, key=lambda g: groups.code_i[min(g)])):
        first = session[list(members)].min()
        assert groups.closed_c[c] == first + 2 * horizon - 1
        assert session[list(members)].max() + horizon <= groups.closed_c[c]
    # the past does not change when more is seen
    early = session + horizon <= last[1]
    before = hang_together(entity[early], session[early], peer[early], horizon, last[:2], how)
    n_in = int((before.quarter_c < 2).sum())
    assert n_in == (groups.quarter_c < 2).sum()
    now = groups.code_i[early]
    np.testing.assert_array_equal(np.minimum(now, n_in), np.minimum(before.code_i, n_in))


def test_quarters_are_clusters_of_what_closed_in_them() -> None:
    session, none = np.array([3, 60, 70, 10]), np.zeros(4, dtype=int)
    groups = hang_together(none, session, none, 5, np.array([62, 125]), "quarter")
    assert groups.code_i.tolist() == [0, 1, 1, 0]
    assert groups.quarter_c.tolist() == [0, 1]


def test_clusters_refuse_what_is_not_closed_or_known() -> None:
    one = np.array([60])
    with pytest.raises(ValueError, match="closed by the last quarter's end"):
        hang_together(one, one, one, 5, np.array([62]))
    with pytest.raises(ValueError, match="must be one of peers, dates, entity, quarter"):
        hang_together(one, one, one, 1, np.array([62]), "weeks")  # type: ignore[arg-type]
    with pytest.raises(ValueError, match="ascend"):
        hang_together(one, one, one, 1, np.array([62, 62]))
    assert set(CAUTION) == set(HANG_TOGETHER)


# the same mixture inverted, recomputed with scipy
@pytest.mark.parametrize(
    ("n_hits", "n", "low", "high"),
    [
        (5, 20, 0.0473, 0.5889),
        (10, 50, 0.0634, 0.4142),
        (20, 100, 0.0910, 0.3516),
        (0, 20, 0, 0.2240),
    ],
)
def test_singletons_give_the_printed_intervals(n_hits, n, low, high) -> None:
    seen = confidence_sequence(hits(n_hits, n), alone(n), 1)
    assert seen.low_q[0] == pytest.approx(low, abs=5.1e-5)
    assert seen.high_q[0] == pytest.approx(high, abs=5.1e-5)


@settings(max_examples=25, deadline=None)
@given(st.lists(st.lists(st.booleans(), min_size=1, max_size=4), min_size=1, max_size=30),
       st.sampled_from([0.05, 0.2]))  # fmt: skip
def test_interval_ends_where_the_evidence_reaches_its_bar(shares, alpha) -> None:
    code = np.repeat(np.arange(len(shares)), [len(s) for s in shares])
    is_hit = np.array([hit for s in shares for hit in s])
    groups = Clusters(code, np.arange(len(shares)), np.zeros(len(shares), dtype=int))
    seen = confidence_sequence(is_hit, groups, 1, alpha)
    low, high, centre = seen.low_q[0], seen.high_q[0], seen.centre_q[0]
    assert low <= centre <= high
    assert centre == pytest.approx(np.mean([np.mean(s) for s in shares]))

    def at(p: float) -> float:
        made = e_process(is_hit, np.full(code.size, p), groups, 1, "two-sided", p, 0)
        return float(made.e_q[0])

    for end, is_open in ((low, low > 0), (high, high < 1)):
        if is_open:
            assert at(end) == pytest.approx(1 / alpha, rel=1e-5)
    assert (low == 0) == (not is_hit.any())
    assert (high == 1) == bool(is_hit.all())


def test_e_bh_on_the_worked_example() -> None:
    # Wang & Ramdas (2022): k* = max{k : e_(k) >= m / (k alpha)}; 25 is a tie with 10 / (4 x .1)
    e = np.array([60, 40, 25, 3, 0.5, 1.2, 0.1, 0, 2, 30])
    with np.errstate(divide="ignore"):
        log_e = np.log(e)
    assert np.nonzero(e_bh(log_e, 0.1))[0].tolist() == [0, 1, 2, 9]
    adjusted = e_bh_adjusted(log_e)
    assert adjusted[[0, 1, 2, 9]] == pytest.approx(0.1)
    assert adjusted[3] == pytest.approx(10 / (5 * 3))
    assert adjusted.max() == 1.0
    assert e_bh(np.empty(0)).size == 0


@settings(max_examples=50, deadline=None)
@given(st.lists(st.floats(-3, 8), min_size=1, max_size=12), st.sampled_from([0.05, 0.1]))
def test_e_bh_agrees_with_its_rule(log_e, alpha) -> None:
    e = np.exp(np.array(log_e))
    order = sorted(range(e.size), key=lambda i: -e[i])
    k = max((j for j in range(1, e.size + 1) if e[order[j - 1]] >= e.size / (j * alpha)), default=0)
    assert set(np.nonzero(e_bh(np.log(e), alpha))[0].tolist()) == set(order[:k])
