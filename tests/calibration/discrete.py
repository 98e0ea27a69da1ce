"""Adjustments that know how coarse each p-value is, and one that reads its level off drawn worlds.

All take ``p`` [combinations] over the whole family. ``cdf_ck[c, k]`` is the chance, under its
null, that combination c has a p-value of at most the k-th smallest of ``p``.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np


def cdf_at(supports: Sequence[np.ndarray], p: np.ndarray) -> np.ndarray:
    """``cdf_ck`` from each null's attainable p-values (rising): the largest at most p, or 0."""
    at = np.sort(p) * (1 + 1e-12)
    rows = []
    for support in supports:
        steps = np.concatenate([[0.0], support])
        rows.append(steps[np.searchsorted(support, at, side="right")])
    return np.array(rows)


def step_down(p: np.ndarray, cdf_ck: np.ndarray) -> np.ndarray:
    """Adjusted p-values of the discrete step-down procedure.

    Doehler, Durand & Roquain (2018), Electronic Journal of Statistics 12:1867, [DBH-SD]; proven
    for independent p-values.
    """
    with np.errstate(divide="ignore"):
        odds = np.where(cdf_ck < 1, cdf_ck / (1 - cdf_ck), np.inf)
    rank = np.arange(1, p.size + 1)
    adjusted = np.empty(p.size)
    adjusted[np.argsort(p, kind="stable")] = np.minimum(
        np.maximum.accumulate(odds.sum(axis=0) / rank), 1.0
    )
    return adjusted


def heyse(p: np.ndarray, cdf_ck: np.ndarray) -> np.ndarray:
    """Heyse's (2011) adjusted p-values; the same authors show that they can exceed their level."""
    rank = np.arange(1, p.size + 1)
    scaled = cdf_ck.sum(axis=0) / rank
    adjusted = np.empty(p.size)
    adjusted[np.argsort(p, kind="stable")] = np.minimum(
        np.minimum.accumulate(scaled[::-1])[::-1], 1.0
    )
    return adjusted


def tarone_factor(smallest_p: np.ndarray, alpha: float) -> int:
    """Tarone's (1990) Bonferroni factor, Biometrics 46:515: the least k with at most k
    combinations that could reach alpha / k at all."""
    k = 1
    while (smallest_p <= alpha / k).sum() > k:
        k += 1
    return k


def from_draws(log_p: np.ndarray, null_log_p_cr: np.ndarray, slack: float) -> np.ndarray:
    """Adjusted p-values: mean number of drawn p-values at most p, over the number observed.

    The permutation estimate of the false discovery proportion, without an estimate of the share
    of true nulls; made monotone. One draw's worth is added, so that nothing is 0.
    """
    order = np.argsort(log_p, kind="stable")
    drawn = np.sort(null_log_p_cr, axis=None)
    n_draws = null_log_p_cr.shape[1]
    false = (1 + np.searchsorted(drawn, log_p[order] + slack, side="right")) / n_draws
    found = np.searchsorted(log_p[order], log_p[order] + slack, side="right")
    adjusted = np.empty(log_p.size)
    adjusted[order] = np.minimum(np.minimum.accumulate((false / found)[::-1])[::-1], 1.0)
    return adjusted
