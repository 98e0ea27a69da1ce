"""The slow twin against published numbers: adjustments, intervals, itemsets and exact laws.

A twin that is compared with the program must itself be right; each value here stands beside its
source. Definitions on tiny worlds are checked in test_naive_worlds.py.
"""

from itertools import combinations, product
from math import comb, prod

import naive
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import binom, hypergeom, norm
from statsmodels.regression.linear_model import OLS
from statsmodels.stats.sandwich_covariance import cov_cluster_2groups

# Benjamini & Hochberg 1995, section 4: fifteen p-values of Neuhaus et al. 1992.
BH_1995 = [
    *(0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344),
    *(0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0),
]
# The p-values with which statsmodels checks itself against mt.rawp2adjp of R's multtest.
MULTTEST = [
    *(5.23656777208e-5, 2.8140506198e-4, 0.0149877310796, 0.0202732688798, 0.177096952723),
    *(0.642193923795, 0.680845947633, 0.71626938238, 0.838541367553, 0.967833824309),
]


@pytest.mark.parametrize(
    ("method", "first_nine", "n_rejected"),
    [
        # Recomputed from the definitions; the counts 4 and 3 are those of the paper's text.
        (
            naive.benjamini_hochberg,
            "0.0015 0.003 0.0095 0.035625 0.0603 0.063857 0.063857 0.0645 0.0765",
            4,
        ),
        (naive.holm, "0.0015 0.0056 0.0247 0.114 0.2211 0.278 0.278 0.278 0.3213", 3),
        (naive.hochberg, "0.0015 0.0056 0.0247 0.114 0.2211 0.2682 0.2682 0.2752 0.3213", 3),
        (
            naive.benjamini_yekutieli,
            "0.004977 0.009955 0.031523 0.118212 0.200089 0.211893 0.211893 0.214026 0.253845",
            3,
        ),
    ],
)
def test_adjustments_of_benjamini_and_hochberg_1995(method, first_nine, n_rejected):
    adjusted = method(BH_1995)
    expected = [float(v) for v in first_nine.split()]
    np.testing.assert_allclose(adjusted[:9], expected, atol=5e-7)
    assert sum(p <= 0.05 for p in adjusted) == n_rejected
    shuffled = np.random.default_rng(1).permutation(15)
    assert method([BH_1995[i] for i in shuffled]) == [adjusted[i] for i in shuffled]


@pytest.mark.parametrize(
    ("method", "first_four"),
    [
        (naive.holm, [5.23657e-4, 2.53264e-3, 0.119901849, 0.141912882]),
        (naive.hochberg, [5.23657e-4, 2.53264e-3, 0.119901849, 0.141912882]),
        (naive.benjamini_hochberg, [5.23657e-4, 1.40703e-3, 0.0499591036, 0.0506831722]),
        (naive.benjamini_yekutieli, [1.53377e-3, 4.12113e-3, 0.146328628, 0.148449402]),
    ],
)
def test_adjustments_of_multtest(method, first_four):
    """R multtest mt.rawp2adjp, as quoted in statsmodels' test_multi.py."""
    np.testing.assert_allclose(method(MULTTEST)[:4], first_four, rtol=5e-6)


def test_fifth_adjusted_values_of_multtest():
    """Same source: where Hochberg and Holm part, and where BH leaves the tie."""
    assert naive.hochberg(MULTTEST)[4] == pytest.approx(0.967833824, abs=1e-9)
    assert naive.benjamini_hochberg(MULTTEST)[4] == pytest.approx(0.354193905, abs=1e-9)


def test_padding_equals_a_longer_list():
    """A member of the family that was not proposed has p = 1."""
    assert naive.adjust_p([0.001, 0.01], 40, "bh") == pytest.approx([0.04, 0.2])
    c_40 = sum(1 / i for i in range(1, 41))
    assert naive.adjust_p([0.001, 0.01], 40, "by") == pytest.approx([0.04 * c_40, 0.2 * c_40])
    with pytest.raises(ValueError, match="family of 1"):
        naive.adjust_p([0.1, 0.2], 1, "bh")


def test_westfall_wolfinger_1997_by_every_table():
    """Am. Stat. 51:3-8, table 4; exact values from all 88,625 tables (own enumeration)."""
    placebo, active = [12, 3, 17, 9, 16], [1, 8, 12, 9, 24]
    totals = [a + b for a, b in zip(placebo, active, strict=True)]
    n, n_placebo = sum(totals), sum(placebo)

    def fisher(total: int) -> list[float]:
        pmf = hypergeom.pmf(np.arange(total + 1), n, total, n_placebo)
        return [pmf[pmf <= p * (1 + 1e-7)].sum() for p in pmf]

    p_of = [fisher(total) for total in totals]
    tables = np.array(list(product(*(range(total + 1) for total in totals[:4]))))
    last = n_placebo - tables.sum(1)
    tables = np.column_stack([tables, last])[(last >= 0) & (last <= totals[4])]
    assert len(tables) == 88625
    null = np.column_stack([np.array(p)[tables[:, i]] for i, p in enumerate(p_of)])
    ways = [np.array([comb(total, x) for x in range(total + 1)], float) for total in totals]
    weights = np.prod([w[tables[:, i]] for i, w in enumerate(ways)], axis=0)
    observed = [p[x] for p, x in zip(p_of, placebo, strict=True)]

    np.testing.assert_allclose(observed, [0.002041, 0.117872, 0.394460, 1, 0.079307], atol=6e-7)
    np.testing.assert_allclose(
        naive.single_step_min_p(observed, null, weights),
        [0.00652, 0.35523, 0.84964, 1, 0.26695],
        atol=6e-6,
    )
    step_down = naive.step_down_min_p(observed, null, weights)
    np.testing.assert_allclose(step_down, [0.00652, 0.24587, 0.57102, 1, 0.21484], atol=6e-6)
    # The Monte Carlo values printed by R's coin (1e5 draws).
    coin = [0.00689, 0.24334, 0.56908, 1, 0.21351]
    np.testing.assert_allclose(step_down, coin, atol=0.004)


# Terada et al. 2013, the authors' sample_item2.csv; the row O is reconstructed as all zeros.
LAMP_ROWS = {
    "A": "1110", "B": "1110", "C": "1001", "D": "0000", "E": "1110", "F": "1000", "G": "1111",
    "H": "0000", "I": "0101", "J": "0010", "K": "0001", "L": "0001", "M": "0001", "N": "1110",
    "O": "0000",
}  # fmt: skip


def test_westfall_young_on_the_lamp_sample():
    """All C(15, 7) labelings of the sample (own enumeration); raw p from the authors' tests."""
    rows = list(LAMP_ROWS.values())
    itemsets = naive.all_combinations("1234", 4)
    assert len(itemsets) == 15
    covers = [
        [i for i, row in enumerate(rows) if all(row[int(item) - 1] == "1" for item in itemset)]
        for itemset in itemsets
    ]
    has = np.array([[i in cover for i in range(15)] for cover in covers])

    def one_sided(labels: np.ndarray) -> np.ndarray:
        """Fisher's p for each itemset, by the number of positives it holds."""
        table = [hypergeom.sf(np.arange(n + 1) - 1, 15, n, 7) for n in range(16)]
        held = labels @ has.T
        return np.column_stack(
            [np.array(table[len(cover)])[held[:, c]] for c, cover in enumerate(covers)]
        )

    labelings = np.zeros((6435, 15), dtype=int)
    for r, chosen in enumerate(combinations(range(15), 7)):
        labelings[r, list(chosen)] = 1
    null = one_sided(labelings)
    seen = np.array([[name in "ABEGHMN" for name in LAMP_ROWS]], dtype=int)
    observed = one_sided(seen)[0].tolist()
    at = {itemset: c for c, itemset in enumerate(itemsets)}
    triple, tf1, tf2, tf3 = at["1", "2", "3"], at[("1",)], at[("2",)], at[("3",)]

    assert observed[triple] == pytest.approx(0.00699300699301, abs=1e-13)
    assert observed[tf2] == pytest.approx(0.034965034965, abs=1e-12)
    single = naive.single_step_min_p(observed, null, np.ones(6435))
    down = naive.step_down_min_p(observed, null, np.ones(6435))
    assert single[triple] == pytest.approx(54 / 6435, abs=1e-12)
    assert single[tf2] == pytest.approx(620 / 6435, abs=1e-12)
    assert single[tf3] == single[tf2]
    assert single[tf1] == pytest.approx(0.1787102, abs=5e-8)
    assert down[tf1] == pytest.approx(0.1351981, abs=5e-8)


def test_min_p_of_draws_counts_the_observed_world():
    """(1 + exceedances) / (1 + draws), ties counted: Phipson & Smyth 2010."""
    null = np.array([[0.5, 0.01], [0.02, 0.9], [0.3, 0.4]])
    assert naive.single_step_min_p([0.02, 0.5], null) == [0.75, 1.0]
    assert naive.step_down_min_p([0.02, 0.5], null) == [0.75, 0.75]


@pytest.mark.parametrize(
    ("x", "n", "wilson", "clopper_pearson"),
    [
        (81, 263, (0.2553, 0.3662), (0.2527, 0.3676)),
        (15, 148, (0.0624, 0.1605), (0.0578, 0.1617)),
        (0, 20, (0.0000, 0.1611), (0.0000, 0.1684)),
        (1, 29, (0.0061, 0.1718), (0.0009, 0.1776)),
    ],
)
def test_intervals_of_newcombe_1998(x, n, wilson, clopper_pearson):
    """Stat. Med. 17:857-872, table I, methods 3 and 5."""
    np.testing.assert_allclose(naive.wilson(x / n, n), wilson, atol=5.1e-5)
    np.testing.assert_allclose(naive.clopper_pearson(x, n), clopper_pearson, atol=5.1e-5)


# Rao & Scott 1992, table 1 (Weil's rats): (pups alive, pups born) per litter.
CONTROL = [
    *((13, 13), (12, 12), (9, 9), (9, 9), (8, 8), (8, 8), (12, 13), (11, 12)),
    *((9, 10), (9, 10), (8, 9), (11, 13), (4, 5), (5, 7), (7, 10), (7, 10)),
]
TREATED = [
    *((12, 12), (11, 11), (10, 10), (9, 9), (10, 11), (9, 10), (9, 10), (8, 9)),
    *((8, 9), (4, 5), (7, 9), (4, 7), (5, 10), (3, 6), (3, 10), (0, 7)),
]


@pytest.mark.parametrize(
    ("litters", "total", "deff", "n_effective", "korn_graubard"),
    [
        (CONTROL, (142, 158), 1.232495, 128.195, (0.8330, 0.9450)),
        (TREATED, (112, 145), 3.952861, 36.682, (0.6044, 0.8941)),
    ],
)
def test_design_effect_of_rao_and_scott_1992(litters, total, deff, n_effective, korn_graubard):
    """Biometrics 48:577-585; interval of Korn & Graubard 1998 on the effective n, recomputed."""
    y = [int(i < x) for x, n in litters for i in range(n)]
    litter_of = [litter for litter, (_, n) in enumerate(litters) for _ in range(n)]
    assert (sum(y), len(y)) == total
    p, n = sum(y) / len(y), len(y)
    found = naive.cluster_variance(y, litter_of) / (p * (1 - p) / n)
    assert found == pytest.approx(deff, abs=5e-7)
    assert n / found == pytest.approx(n_effective, abs=5e-4)
    interval = naive.clopper_pearson(p * n / found, n / found)
    np.testing.assert_allclose(interval, korn_graubard, atol=5.1e-5)


def test_two_way_interval_is_that_of_its_parts():
    """Cluster variances against statsmodels; then Cameron, Gelbach & Miller 2011 and Wilson."""
    rng = np.random.default_rng(5)
    n, horizon = 160, 4
    entity, session = rng.integers(0, 25, n), rng.integers(0, 120, n)
    shift = rng.normal(0, 1.2, 25)[entity] + rng.normal(0, 1.2, 30)[session // horizon]
    y = (rng.random(n) < 1 / (1 + np.exp(1 - shift))).astype(int)
    block = session // horizon
    cells = [(f"e{e}", int(s)) for e, s in zip(entity, session, strict=True)]

    fit = OLS(y, np.ones(n)).fit()
    two_way, by_entity, by_block = (
        float(v[0, 0]) for v in cov_cluster_2groups(fit, entity, group2=block)
    )
    assert naive.cluster_variance(y, entity) == pytest.approx(by_entity, rel=1e-9)
    assert naive.cluster_variance(y, block) == pytest.approx(by_block, rel=1e-9)

    p = y.mean()
    deff = max(two_way, by_entity, by_block) * n / (p * (1 - p))
    assert deff > 1.2  # the fixture has clusters that matter
    low, high, few = naive.precision_interval(cells, y.tolist(), horizon)
    t_24 = 2.0638985616  # the .975 quantile of t with 24 degrees of freedom
    assert len(set(entity)) == 25
    assert not few
    assert (low, high) == pytest.approx(naive.wilson(p, n / deff, t_24), rel=1e-9)
    assert low < naive.wilson(p, n)[0]
    assert high > naive.wilson(p, n)[1]


def test_interval_with_few_clusters_or_no_hits():
    """Clopper-Pearson on distinct entity-block cells, and the word of warning."""
    cells = [("a", 0), ("a", 1), ("a", 9), ("b", 0)]  # blocks of 4: a0 a0 a2 b0
    low, high, few = naive.precision_interval(cells, [1, 0, 0, 1], 4)
    assert few
    assert (low, high) == naive.clopper_pearson(1.5, 3)
    many = [(f"e{i}", 10 * i) for i in range(12)]
    assert naive.precision_interval(many, [0] * 12, 5) == (*naive.clopper_pearson(0, 12), False)
    assert naive.precision_interval(many, [1] * 12, 5) == (*naive.clopper_pearson(12, 12), False)
    assert np.isnan(naive.precision_interval([], [], 5)[0])


HAN_KAMBER_PEI = ["125", "24", "23", "124", "13", "23", "13", "1235", "123"]
AGRAWAL_SRIKANT = ["134", "235", "1235", "25"]
ZAKI_MEIRA = ["ABDE", "BCE", "ABDE", "ABCE", "ABCDE", "BCD"]
HAN_PEI_YIN = ["facdgimp", "abcflmo", "bfhjo", "bcksp", "afcelpmn"]


@pytest.mark.parametrize(
    ("transactions", "min_count", "n_sets", "some"),
    [
        # Han, Kamber & Pei, 3rd ed., table 6.1.
        (HAN_KAMBER_PEI, 2, 13, {"1": 6, "2": 7, "12": 4, "15": 2, "123": 2, "125": 2}),
        # Agrawal & Srikant 1994, figure 3.
        (AGRAWAL_SRIKANT, 2, 9, {"1": 2, "13": 2, "25": 3, "35": 2, "235": 2}),
        # Zaki & Meira 2014, figure 8.1.
        (ZAKI_MEIRA, 3, 19, {"B": 6, "BE": 5, "ABE": 4, "BCE": 3, "ABDE": 3}),
        # Han, Pei & Yin 2000, table 1.
        (HAN_PEI_YIN, 3, 18, {"cp": 3, "b": 3, "acfm": 3}),
    ],
)
def test_textbook_itemsets(transactions, min_count, n_sets, some):
    found = naive.frequent_itemsets(transactions, min_count, 5)
    assert len(found) == n_sets
    assert {"".join(itemset): count for itemset, count in found.items()}.items() >= some.items()


def test_five_baskets():
    """Tan, Steinbach & Kumar, chapter 6; bread, milk and diapers are together twice, not thrice."""
    baskets = [
        {"bread", "milk"},
        {"bread", "diapers", "beer", "eggs"},
        {"milk", "diapers", "beer", "cola"},
        {"bread", "milk", "diapers", "beer"},
        {"bread", "milk", "diapers", "cola"},
    ]
    assert len(naive.frequent_itemsets(baskets, 3, 4)) == 8
    twice = naive.frequent_itemsets(baskets, 2, 4)
    assert len(twice) == 17
    assert twice["bread", "diapers", "milk"] == 2


def test_poisson_binomial():
    """scipy's own test values, from R's poisbinom; the small one by hand."""
    chances = [0.9480654803913988, 0.052428488100509374, 0.25863527358887417, 0.057764076043633206]
    pmf = [0.0343763443678060, 0.6435428452689714, 0.2936345519235537, 0.0277036647503902]
    pmf.append(0.0007425936892786)
    assert naive.poisson_binomial_pmf(chances) == pytest.approx(pmf, abs=1e-13)
    assert naive.poisson_binomial_by_enumeration(chances) == pytest.approx(pmf, abs=1e-13)
    by_hand = [0.504, 0.398, 0.092, 0.006]
    assert naive.poisson_binomial_pmf([0.1, 0.2, 0.3]) == pytest.approx(by_hand)
    assert naive.poisson_binomial_tail([0.1, 0.2, 0.3], 2) == pytest.approx(0.098)
    assert naive.poisson_binomial_tail([0.0, 0.2], 0) == 1.0
    assert naive.poisson_binomial_tail([0.0, 0.2], 2) == 0.0


def test_tilt_multiplies_the_odds():
    assert naive.tilt(0.2, np.log(6)) == pytest.approx(0.6)  # odds 1:4 become 6:4
    assert (naive.tilt(0.0, 3.0), naive.tilt(1.0, -3.0)) == (0.0, 1.0)
    theta = naive.solve_tilt([0.1, 0.4, 0.7], 2.0)
    assert sum(naive.tilt(q, theta) for q in (0.1, 0.4, 0.7)) == pytest.approx(2.0, abs=1e-11)
    with pytest.raises(ValueError, match="adds up to 3"):
        naive.solve_tilt([0.1, 0.4, 0.7], 3.0)


def test_own_timing_by_every_turn():
    """Two entities over ten sessions, all 100 pairs of shifts (own enumeration)."""
    a1, y1 = "1001000010", "1101000010"
    a2, y2 = "0100010000", "0110001000"
    circles = [
        ([i for i, c in enumerate(a) if c == "1"], [int(c) for c in y])
        for a, y in ((a1, y1), (a2, y2))
    ]
    h1 = [sum(y1[(i + s) % 10] == "1" for i in circles[0][0]) for s in range(10)]
    assert sorted(h1) == sorted([3, 1, 1, 2, 0, 2, 0, 1, 2, 0])
    pmf = naive.own_timing_pmf(circles)
    assert pmf == pytest.approx([0.15, 0.27, 0.30, 0.20, 0.07, 0.01])
    mean = sum(k * p for k, p in enumerate(pmf))
    assert mean == pytest.approx(3 * 4 / 10 + 2 * 3 / 10)  # triggers x share of Z, each entity


def test_sharper_integrates_the_uncertainty():
    """Gauss-Hermite against adaptive quadrature of the same mixture."""
    rng = np.random.default_rng(2)
    smaller = [("a", 10 * i) for i in range(20)]
    larger = [("b", 10 * i) for i in range(8)] + smaller[15:]
    q = {cell: float(rng.uniform(0.05, 0.3)) for cell in smaller + larger}
    hits = {cell for cell in smaller[:15] if rng.random() < 0.4} | set(larger[:7])
    apart = smaller[:15]
    n_hits = len(hits & set(apart))
    assert 2 <= n_hits <= 12
    theta = naive.solve_tilt([q[c] for c in apart], n_hits)
    tilted = [naive.tilt(q[c], theta) for c in apart]
    sd = sum(t * (1 - t) for t in tilted) ** -0.5

    def integrand(x: float) -> float:
        chances = [naive.tilt(q[c], x) for c in larger]
        tail = naive.poisson_binomial_tail(chances, len(hits & set(larger)))
        return tail * float(norm.pdf(x, theta, sd))

    expected = quad(integrand, theta - 9 * sd, theta + 9 * sd, epsabs=1e-12)[0]
    found = naive.sharper_p(smaller, larger, q, hits, 4)
    assert 1e-4 < expected < 0.5
    assert found == pytest.approx(expected, rel=1e-5)
    assert naive.sharper_p(smaller[15:], larger, q, hits, 4) == 1.0  # nothing stands apart


@pytest.mark.parametrize(
    ("n", "times_base", "power"),
    [(20, 3, 0.17), (20, 5, 0.59), (40, 3, 0.39), (40, 5, 0.90), (80, 3, 0.78), (80, 5, 1.00)],
)
def test_power_is_the_exact_binomial_one(n, times_base, power):
    """Base 5 %, five rules at .05 in all; binomial tails by scipy, to two digits by hand."""
    halfway = 0.05 * times_base
    found = naive.holdout_power([0.05] * n, 0.01, 2 * halfway - 0.05)
    needed = next(x for x in range(n + 1) if binom.sf(x - 1, n, 0.05) <= 0.01)
    assert found == pytest.approx(binom.sf(needed - 1, n, halfway), abs=1e-10)
    assert found == pytest.approx(power, abs=0.006)


def test_power_at_the_edges():
    assert naive.holdout_power([], 0.05, 0.9) == 0.0
    assert naive.holdout_power([0.5, 0.5], 0.05, 0.5) == 0.0  # nothing above expectation to find
    assert naive.holdout_power([0.5, 0.5], 0.05, 1.0) == 0.0  # two of two has p = 1/4
    assert naive.holdout_power([0.0] * 9 + [0.01], 0.05, 1.0) == 1.0  # asks for all that can be
    assert naive.holdout_power([0.01], 0.05, 1.0) == pytest.approx((0.01 + 1) / 2)


def test_enumeration_and_recursion_agree():
    rng = np.random.default_rng(3)
    for n in range(7):
        chances = rng.random(n).tolist()
        pmf = naive.poisson_binomial_pmf(chances)
        assert pmf == pytest.approx(naive.poisson_binomial_by_enumeration(chances), abs=1e-14)
        assert pmf[0] == pytest.approx(prod(1 - q for q in chances))
