"""Adjusted p-values for many tests at once, each written from its definition.

With p_(1) <= ... <= p_(m): Benjamini & Hochberg 1995, Benjamini & Yekutieli 2001, Holm 1979,
Hochberg 1988, and the minP adjustments of Westfall & Young 1993.
"""

from collections.abc import Sequence

import numpy as np


def ranked(p_values: Sequence[float]) -> list[int]:
    """Positions from the smallest p-value to the largest."""
    return sorted(range(len(p_values)), key=lambda i: p_values[i])


def benjamini_hochberg(p_values: Sequence[float]) -> list[float]:
    """min over j >= i of m p_(j) / j."""
    m, order = len(p_values), ranked(p_values)
    out = [1.0] * m
    for rank, i in enumerate(order):
        out[i] = min(1.0, *(m * p_values[order[j]] / (j + 1) for j in range(rank, m)))
    return out


def benjamini_yekutieli(p_values: Sequence[float]) -> list[float]:
    """Benjamini-Hochberg times 1 + 1/2 + ... + 1/m before the cut at 1."""
    m, order = len(p_values), ranked(p_values)
    c = sum(1 / j for j in range(1, m + 1))
    out = [1.0] * m
    for rank, i in enumerate(order):
        out[i] = min(1.0, *(c * m * p_values[order[j]] / (j + 1) for j in range(rank, m)))
    return out


def holm(p_values: Sequence[float]) -> list[float]:
    """max over j <= i of (m - j + 1) p_(j)."""
    m, order = len(p_values), ranked(p_values)
    out = [1.0] * m
    for rank, i in enumerate(order):
        out[i] = min(1.0, max((m - j) * p_values[order[j]] for j in range(rank + 1)))
    return out


def hochberg(p_values: Sequence[float]) -> list[float]:
    """min over j >= i of (m - j + 1) p_(j)."""
    m, order = len(p_values), ranked(p_values)
    out = [1.0] * m
    for rank, i in enumerate(order):
        out[i] = min(1.0, *((m - j) * p_values[order[j]] for j in range(rank, m)))
    return out


def pad(p_values: Sequence[float], m: int) -> list[float]:
    """The p-values with ones added for the members of the family that were not proposed."""
    if len(p_values) > m:
        raise ValueError(f"{len(p_values)} p-values in a family of {m}")
    return [*p_values, *[1.0] * (m - len(p_values))]


def adjust_p(p_values: Sequence[float], m: int, how: str) -> list[float]:
    """Adjusted p-values in a family of m, by "bh" or "by"."""
    method = {"bh": benjamini_hochberg, "by": benjamini_yekutieli}[how]
    return method(pad(p_values, m))[: len(p_values)]


def share_at_or_below(minima: np.ndarray, p: float, weights: np.ndarray | None) -> float:
    """P(minimum <= p): counted with the observed world added, or by the weights as they are."""
    reached = minima <= p * (1 + 1e-9)
    if weights is None:
        return float((1 + reached.sum()) / (1 + len(minima)))
    return float(weights[reached].sum() / weights.sum())


def single_step_min_p(
    observed: Sequence[float], null_rc: np.ndarray, weights: np.ndarray | None = None
) -> list[float]:
    """P(the smallest of all p-values <= each observed one).

    null_rc: p-values, shape (draw, test). weights: None for random draws; the chances of the
    rows where they are every outcome there is.
    """
    minima = null_rc.min(axis=1)
    return [share_at_or_below(minima, p, weights) for p in observed]


def step_down_min_p(
    observed: Sequence[float], null_rc: np.ndarray, weights: np.ndarray | None = None
) -> list[float]:
    """The same, each p-value against the smallest among those not smaller than itself."""
    order = ranked(observed)
    out = [0.0] * len(observed)
    so_far = 0.0
    for rank, i in enumerate(order):
        minima = null_rc[:, order[rank:]].min(axis=1)
        so_far = max(so_far, share_at_or_below(minima, observed[i], weights))
        out[i] = so_far
    return out
