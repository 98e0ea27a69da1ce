"""Market-adjusted returns: each company's against the mean of its peers on the same session.

AR = R - R_m with R_m the equal-weighted mean of the other companies of the benchmark group; returns
are simple, and abnormal returns of a holding period add up (MacKinlay 1997, JEL 35:13-39, the
market-adjusted-return model and the cumulative abnormal return).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.prices import Prices


@dataclass(frozen=True)
class AbnormalReturns:
    """Abnormal returns, float64 [entities, sessions] each.

    Attributes
    ----------
    daily_et : close to close. On a session without a close inside a series it is what the
        benchmark did, with the sign turned; the next close makes up for it
    intraday_et, overnight_et : open to close, and close to open; NaN without an open
    n_alone : entity-sessions whose group had no other company with a return: there all companies
        were the benchmark, or, with no other at all, nothing
    """

    daily_et: np.ndarray
    intraday_et: np.ndarray
    overnight_et: np.ndarray
    n_alone: int


def abnormal_returns(prices: Prices, group_et: np.ndarray) -> AbnormalReturns:
    """Market-adjusted returns of every company.

    Parameters
    ----------
    group_et : int [entities, sessions], benchmark group of each company on each session
    """
    close_et, before_et = prices.close_et, _close_before(prices)
    daily_et = close_et / before_et - 1
    is_break_et = ~np.isnan(close_et) & np.isnan(before_et)
    nothing_et = np.full(close_et.shape, np.nan)
    open_et = nothing_et if prices.open_et is None else prices.open_et
    daily, n_alone = _against_peers(daily_et, group_et)
    intraday, _ = _against_peers(close_et / open_et - 1, group_et, keep_missing=True)
    overnight, _ = _against_peers(open_et / before_et - 1, group_et, keep_missing=True)
    # a series that starts anew: what happened between is not known
    daily[is_break_et] = 0.0
    overnight[is_break_et] = 0.0
    return AbnormalReturns(daily, intraday, overnight, n_alone)


def _close_before(prices: Prices) -> np.ndarray:
    """The last close of the same series before each session, NaN where there is none."""
    before_et = np.full(prices.close_et.shape, np.nan)
    entity, session = np.nonzero(prices.series_et >= 0)
    series = prices.series_et[entity, session]
    is_next = (entity[1:] == entity[:-1]) & (series[1:] == series[:-1])
    at = 1 + np.flatnonzero(is_next)
    before_et[entity[at], session[at]] = prices.close_et[entity[at - 1], session[at - 1]]
    return before_et


def _against_peers(
    return_et: np.ndarray, group_et: np.ndarray, keep_missing: bool = False
) -> tuple[np.ndarray, int]:
    """Returns less the mean of the group's others; a missing one counts as 0 unless kept so."""
    is_there_et = ~np.isnan(return_et)
    filled_et = np.where(is_there_et, return_et, 0.0)
    n_sessions = return_et.shape[1]
    n_groups = int(group_et.max(initial=0)) + 1
    cell_et = group_et.astype(np.int64) * n_sessions + np.arange(n_sessions)
    size = n_groups * n_sessions
    flat = cell_et.ravel()
    sums = np.bincount(flat, weights=filled_et.ravel(), minlength=size)
    counts = np.bincount(flat, weights=is_there_et.ravel(), minlength=size)
    others = counts[cell_et] - is_there_et
    total = sums[cell_et] - filled_et
    all_others = is_there_et.sum(axis=0) - is_there_et
    all_total = filled_et.sum(axis=0) - filled_et
    is_alone_et = others == 0
    total = np.where(is_alone_et, all_total, total)
    others = np.where(is_alone_et, all_others, others)
    mean_et = np.divide(total, others, out=np.zeros(total.shape), where=others > 0)
    abnormal_et = (return_et if keep_missing else filled_et) - mean_et
    return abnormal_et, int((is_alone_et & is_there_et).sum())
