"""Hands on which of many rules an e-value speaks against, false discoveries held at a share."""

from __future__ import annotations

import numpy as np


def e_bh_adjusted(log_e: np.ndarray) -> np.ndarray:
    """The smallest share of false discoveries at which each rule is chosen, at most 1.

    Parameters
    ----------
    log_e : float64 [rules], natural logs of e-values; they may depend on each other in any way

    Returns
    -------
    float64 [rules]

    References
    ----------
    Wang & Ramdas (2022), JRSS-B 84:822-852: the k largest are chosen for the largest k with
    e_(k) >= m / (k alpha).
    """
    log_e = np.asarray(log_e, dtype=float)
    order = np.argsort(-log_e, kind="stable")
    log_share = np.log(max(log_e.size, 1)) - np.log(np.arange(1, log_e.size + 1)) - log_e[order]
    adjusted = np.empty(log_e.size)
    lowest = np.minimum.accumulate(log_share[::-1])[::-1]
    adjusted[order] = np.exp(np.minimum(lowest, 0.0))
    return adjusted


def e_bh(log_e: np.ndarray, alpha: float = 0.05) -> np.ndarray:
    """Whether each rule is chosen at ``alpha``: bool [rules]. See ``e_bh_adjusted``."""
    # a tie with the level, up to rounding of logs, is chosen: the rule says "at least"
    return e_bh_adjusted(log_e) <= alpha * (1 + 1e-12)
