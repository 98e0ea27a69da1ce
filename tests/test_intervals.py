"""Intervals of precisions against published tables, clustered data and the slow twin."""

import naive
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import norm
from statsmodels.stats.proportion import proportion_confint

from miner.intervals import clopper_pearson, effective_size, precision_intervals, wilson
from miner.kernels.hits import cluster_sums
from miner.triggers import TriggerTable

Z = norm.ppf(0.975)


@pytest.mark.parametrize(
    ("x", "n", "by_wilson", "by_clopper_pearson"),
    [
        (81, 263, (0.2553, 0.3662), (0.2527, 0.3676)),
        (15, 148, (0.0624, 0.1605), (0.0578, 0.1617)),
        (0, 20, (0.0000, 0.1611), (0.0000, 0.1684)),
        (1, 29, (0.0061, 0.1718), (0.0009, 0.1776)),
    ],
)
def test_newcombe_1998(x, n, by_wilson, by_clopper_pearson):
    """Statistics in Medicine 17:857-872, table I, methods 3 and 5."""
    found = wilson(np.array([x / n]), np.array([n]), Z)
    np.testing.assert_allclose(np.ravel(found), by_wilson, atol=5.1e-5)
    found = clopper_pearson(np.array([x]), np.array([n]))
    np.testing.assert_allclose(np.ravel(found), by_clopper_pearson, atol=5.1e-5)


@given(st.integers(0, 400), st.integers(1, 400))
def test_the_same_as_statsmodels(x, n):
    x = min(x, n)
    for found, method in (
        (wilson(np.array([x / n]), np.array([float(n)]), Z), "wilson"),
        (clopper_pearson(np.array([x]), np.array([n])), "beta"),
    ):
        expected = proportion_confint(x, n, method=method)
        np.testing.assert_allclose(np.ravel(found), expected, atol=1e-9)


# Rao & Scott 1992, table 1: (survivors, litter size) by litter, of Weil 1970.
CONTROL = [(13, 13), (12, 12), (9, 9), (9, 9), (8, 8), (8, 8), (12, 13), (11, 12), (9, 10), (9, 10),
           (8, 9), (11, 13), (4, 5), (5, 7), (7, 10), (7, 10)]  # fmt: skip
TREATED = [(12, 12), (11, 11), (10, 10), (9, 9), (10, 11), (9, 10), (9, 10), (8, 9), (8, 9), (4, 5),
           (7, 9), (4, 7), (5, 10), (3, 6), (3, 10), (0, 7)]  # fmt: skip


def as_table(entity: np.ndarray, session: np.ndarray) -> TriggerTable:
    """One combination's triggers, sorted as the program keeps them."""
    return TriggerTable(
        ((0,),), np.array([0, entity.size]), entity.astype(np.int32), session.astype(np.int32)
    )


@pytest.mark.parametrize(
    ("litters", "effect", "n_effective", "korn_graubard"),
    [
        (CONTROL, 1.232495, 128.195, (0.8330, 0.9450)),
        (TREATED, 3.952861, 36.682, (0.6044, 0.8941)),
    ],
)
def test_rao_and_scott_1992(litters, effect, n_effective, korn_graubard):
    """Litters as entities, every pup on a date of its own: two-way is one-way, by litter."""
    entity = np.repeat(np.arange(16), [n for _, n in litters])
    is_hit = np.concatenate([np.arange(n) < x for x, n in litters])
    n = entity.size
    found = precision_intervals(
        as_table(entity, np.arange(n)), np.array([0]), is_hit, horizon=1, n_sessions=n
    )
    assert found.n_effective[0] == pytest.approx(n_effective, abs=6e-4)
    assert n / found.n_effective[0] == pytest.approx(effect, abs=6e-7)
    assert (found.n_clusters[0], found.is_few[0]) == (16, False)
    effective = found.n_effective
    interval = clopper_pearson(is_hit.mean() * effective, effective)
    np.testing.assert_allclose(np.ravel(interval), korn_graubard, atol=6e-5)


@given(st.integers(0, 2**32 - 1), st.sampled_from([3, 9, 10, 25]))
def test_two_way_intervals_are_the_twins(seed, n_entities):
    """With hits that go together by entity and by date; no, all and few hits included."""
    rng = np.random.default_rng(seed)
    horizon, n_sessions = int(rng.integers(1, 7)), 100
    entity, session = np.nonzero(rng.random((n_entities, n_sessions)) < rng.choice([0.02, 0.2]))
    if entity.size == 0:
        entity = session = np.array([1])
    logit = rng.normal(rng.choice([-9, -1, 9]), 1, n_entities)[entity]
    logit += rng.normal(0, 1, n_sessions)[session // 5]
    is_hit = rng.random(entity.size) < 1 / (1 + np.exp(-logit))
    found = precision_intervals(
        as_table(entity, session), np.array([0]), is_hit, horizon, n_sessions
    )
    cells = [(f"e{e}", int(t)) for e, t in zip(entity, session, strict=True)]
    low, high, is_few = naive.precision_interval(cells, is_hit.astype(int).tolist(), horizon)
    assert (found.low[0], found.high[0]) == pytest.approx((low, high), rel=1e-9, abs=1e-12)
    assert found.is_few[0] == is_few
    assert found.n_effective[0] <= entity.size


def test_the_design_effect_is_at_least_one_and_either_ways():
    """Hits spread more evenly than chance over entities and dates do not narrow the interval."""
    entity, session = np.divmod(np.arange(400), 20)
    is_hit = (entity + session) % 2 == 0  # half of every entity's and of every date's
    sums = cluster_sums(np.array([0]), np.array([0, 400]), entity, session, is_hit, 1, 20)
    n = effective_size(np.array([400.0]), np.array([0.5]), sums[:3], sums[3:])
    assert n.tolist() == [400.0]
    is_hit = entity < 10  # an entity's all or nothing: 20 observations, not 400
    sums = cluster_sums(np.array([0]), np.array([0, 400]), entity, session, is_hit, 1, 20)
    n = effective_size(np.array([400.0]), np.array([0.5]), sums[:3], sums[3:])
    assert n[0] == pytest.approx(19.0)


def test_no_triggers_have_no_interval():
    table = as_table(np.empty(0), np.empty(0))
    found = precision_intervals(table, np.array([0]), np.empty(0, dtype=bool), 5, 50)
    assert np.isnan(found.low[0])
    assert np.isnan(found.high[0])
    assert (found.n_effective[0], found.is_few[0]) == (0, True)
