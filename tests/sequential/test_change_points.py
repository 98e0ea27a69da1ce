"""Change points of weekly counts: what they find, when they keep still, and their level."""

from __future__ import annotations

import numpy as np
import pytest

from miner.sequential.change import change_points
from tests.calibration.weekly_counts import SERIES, draw

WEEKS = np.ones(104)


def test_an_abrupt_halving_is_dated_and_measured() -> None:
    random = np.random.default_rng(1)
    count_kw = draw(random, SERIES["constant, 200 a week"], 6, 104, 0.5, 94)
    count_kw[3:] = draw(random, SERIES["constant, 200 a week"], 3, 104, 1.0, 94)
    made = change_points(count_kw, WEEKS, random)
    assert made.is_changed_k.tolist() == [True] * 3 + [False] * 3
    assert made.week_k[:3].tolist() == [94] * 3
    assert made.ratio_k[:3] == pytest.approx([0.5] * 3, abs=0.06)
    assert made.p_k.min() == pytest.approx(1 / 1000)
    order = np.sort(made.p_k) * np.arange(6, 0, -1)  # Holm by hand
    np.testing.assert_allclose(
        np.sort(made.adjusted_k), np.minimum(np.maximum.accumulate(order), 1)
    )


def test_short_weeks_are_no_change() -> None:
    random = np.random.default_rng(2)
    exposure_w = np.where(np.arange(104) >= 95, 2.5, 5.0)
    count_kw = random.poisson(60 * exposure_w, (5, 104))
    assert not change_points(count_kw, exposure_w, random).is_changed_k.any()
    assert change_points(count_kw, WEEKS, random).is_changed_k.all()


def test_too_few_weeks_or_alerts_are_not_tested() -> None:
    random = np.random.default_rng(3)
    count_kw = np.vstack([random.poisson(5, 104), np.zeros(104, int)])
    made = change_points(count_kw, WEEKS, random)
    assert made.is_tested_k.tolist() == [True, False]
    assert (made.p_k[1], made.week_k[1]) == (1.0, -1)
    assert np.isnan(made.ratio_k[1])
    short = change_points(count_kw[:, :38], WEEKS[:38], random)
    assert not short.is_tested_k.any()
    assert not short.is_changed_k.any()
    assert change_points(np.empty((0, 104), int), WEEKS, random).p_k.size == 0
    with pytest.raises(ValueError, match="positive, one a week"):
        change_points(count_kw, np.zeros(104), random)


def test_vanishing_is_a_change() -> None:
    random = np.random.default_rng(4)
    gone = draw(random, SERIES["constant, 20 a week"], 1, 104, 0.0, 96)
    made = change_points(gone, WEEKS, random)
    assert made.is_changed_k[0]
    assert made.ratio_k[0] < 0.2
    assert 94 <= made.week_k[0] <= 98


def test_same_random_numbers_same_answer_whatever_comes_after() -> None:
    count_kw = draw(np.random.default_rng(5), SERIES["overdispersed"], 3, 104, 1.0, 104)
    one = change_points(count_kw, WEEKS, np.random.default_rng(9))
    two = change_points(count_kw[:2], WEEKS, np.random.default_rng(9))
    np.testing.assert_array_equal(one.p_k[:2], two.p_k)


@pytest.mark.parametrize("name", ["constant, 20 a week", "quarterly season", "autocorrelated .5"])
def test_false_alarms_are_held(name) -> None:
    random = np.random.default_rng(6)
    count_kw = draw(random, SERIES[name], 60, 104, 1.0, 104)
    made = change_points(count_kw, WEEKS, random, draws=199, alpha=0.5)
    assert made.is_tested_k.all()
    # 60 at 5 %: 9 or more with chance .004
    assert np.count_nonzero(made.p_k <= 0.05) < 9
    assert made.p_k.min() < 0.3
