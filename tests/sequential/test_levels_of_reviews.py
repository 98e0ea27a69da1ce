"""Rules at their promise are seldom proposed for retirement, rules at half of it soon are."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom

from tests.calibration import review
from tests.calibration import review_worlds as worlds


def measured(measure, blocks: int, **design) -> dict[str, np.ndarray]:
    rows = [measure(design | {"block": 1000 + b}) for b in range(blocks)]
    return {name: np.sum([row[name] for row in rows], axis=0) for name in rows[0]}


def is_above(count: int, n: int, share: float) -> bool:
    """Above the share beyond noise (one-sided p under .002)."""
    return bool(binom.sf(count - 1, n, share) < 0.002)


@pytest.mark.parametrize("kind", ["independent", review.CLUSTERED])
def test_level_and_power_of_the_two_questions(kind) -> None:
    out = measured(review.promise, 2, kind=kind, promise=0.2, rate=30)
    n = 2 * review.BLOCK
    assert not is_above(out["keep 1.0"][0], n, 0.05)
    assert not is_above(out["works"][0], n, 0.05)
    assert out["naive"][0] > 0.2 * n, "a test that is repeated every quarter must fool itself here"
    if kind == "independent":
        assert out["keep 1.0"][1] >= 0.6 * n
        assert out["works"][1] >= 0.9 * n


def test_worlds_have_the_precision_that_was_asked_for() -> None:
    random = np.random.default_rng(1)
    for name, kind in worlds.KINDS.items():
        drawn = [worlds.draw(random, kind, 100, np.full(20, 0.2), 5) for _ in range(40)]
        shares = np.array([t.is_hit.mean() for t in drawn])
        assert abs(shares.mean() - 0.2) < 4 * shares.std() / np.sqrt(40), name
        count = np.array([t.is_hit.size for t in drawn])
        assert abs(count.mean() - 2000) < 4 * count.std() / np.sqrt(40) + 20, name
        spread = shares.std() / np.sqrt(0.2 * 0.8 / 2000)
        assert (spread > 1.25) == (
            name not in ("independent", "bursts", "repeats", "sector shocks")
        )


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["independent", review.CLUSTERED])
@pytest.mark.parametrize("promise", review.PROMISES)
@pytest.mark.parametrize("rate", review.RATES)
def test_level_everywhere(kind, promise, rate) -> None:
    out = measured(review.promise, 8, kind=kind, promise=promise, rate=rate)
    n = 8 * review.BLOCK
    assert not is_above(out["keep 1.0"][0], n, 0.05)
    assert not is_above(out["works"][0], n, 0.05)
    assert out["keep 0.8"][0] <= out["keep 1.0"][0]


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["independent", review.CLUSTERED])
def test_confidence_sequences_hold(kind) -> None:
    out = measured(review.cover, 8, kind=kind, promise=0.2, rate=30)
    assert not is_above(int(out["missed"]), 8 * review.BLOCK, 0.05)
