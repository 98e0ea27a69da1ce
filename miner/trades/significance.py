"""Whether returns are above zero: for one rule, and for many that were searched through."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import stats

from miner.intervals import FEW_CLUSTERS
from miner.kernels.tails import TINY


@dataclass(frozen=True)
class Mean:
    """A mean with a standard error for two-way clustering.

    Attributes
    ----------
    mean, error, low, high : the 95 % interval has a t quantile; NaN under two clusters
    p_value : chance of as large a mean or a larger one, were there none (one-sided)
    n_clusters : entities or date blocks, whichever are fewer
    is_few : bool, under ten: do not lean on any of it
    """

    mean: float
    error: float
    low: float
    high: float
    p_value: float
    n_clusters: int
    is_few: bool


def clustered_mean(value: np.ndarray, entity: np.ndarray, block: np.ndarray) -> Mean:
    """Mean of trades that hang together by entity and by date block.

    V = V_entity + V_block - V_both, at least either of the first two, each with G / (G - 1)
    (Cameron, Gelbach & Miller 2011, JBES 29:238-249). Degrees of freedom: clusters - 1.

    Parameters
    ----------
    value : float64 [trades]
    entity, block : int [trades], blocks at least as long as trades are held
    """
    n = value.size
    if not n:
        return Mean(math.nan, math.nan, math.nan, math.nan, math.nan, 0, True)
    mean = float(value.mean())
    rest = value - mean
    cell = entity.astype(np.int64) * (int(block.max()) + 1) + block
    variances, counts = [], []
    for cluster in (entity, block, cell):
        _, place = np.unique(cluster, return_inverse=True)
        sums = np.bincount(place, weights=rest)
        g = sums.size
        variances.append(g / (g - 1) * float(np.square(sums).sum()) / n**2 if g > 1 else 0.0)
        counts.append(g)
    by_entity, by_block, by_both = variances
    variance = max(by_entity + by_block - by_both, by_entity, by_block)
    n_clusters = min(counts[:2])
    is_few = n_clusters < FEW_CLUSTERS
    if n_clusters < 2 or variance <= 0:
        return Mean(mean, math.nan, math.nan, math.nan, math.nan, n_clusters, is_few)
    error = math.sqrt(variance)
    quantile = float(stats.t.ppf(0.975, n_clusters - 1))
    p = max(TINY, float(stats.t.sf(mean / error, n_clusters - 1)))
    return Mean(
        mean, error, mean - quantile * error, mean + quantile * error, p, n_clusters, is_few
    )


def stationary_draws(
    rng: np.random.Generator, n_sessions: int, block: float, n_draws: int
) -> np.ndarray:
    """Sessions drawn in blocks of geometric length with mean ``block``, going round at the end.

    int64 [draws, sessions] (stationary bootstrap, Politis & Romano 1994, JASA 89:1303-1313).
    """
    draw_rt = rng.integers(0, n_sessions, (n_draws, n_sessions))
    is_new_rt = rng.random((n_draws, n_sessions)) < 1 / block
    for t in range(1, n_sessions):
        going_on = (draw_rt[:, t - 1] + 1) % n_sessions
        draw_rt[:, t] = np.where(is_new_rt[:, t], draw_rt[:, t], going_on)
    return draw_rt


def bootstrap_errors(value_tc: np.ndarray, block: float) -> np.ndarray:
    """Standard error of each column's mean under the stationary bootstrap, in closed form.

    float64 [columns] (Politis & Romano 1994, lemma 1).
    """
    n = value_tc.shape[0]
    centred = value_tc - value_tc.mean(axis=0)
    keep = 1 - 1 / block
    variance = np.square(centred).mean(axis=0)
    for lag in range(1, n):
        weight = (1 - lag / n) * keep**lag + lag / n * keep ** (n - lag)
        if weight < 1e-12:
            continue
        variance = variance + 2 * weight * (centred[lag:] * centred[:-lag]).sum(axis=0) / n
    return np.sqrt(np.maximum(variance, 0.0) / n)


def step_down(value_tc: np.ndarray, draw_rt: np.ndarray, block: float) -> np.ndarray:
    """Adjusted p-values of "the mean is above zero" for many columns searched through at once.

    The studentised step-down of Romano & Wolf (2005), Econometrica 73:1237-1282, with p-values as
    in Romano & Wolf (2016), Stat. Prob. Letters 113:38-40: they hold the chance of any false
    finding, whatever the columns' dependence, and the same sessions are drawn for all columns.
    Its first step is White's (2000) reality check, studentised. Columns without variance get 1.

    Parameters
    ----------
    value_tc : float64 [sessions, columns], net returns by session
    draw_rt : int [draws, sessions], from `stationary_draws` with the same ``block``

    Returns
    -------
    float64 [columns], (1 + exceedances) / (1 + draws) made monotone in the statistic
    """
    n, n_columns = value_tc.shape
    error = bootstrap_errors(value_tc, block)
    p = np.ones(n_columns)
    some = np.flatnonzero(error > 0)
    if not some.size:
        return p
    mean = value_tc.mean(axis=0)[some]
    statistic = mean / error[some]
    order = np.argsort(-statistic, kind="stable")
    exceed = np.zeros(some.size, dtype=np.int64)
    for start in range(0, draw_rt.shape[0], 256):
        part = draw_rt[start : start + 256]
        times = np.zeros((part.shape[0], n))
        np.add.at(times, (np.arange(part.shape[0])[:, None], part), 1.0)
        drawn = (times @ value_tc[:, some] / n - mean) / error[some]
        # the largest over this column and all with smaller statistics: from the last one up
        largest = np.maximum.accumulate(drawn[:, order[::-1]], axis=1)[:, ::-1]
        exceed += (largest >= statistic[order]).sum(axis=0)
    adjusted = np.maximum.accumulate((1 + exceed) / (1 + draw_rt.shape[0]))
    p[some[order]] = adjusted
    return p
