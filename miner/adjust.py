"""Adjustments for having looked at many combinations: false discoveries, family-wise error."""

from __future__ import annotations

import numpy as np


def benjamini_hochberg(p: np.ndarray, family: int) -> np.ndarray:
    """Adjusted p-values over a family of which ``p`` are some and the rest have p = 1.

    Benjamini & Hochberg (1995), JRSS-B 57:289-300.
    """
    return _step_up(p, family, 1.0)


def benjamini_yekutieli(p: np.ndarray, family: int) -> np.ndarray:
    """As ``benjamini_hochberg``, valid under any dependence: times 1 + 1/2 + ... + 1/family.

    Benjamini & Yekutieli (2001), Annals of Statistics 29:1165-1188.
    """
    return _step_up(p, family, float((1.0 / np.arange(1, family + 1)).sum()))


def _step_up(p: np.ndarray, family: int, factor: float) -> np.ndarray:
    order = np.argsort(p, kind="stable")
    scaled = p[order] * family * factor / np.arange(1, p.size + 1)
    adjusted = np.empty(p.size)
    # the members with p = 1 rank last and cannot lower anything below 1
    adjusted[order] = np.minimum(np.minimum.accumulate(scaled[::-1])[::-1], 1.0)
    return adjusted


def holm(p: np.ndarray) -> np.ndarray:
    """Adjusted p-values that control the family-wise error rate.

    Holm (1979), Scandinavian Journal of Statistics 6:65-70.
    """
    order = np.argsort(p, kind="stable")
    adjusted = np.empty(p.size)
    scaled = p[order] * np.arange(p.size, 0, -1)
    adjusted[order] = np.minimum(np.maximum.accumulate(scaled), 1.0)
    return adjusted


def step_down_min_p(p: np.ndarray, null_p_cr: np.ndarray, slack: float = 0.0) -> np.ndarray:
    """Step-down min-p of Westfall & Young (1993), algorithm 2.8.

    Parameters
    ----------
    p : float64 [combinations], observed; any increasing function of p-values will do
    null_p_cr : float [combinations, draws], the same statistic in each drawn world
    slack : float, how far above the observed value a drawn one still counts as a tie

    Returns
    -------
    float64 [combinations] : (1 + draws whose minimum over what is not yet rejected is at most p)
        / (1 + draws), made monotone
    """
    order = np.argsort(p, kind="stable")
    n_draws = null_p_cr.shape[1]
    lowest_r = np.full(n_draws, np.inf)
    adjusted = np.empty(p.size)
    for c in order[::-1]:
        np.minimum(lowest_r, null_p_cr[c], out=lowest_r)
        adjusted[c] = (1 + np.count_nonzero(lowest_r <= p[c] + slack)) / (1 + n_draws)
    adjusted[order] = np.minimum(np.maximum.accumulate(adjusted[order]), 1.0)
    return adjusted
