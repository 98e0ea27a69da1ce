"""Hands on an interval for a precision that may be looked at at any time: a confidence sequence.

It holds every rate that the two-sided e-process does not speak against at 1 / alpha. Under a rate p
and an alternative q, a cluster with a share s of hits gives s q / p + (1 - s)(1 - q) / (1 - p). The
log of the mixed product is convex in p, and at most 0 at the mean of the clusters' shares: the
rates that are left are an interval around that mean.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq
from scipy.special import expit, logit

from miner.sequential.clusters import Clusters
from miner.sequential.evidence import alternatives

TOLERANCE = 1e-10  # of a bound's log odds
FARTHEST = 30.0  # log odds: a bound beyond is 0 or 1 itself


@dataclass(frozen=True)
class ConfidenceSequence:
    """Intervals after each quarter, float64 [quarters]; 0, 1 and NaN while there is nothing.

    With chance 1 - alpha none of them ever misses the chance of a hit. ``centre_q`` is the mean of
    the clusters' shares of hits, which always lies inside.
    """

    low_q: np.ndarray
    high_q: np.ndarray
    centre_q: np.ndarray


def confidence_sequence(
    is_hit_i: np.ndarray, clusters: Clusters, n_quarters: int, alpha: float = 0.05
) -> ConfidenceSequence:
    """Intervals for the precision since adoption, after each quarter.

    Parameters
    ----------
    is_hit_i : bool [triggers]
    clusters : of the same triggers; those that wait are left out
    alpha : chance that any of the intervals, however many are looked at, misses

    References
    ----------
    Howard, Ramdas, McAuliffe & Sekhon (2021), Annals of Statistics 49:1055-1080, for confidence
    sequences; the mixture is that of ``e_process``.
    """
    n_clusters = clusters.quarter_c.size
    hits_c = np.bincount(clusters.code_i, weights=is_hit_i, minlength=n_clusters)
    share_c = hits_c / np.bincount(clusters.code_i, minlength=n_clusters)
    low_q, high_q = np.zeros(n_quarters), np.ones(n_quarters)
    centre_q = np.full(n_quarters, np.nan)
    after_q = np.searchsorted(clusters.quarter_c, np.arange(n_quarters), side="right")
    for q, n in enumerate(after_q.tolist()):
        if n == 0:
            continue
        if q and n == after_q[q - 1]:
            low_q[q], high_q[q], centre_q[q] = low_q[q - 1], high_q[q - 1], centre_q[q - 1]
            continue
        centre_q[q] = share_c[:n].mean()
        low_q[q], high_q[q] = _ends(share_c[:n], float(centre_q[q]), alpha)
    return ConfidenceSequence(low_q, high_q, centre_q)


def _ends(share_c: np.ndarray, centre: float, alpha: float) -> tuple[float, float]:
    """The two rates at which the evidence reaches 1 / alpha, or 0 and 1."""
    share_u, count_u = np.unique(share_c, return_counts=True)
    node, weight = alternatives(0.5, "two-sided")
    hit_un, miss_un = share_u[:, None] * node, (1 - share_u)[:, None] * (1 - node)

    def over(log_odds: float) -> float:
        p, rest = expit(log_odds), expit(-log_odds)
        log_e_n = (count_u[:, None] * np.log(hit_un / p + miss_un / rest)).sum(axis=0)
        top = log_e_n.max()
        return float(np.log((weight * np.exp(log_e_n - top)).sum()) + top + np.log(alpha))

    middle = float(np.clip(logit(centre), -FARTHEST, FARTHEST))
    low, high = _root(over, -FARTHEST, middle), _root(over, FARTHEST, middle)
    return 0.0 if low is None else float(expit(low)), 1.0 if high is None else float(expit(high))


def _root(over: Callable[[float], float], far: float, middle: float) -> float | None:
    """Where ``over`` crosses 0 between the middle and the far end; None if it never does."""
    if middle == far or over(far) <= 0:
        return None
    return float(brentq(over, far, middle, xtol=TOLERANCE))
