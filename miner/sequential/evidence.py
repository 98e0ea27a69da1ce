"""Hands on evidence that may be looked at at any time: a mixture e-process over hits of triggers.

A trigger with null rate p and outcome y gives, under an alternative whose odds are e^tilt times the
null's, the factor e^(tilt y) / (1 - p + p e^tilt): its mean is at most 1 under the null. Factors
are averaged inside a cluster, multiplied over clusters in order of time, and then mixed over tilts
that were fixed in advance. Whenever one looks, the chance that the result ever was at or above
1 / alpha is at most alpha where the null holds (Ville 1939).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Literal

import numpy as np

from miner.sequential.clusters import Clusters

Direction = Literal["up", "down", "two-sided"]
N_NODES = 128  # of the mixture; whatever their number, the process is honest
NEAREST = 1e-6  # a reference rate is held this far from 0 and 1
SINCE_SHARE = 2 / 3  # of the capital, to the process since adoption; the rest to restarted ones
LARGEST = 690.0  # log beyond which exp is not taken
DEFAULT_RESTART_QUARTERS = 4


@dataclass(frozen=True)
class Evidence:
    """An e-process in natural logs; 0 before anything is in it.

    Attributes
    ----------
    log_e_c : float64 [clusters in the evidence], the whole process after each cluster (empty where
        it was not asked for)
    log_e_q : float64 [quarters], after each quarter
    log_since_q : float64 [quarters], its part that runs since adoption, on its own
    log_restarted_q : float64 [quarters], the largest of its restarted parts, on its own
    best_restart_q : int64 [quarters], the quarter that part started with; -1 before any
    n_clusters_q, n_triggers_q : int64 [quarters], in the evidence so far
    """

    log_e_c: np.ndarray
    log_e_q: np.ndarray
    log_since_q: np.ndarray
    log_restarted_q: np.ndarray
    best_restart_q: np.ndarray
    n_clusters_q: np.ndarray
    n_triggers_q: np.ndarray

    @property
    def e_q(self) -> np.ndarray:
        """The process after each quarter, cut off at e^690."""
        return np.exp(np.minimum(self.log_e_q, LARGEST))


def alternatives(reference: float, direction: Direction) -> tuple[np.ndarray, np.ndarray]:
    """Rates under the alternatives at a null rate of ``reference``, and their weights.

    The Beta(1/2, 1/2) law cut to the rates above the reference ("up"), below it ("down") or to
    neither: uniform in the angle whose squared sine is the rate. Gauss-Legendre nodes.

    Returns
    -------
    float64 [nodes], float64 [nodes] : weights sum to 1
    """
    angle = np.arcsin(np.sqrt(reference))
    ends = {"up": (angle, np.pi / 2), "down": (0.0, angle), "two-sided": (0.0, np.pi / 2)}
    low, high = ends[direction]
    nodes, weights = _legendre()
    return np.sin(low + (high - low) * (nodes + 1) / 2) ** 2, weights / 2


@cache
def _legendre() -> tuple[np.ndarray, np.ndarray]:
    nodes, weights = np.polynomial.legendre.leggauss(N_NODES)
    return nodes, weights


def e_process(
    is_hit_i: np.ndarray,
    rate_i: np.ndarray,
    clusters: Clusters,
    n_quarters: int,
    direction: Direction,
    reference: float | None = None,
    restart_quarters: int = DEFAULT_RESTART_QUARTERS,
    is_each_cluster: bool = True,
) -> Evidence:
    """Evidence against "every trigger hits with its rate, or less" (up), "or more" (down).

    Parameters
    ----------
    is_hit_i : bool [triggers]
    rate_i : float [triggers], null rates, known without the outcomes of the trigger's cluster
    clusters : of the same triggers; those that wait are left out
    reference : the null rate at which the mixture is laid out, fixed in advance; default: the mean
        rate of the first cluster. Where all rates are the reference, the mixture is the
        Beta(1/2, 1/2) law of the rate, cut at the null
    restart_quarters : a further process starts every so many quarters; 0 = none does. The one since
        adoption holds two thirds of the capital, the k-th other 1 / (3 k (k + 1)) of it
    is_each_cluster : whether to give the process after each cluster, or after each quarter only

    References
    ----------
    Ramdas, Grunwald, Vovk & Shafer (2023), Statistical Science 38:576-601, for e-processes; Vovk &
    Wang (2021), Annals of Statistics 49:1736-1754, for averages under any dependence; Shin, Ramdas
    & Rinaldo (2023), New England Journal of Statistics in Data Science, for restarts.
    """
    code_i = np.asarray(clusters.code_i)
    n_in = int(np.searchsorted(clusters.quarter_c, n_quarters))
    used = np.nonzero(code_i < n_in)[0]
    used = used[np.argsort(code_i[used], kind="stable")]
    is_hit, rate = np.asarray(is_hit_i)[used], np.asarray(rate_i, dtype=float)[used]
    start_c = np.searchsorted(code_i[used], np.arange(n_in))
    size_c = np.diff(np.append(start_c, used.size))
    if reference is None:
        reference = float(rate[: size_c[0]].mean()) if n_in else 0.5
    reference = min(max(reference, NEAREST), 1 - NEAREST)
    node, weight = alternatives(reference, direction)
    grow_n = node * (1 - reference) / ((1 - node) * reference)  # e^tilt
    path_cn = np.zeros((n_in + 1, node.size))
    if n_in:
        np.cumsum(_log_factors(is_hit, rate, start_c, size_c, grow_n), axis=0, out=path_cn[1:])
    after_q = np.searchsorted(clusters.quarter_c, np.arange(n_quarters), side="right")
    after_q = np.minimum(after_q, n_in)
    begins = _begins(clusters.quarter_c[:n_in], n_quarters, restart_quarters)
    row_r = np.arange(n_in + 1) if is_each_cluster else after_q
    part_kr = np.zeros((len(begins), row_r.size))
    for k, (_, first) in enumerate(begins):
        is_on = row_r > first
        part_kr[k, is_on] = _mixed(path_cn[row_r[is_on]] - path_cn[first], weight)
    share_k = _shares(len(begins), restart_quarters)
    total_r = _mixed(np.vstack([part_kr, np.zeros(row_r.size)]).T, share_k)
    row_q = after_q if is_each_cluster else np.arange(n_quarters)
    best_q, restarted_q = _best_restart(part_kr[:, row_q], [q for q, _ in begins])
    return Evidence(
        log_e_c=total_r[1:] if is_each_cluster else np.empty(0),
        log_e_q=total_r[row_q],
        log_since_q=part_kr[0, row_q],
        log_restarted_q=restarted_q,
        best_restart_q=best_q,
        n_clusters_q=after_q,
        n_triggers_q=np.append(start_c, used.size)[after_q],
    )


def _best_restart(part_kq: np.ndarray, starts: list[int]) -> tuple[np.ndarray, np.ndarray]:
    """Starting quarter and log of the largest restarted part; a part counts once it has begun."""
    n_quarters = part_kq.shape[1]
    best_q, log_q = np.full(n_quarters, -1), np.zeros(n_quarters)
    for q, part_q in zip(starts[1:], part_kq[1:], strict=True):
        is_best = (np.arange(n_quarters) >= q) & ((best_q < 0) | (part_q > log_q))
        best_q[is_best], log_q[is_best] = q, part_q[is_best]
    return best_q, log_q


def _log_factors(
    is_hit: np.ndarray,
    rate: np.ndarray,
    start_c: np.ndarray,
    size_c: np.ndarray,
    grow_n: np.ndarray,
) -> np.ndarray:
    """Log of the mean factor of each cluster under each alternative [clusters, nodes]."""
    if (rate == rate[0]).all():  # few different clusters: by their shares of hits
        share_c = np.add.reduceat(is_hit.astype(float), start_c) / size_c
        share_u, kind_c = np.unique(share_c, return_inverse=True)
        mean_un = (1 + share_u[:, None] * (grow_n - 1)) / (1 + rate[0] * (grow_n - 1))
        return np.log(mean_un)[kind_c]
    factor_in = np.where(is_hit[:, None], grow_n, 1.0) / (1 + rate[:, None] * (grow_n - 1))
    return np.log(np.add.reduceat(factor_in, start_c, axis=0) / size_c[:, None])


def _mixed(log_rn: np.ndarray, weight_n: np.ndarray) -> np.ndarray:
    """Log of the weighted sum of exponentials along the last axis."""
    top_r = log_rn.max(axis=1, initial=-np.inf)
    scaled_rn = np.exp(log_rn - top_r[:, None])
    # einsum: a product this thin only loses time among the threads of a linear algebra library
    return np.log(np.einsum("rn,n->r", scaled_rn, weight_n)) + top_r


def _begins(quarter_c: np.ndarray, n_quarters: int, every: int) -> list[tuple[int, int]]:
    """(quarter, first cluster) of the process since adoption and of every restarted one."""
    starts = range(0, max(n_quarters, 1), every) if every > 0 else range(1)
    return [(q, int(np.searchsorted(quarter_c, q))) for q in starts]


def _shares(n_parts: int, every: int) -> np.ndarray:
    """Capital of each part, and last what is held back for restarts to come; sums to 1."""
    if every <= 0:
        return np.array([1.0, 0.0])
    k = np.arange(1, n_parts)
    share_k = np.append(SINCE_SHARE, (1 - SINCE_SHARE) / (k * (k + 1)))
    return np.append(share_k, 1 - share_k.sum())
