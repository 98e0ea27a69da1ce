"""Intervals for precisions whose triggers hang together by entity and by date."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from miner.kernels import hits as kernels
from miner.triggers import TriggerTable

FEW_CLUSTERS = 10


def wilson(
    share: np.ndarray, n: np.ndarray, quantile: np.ndarray | float
) -> tuple[np.ndarray, np.ndarray]:
    """Score interval for a binomial share of ``n`` (which may be fractional) trials.

    Wilson (1927), JASA 22:209-212; ``quantile`` is the two-sided normal or t quantile.
    """
    square = np.square(quantile)
    middle = (share + square / (2 * n)) / (1 + square / n)
    half = quantile / (1 + square / n) * np.sqrt(share * (1 - share) / n + square / (4 * n * n))
    return np.maximum(middle - half, 0.0), np.minimum(middle + half, 1.0)


def clopper_pearson(
    x: np.ndarray, n: np.ndarray, level: float = 0.95
) -> tuple[np.ndarray, np.ndarray]:
    """Exact interval for ``x`` successes in ``n`` trials; both may be fractional.

    Clopper & Pearson (1934), Biometrika 26:404-413.
    """
    tail = (1 - level) / 2
    x, n = np.asarray(x, dtype=float), np.asarray(n, dtype=float)
    with np.errstate(invalid="ignore"):
        low = np.where(x > 0, stats.beta.ppf(tail, x, n - x + 1), 0.0)
        high = np.where(x < n, stats.beta.ppf(1 - tail, x + 1, n - x), 1.0)
    return low, high


@dataclass(frozen=True)
class Interval:
    """95 % intervals, arrays of one length; NaN without triggers.

    Attributes
    ----------
    low, high : float64
    n_effective : float64, independent triggers that would say as much
    n_clusters : int64, entities or date blocks, whichever are fewer
    is_few : bool, under ten clusters: do not lean on it
    """

    low: np.ndarray
    high: np.ndarray
    n_effective: np.ndarray
    n_clusters: np.ndarray
    is_few: np.ndarray


def effective_size(
    n: np.ndarray, share: np.ndarray, sums: tuple[np.ndarray, ...], counts: tuple[np.ndarray, ...]
) -> np.ndarray:
    """n over the design effect of two-way clustering, the design effect floored at 1.

    Parameters
    ----------
    sums, counts : by entity, by date block and by cell of both: sums over clusters of squared
        residual totals, and numbers of clusters

    References
    ----------
    Cameron, Gelbach & Miller (2011), JBES 29:238-249, for V = V_e + V_d - V_x (here at least
    either of the two); Rao & Scott (1992), Biometrics 48:577-585, for n / design effect.
    """
    v_e, v_d, v_x = (
        np.divide(m, m - 1, out=np.zeros(m.shape), where=m > 1) * square / np.square(n)
        for square, m in zip(sums, counts, strict=True)
    )
    variance = np.maximum(np.maximum(v_e + v_d - v_x, v_e), v_d)
    simple = share * (1 - share) / n
    effect = np.divide(variance, simple, out=np.ones(n.shape), where=simple > 0)
    return n / np.maximum(effect, 1.0)


def precision_intervals(
    table: TriggerTable, rows: np.ndarray, is_hit: np.ndarray, horizon: int, n_sessions: int
) -> Interval:
    """Intervals for the precision of the combinations ``rows``.

    Wilson with the effective size and a t quantile of (clusters - 1) degrees of freedom, date
    blocks of ``horizon`` sessions. Clopper-Pearson on distinct cells where there are no hits, only
    hits, or under ten clusters.
    """
    *sums, n_e, n_d, n_x = kernels.cluster_sums(
        rows, table.offset_c, table.entity, table.session, is_hit, horizon, n_sessions
    )
    n = table.count_c[rows].astype(float)
    hits = kernels.count_flags(table.offset_c, is_hit)[rows]
    low, high = np.full(rows.size, np.nan), np.full(rows.size, np.nan)
    n_effective = np.zeros(rows.size)
    n_clusters = np.minimum(n_e, n_d)
    is_few = n_clusters < FEW_CLUSTERS
    some = n > 0
    share = np.divide(hits, n, out=np.zeros(rows.size), where=some)
    n_effective[some] = effective_size(
        n[some], share[some], tuple(s[some] for s in sums), (n_e[some], n_d[some], n_x[some])
    )
    exact = some & (is_few | (hits == 0) | (hits == n))
    low[exact], high[exact] = clopper_pearson(share[exact] * n_x[exact], n_x[exact].astype(float))
    rest = some & ~exact
    quantile = stats.t.ppf(0.975, n_clusters[rest] - 1)
    low[rest], high[rest] = wilson(share[rest], n_effective[rest], quantile)
    return Interval(low, high, n_effective, n_clusters, is_few)
