"""Adjustments for many tests against published numbers and other people's programs."""

from itertools import combinations

import naive
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import false_discovery_control, hypergeom
from statsmodels.stats.multitest import multipletests

from miner.adjust import benjamini_hochberg, benjamini_yekutieli, holm, step_down_min_p
from miner.discovery import Adjuster

# Benjamini & Hochberg 1995, section 4: fifteen p-values of Neuhaus et al. 1992.
BH_1995 = np.array(
    [0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344,
     0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0]
)  # fmt: skip
# The p-values with which statsmodels checks itself against mt.rawp2adjp of R's multtest.
MULTTEST = np.array(
    [5.23656777208e-5, 2.8140506198e-4, 0.0149877310796, 0.0202732688798, 0.177096952723,
     0.642193923795, 0.680845947633, 0.71626938238, 0.838541367553, 0.967833824309]
)  # fmt: skip
seeds = st.integers(0, 2**32 - 1)


def some_p(seed: int) -> np.ndarray:
    """Up to thirty p-values, some tiny, some tied, some 0 or 1."""
    rng = np.random.default_rng(seed)
    p = rng.random(int(rng.integers(1, 30))) ** rng.choice([1, 3, 30])
    return rng.choice([*p, 0.0, 0.05, 1.0], p.size)


def bh(p):
    return benjamini_hochberg(p, p.size)


def by(p):
    return benjamini_yekutieli(p, p.size)


@pytest.mark.parametrize(
    ("method", "first_nine", "n_rejected"),
    [
        (bh, "0.0015 0.003 0.0095 0.035625 0.0603 0.063857 0.063857 0.0645 0.0765", 4),
        (by, "0.004977 0.009955 0.031523 0.118212 0.200089 0.211893 0.211893 0.214026 0.253845", 3),
        (holm, "0.0015 0.0056 0.0247 0.114 0.2211 0.278 0.278 0.278 0.3213", 3),
    ],
)
def test_benjamini_and_hochberg_1995(method, first_nine, n_rejected):
    """Rejections of BH are those of the paper's text; adjusted values recomputed."""
    adjusted = method(BH_1995)
    np.testing.assert_allclose(adjusted[:9], [float(v) for v in first_nine.split()], atol=5e-7)
    assert (adjusted <= 0.05).sum() == n_rejected
    order = np.random.default_rng(1).permutation(15)
    assert (method(BH_1995[order]) == adjusted[order]).all()


@pytest.mark.parametrize(
    ("method", "first"),
    [
        (bh, [5.23657e-4, 1.40703e-3, 0.0499591036, 0.0506831722, 0.354193905]),
        (by, [1.53377e-3, 4.12113e-3, 0.146328628, 0.148449402]),
        (holm, [5.23657e-4, 2.53264e-3, 0.119901849, 0.141912882]),
    ],
)
def test_values_of_multtest(method, first):
    """R multtest mt.rawp2adjp, as quoted in statsmodels' test_multi.py."""
    np.testing.assert_allclose(method(MULTTEST)[: len(first)], first, rtol=5e-6)


@given(seeds)
def test_the_same_as_scipy_and_the_twin(seed):
    p = some_p(seed)
    close = {"rtol": 1e-12, "atol": 1e-300}
    np.testing.assert_allclose(bh(p), false_discovery_control(p, method="bh"), **close)
    np.testing.assert_allclose(by(p), false_discovery_control(p, method="by"), **close)
    np.testing.assert_allclose(holm(p), naive.holm(p.tolist()), **close)


@pytest.mark.parametrize(("method", "named"), [(bh, "fdr_bh"), (by, "fdr_by"), (holm, "holm")])
def test_the_same_as_statsmodels(method, named):
    for seed in range(5):
        p = some_p(seed)
        expected = multipletests(p, method=named)[1]
        np.testing.assert_allclose(method(p), expected, rtol=1e-12, atol=1e-300)


@given(seeds, st.integers(0, 40))
def test_a_larger_family_is_filled_with_ones(seed, n_more):
    p = some_p(seed)
    padded = np.concatenate([p, np.ones(n_more)])
    for method in (benjamini_hochberg, benjamini_yekutieli):
        whole = method(padded, padded.size)
        np.testing.assert_allclose(method(p, padded.size), whole[: p.size], rtol=1e-12)


def test_step_down_min_p_of_westfall_and_wolfinger_1997():
    """Am. Stat. 51:3-8, table 4: drawn tables; exact values from all 88,625 (own enumeration)."""
    placebo, active = np.array([12, 3, 17, 9, 16]), np.array([1, 8, 12, 9, 24])
    total = placebo + active
    n, n_placebo, n_draws = int(total.sum()), int(placebo.sum()), 100_000

    def fisher(of: int) -> np.ndarray:
        pmf = hypergeom.pmf(np.arange(of + 1), n, of, n_placebo)
        return np.array([pmf[pmf <= p * (1 + 1e-7)].sum() for p in pmf])

    drawn = np.random.default_rng(5).multivariate_hypergeometric(total, n_placebo, n_draws)
    null_cr = np.array([fisher(of)[drawn[:, i]] for i, of in enumerate(total)])
    observed = np.array([fisher(of)[placebo[i]] for i, of in enumerate(total)])
    np.testing.assert_allclose(observed, [0.002041, 0.117872, 0.394460, 1, 0.079307], atol=6e-7)
    exact = np.array([0.00652, 0.24587, 0.57102, 1, 0.21484])
    error = 4 * np.sqrt(exact * (1 - exact) / n_draws) + 1e-5
    assert (np.abs(step_down_min_p(observed, null_cr, 1e-9) - exact) <= error).all()


# Terada et al. 2013, the authors' sample_item2.csv; the row O is reconstructed as all zeros.
LAMP_ROWS = {
    "A": "1110", "B": "1110", "C": "1001", "D": "0000", "E": "1110", "F": "1000", "G": "1111",
    "H": "0000", "I": "0101", "J": "0010", "K": "0001", "L": "0001", "M": "0001", "N": "1110",
    "O": "0000",
}  # fmt: skip


def test_step_down_min_p_of_the_lamp_sample_is_exact():
    """All C(15, 7) labelings but the observed one as draws: that is the 1 of (1 + n)."""
    holds = np.array([[bit == "1" for bit in row] for row in LAMP_ROWS.values()])
    itemsets = [c for size in range(1, 5) for c in combinations(range(4), size)]
    has_ci = np.array([holds[:, list(c)].all(axis=1) for c in itemsets])
    seen = frozenset(i for i, name in enumerate(LAMP_ROWS) if name in "ABEGHMN")

    def one_sided(positives: frozenset[int]) -> np.ndarray:
        held = has_ci[:, sorted(positives)].sum(axis=1)
        return hypergeom.sf(held - 1, 15, has_ci.sum(axis=1), 7)

    others = [frozenset(c) for c in combinations(range(15), 7) if frozenset(c) != seen]
    assert len(others) == 6434
    held_cr = np.array([has_ci[:, sorted(c)].sum(axis=1) for c in others]).T
    null_cr = hypergeom.sf(held_cr - 1, 15, has_ci.sum(axis=1)[:, None], 7)
    observed = one_sided(seen)
    at = {itemset: i for i, itemset in enumerate(itemsets)}
    assert observed[at[0, 1, 2]] == pytest.approx(0.00699300699301, abs=1e-13)
    assert observed[at[1,]] == observed[at[2,]] == pytest.approx(0.034965034965, abs=1e-12)
    adjusted = step_down_min_p(observed, null_cr, 1e-12)
    assert adjusted[at[0, 1, 2]] == pytest.approx(54 / 6435, abs=1e-12)
    assert adjusted[at[0,]] == pytest.approx(0.1351981, abs=5e-8)
    order = np.argsort(observed)
    assert (np.diff(adjusted[order]) >= 0).all()
    # any increasing function of the p-values gives the same
    assert (step_down_min_p(np.log(observed), np.log(null_cr), 1e-9) == adjusted).all()


class Sized:
    """As much of a judged case as an adjustment asks for."""

    def __init__(self, size):
        self.size = size


def test_one_adjustment_spans_all_cases_and_the_unproposed():
    found = [Sized(3), Sized(0), Sized(4)]
    p = [np.array([0.01, 1.0, 0.3]), np.empty(0), np.array([0.002, 0.04, 1.0, 1.0])]
    null_cr = [np.log(np.full((f.size, 9), 0.5, dtype=np.float32)) for f in found]
    adjuster = Adjuster(found, "bh", null_cr)
    assert adjuster.family == 7
    parts = adjuster.adjusted(p)
    assert [part.size for part in parts] == [3, 0, 4]
    np.testing.assert_allclose(
        np.concatenate(parts), false_discovery_control(np.concatenate(p), method="bh")
    )
    by_parts = np.concatenate(adjuster.adjusted(p, "by"))
    np.testing.assert_allclose(
        by_parts, false_discovery_control(np.concatenate(p), method="by"), rtol=1e-12
    )
    drawn = np.concatenate(adjuster.adjusted(p, "westfall-young"))
    assert (drawn[[0, 2, 3, 4]] == 0.1).all()  # no draw is below .5, of nine
    assert (drawn[[1, 5, 6]] == 1.0).all()
    with pytest.raises(ValueError, match="needs draws"):
        Adjuster(found, "westfall-young").adjusted(p)
