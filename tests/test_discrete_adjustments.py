"""The trial adjustments for discrete p-values against published figures."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom, fisher_exact

from tests.calibration.discrete import cdf_at, from_draws, heyse, step_down, tarone_factor

# The toy example of the DiscreteFDR package (Doehler, Durand & Roquain 2018)
HITS_A = (4, 2, 2, 14, 6, 9, 4, 0, 1)
HITS_B = (0, 0, 1, 3, 2, 1, 2, 2, 2)
SIZE_A, SIZE_B = 148, 132
ORDER = (4, 6, 1, 8, 5, 2, 9, 7, 3)


def _fisher(a: int, b: int) -> float:
    return float(fisher_exact([[a, SIZE_A - a], [b, SIZE_B - b]]).pvalue)


@pytest.fixture(scope="module")
def toy() -> tuple[np.ndarray, np.ndarray]:
    p = np.array([_fisher(a, b) for a, b in zip(HITS_A, HITS_B, strict=True)])
    supports = [
        np.unique([min(1.0, _fisher(x, a + b - x)) for x in range(a + b + 1)])
        for a, b in zip(HITS_A, HITS_B, strict=True)
    ]
    return p, cdf_at(supports, p)


def test_toy_example_is_the_published_one(toy: tuple[np.ndarray, np.ndarray]) -> None:
    p, _ = toy
    assert tuple(np.argsort(p) + 1) == ORDER
    np.testing.assert_allclose(np.sort(p)[:3], [0.01243145, 0.02126871, 0.12476691], rtol=1e-6)


def test_step_down_gives_the_published_values(toy: tuple[np.ndarray, np.ndarray]) -> None:
    published = [0.03819796, 0.03819796, 0.25630985, 0.47895996, 0.51482782, 1, 1, 1, 1]
    np.testing.assert_allclose(np.sort(step_down(*toy)), published, rtol=1e-6)


def test_heyse_gives_the_published_values(toy: tuple[np.ndarray, np.ndarray]) -> None:
    published = [0.02587912, 0.02587912, 0.23014685, 0.38867415, 0.39633317, 0.59145906]
    published += [0.63384448, 0.64398643, 1]
    np.testing.assert_allclose(np.sort(heyse(*toy)), published, rtol=1e-6)


def test_tarone_on_the_figures_of_westfall_and_wolfinger() -> None:
    # Westfall & Wolfinger (1997), table 1: smallest attainable p-values
    smallest = np.array([0.02521, 0.00532, 0.05387, 0.00047])
    assert tarone_factor(smallest, 0.05) == 2
    assert tarone_factor(smallest, 0.10) == 3


def test_tarone_times_p_on_three_binomials() -> None:
    # the example of the MHTdiscrete package
    n, chance = np.array([8, 5, 6]), np.array([0.5, 0.75, 0.6])
    p, smallest = binom.cdf(1, n, chance), binom.cdf(0, n, chance)
    adjusted = p * tarone_factor(smallest, 0.05)
    np.testing.assert_allclose(adjusted, [0.1054688, 0.0468750, 0.1228800], rtol=1e-6)


def test_from_draws_counts_drawn_values_by_hand() -> None:
    log_p = np.log([0.01, 0.2])
    drawn = np.log([[0.005, 0.5, 0.5, 0.5], [0.5, 0.1, 0.9, 0.9]])
    # at 0.01: (1 + 1) / 4 drawn, 1 found; at 0.2: (1 + 2) / 4 drawn, 2 found
    np.testing.assert_allclose(from_draws(log_p, drawn, 0.0), [0.375, 0.375])
