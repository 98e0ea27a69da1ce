"""Moves of one price series: from one extreme to the next, and from one close to the next."""

from __future__ import annotations

import math

import numpy as np

from miner.kernels.compiling import kernel


@kernel
def trailing_volatility(return_i, window):
    """Standard deviation (n - 1) of the ``window`` returns before each: NaN where there are fewer.

    ``return_i`` float64 [returns]; the result has the same length.
    """
    out = np.full(return_i.size, np.nan)
    for i in range(window, return_i.size):
        mean = 0.0
        for j in range(i - window, i):
            mean += return_i[j]
        mean /= window
        square = 0.0
        for j in range(i - window, i):
            square += (return_i[j] - mean) ** 2
        out[i] = math.sqrt(square / (window - 1))
    return out


@kernel
def moves(return_i, epsilon_i):
    """Cut a series of returns into moves between extremes.

    A move starts with the first return after the last extreme and is followed to its own extreme;
    it ends there once the counter-move from the extreme exceeds ``epsilon_i`` at its start
    (strictly). Returns add up (log returns). The last move is unfinished. Moves are sought from
    the first return that has an epsilon and is not 0; equal extremes: the later one counts.

    Parameters
    ----------
    return_i, epsilon_i : float64 [returns]; NaN in ``epsilon_i``: none known for a start there

    Returns
    -------
    start, stop : int64 [moves], half-open positions of the returns that make up the move
    known : int64 [moves], position of the return that ended it; -1 for the unfinished last one
    size : float64 [moves], sum of its returns, negative for moves down
    """
    n = return_i.size
    start = np.empty(n, dtype=np.int64)
    stop = np.empty(n, dtype=np.int64)
    known = np.empty(n, dtype=np.int64)
    size = np.empty(n)
    n_moves = 0
    i = 0
    while i < n and (np.isnan(epsilon_i[i]) or return_i[i] == 0.0):
        i += 1
    while i < n:
        sign = 1.0 if return_i[i] > 0.0 else -1.0
        level = sign * return_i[i]
        best, best_at, end = level, i, -1
        for j in range(i + 1, n):
            level += sign * return_i[j]
            if level >= best:
                best, best_at = level, j
            elif best - level > epsilon_i[i]:
                end = j
                break
        start[n_moves], stop[n_moves], known[n_moves] = i, best_at + 1, end
        size[n_moves] = sign * best
        n_moves += 1
        if end < 0:
            break
        i = best_at + 1
    return start[:n_moves], stop[:n_moves], known[:n_moves], size[:n_moves]
