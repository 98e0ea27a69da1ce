"""Hits of combinations against a null's rates, over combination-major triggers.

Triggers of combination c are positions ``offset_c[c] .. offset_c[c + 1] - 1`` of the flat arrays
(``entity, session, q, is_hit, is_left``), sorted by entity, then session.
"""

from __future__ import annotations

import numpy as np

from miner.kernels.compiling import kernel
from miner.kernels.tails import TINY, upper_tail


@kernel
def look_up(entity, session, is_set_et):
    """``is_set_et`` at each cell (entity[i], session[i])."""
    found = np.empty(entity.size, dtype=np.bool_)
    for i in range(entity.size):
        found[i] = is_set_et[entity[i], session[i]]
    return found


@kernel
def tally(row, offset_c, q, is_hit, is_left):
    """Triggers, hits, expected hits and variance of the combinations ``row``.

    Returns int64 ``n, hits`` and float64 ``expected, variance``, one entry a row.
    """
    n = np.zeros(row.size, dtype=np.int64)
    hits = np.zeros(row.size, dtype=np.int64)
    expected = np.zeros(row.size)
    variance = np.zeros(row.size)
    for i in range(row.size):
        for j in range(offset_c[row[i]], offset_c[row[i] + 1]):
            if is_left[j]:
                n[i] += 1
                hits[i] += is_hit[j]
                expected[i] += q[j]
                variance[i] += q[j] * (1.0 - q[j])
    return n, hits, expected, variance


@kernel
def p_values(row, offset_c, q, hits, is_left):
    """P(X >= hits) of the combinations ``row``; never 0: what is below 1e-300 is given as that."""
    p = np.ones(row.size)
    for i in range(row.size):
        if hits[i] > 0:
            first, last = offset_c[row[i]], offset_c[row[i] + 1]
            p[i] = max(TINY, upper_tail(q[first:last][is_left[first:last]], hits[i]))
    return p


@kernel
def near_any(entity, session, mark_entity, mark_session, reach):
    """Whether each cell lies within ``reach`` sessions of a mark on its entity.

    Both lists are sorted by entity, then session.
    """
    is_near = np.zeros(entity.size, dtype=np.bool_)
    j = 0
    for i in range(entity.size):
        while j < mark_entity.size and (
            mark_entity[j] < entity[i]
            or (mark_entity[j] == entity[i] and mark_session[j] < session[i] - reach)
        ):
            j += 1
        is_near[i] = (
            j < mark_entity.size
            and mark_entity[j] == entity[i]
            and mark_session[j] <= session[i] + reach
        )
    return is_near


@kernel
def close_around(is_open_et, entity, session, reach):
    """Close every cell within ``reach`` sessions of the given ones, in place."""
    n_sessions = is_open_et.shape[1]
    for i in range(entity.size):
        first, last = max(0, session[i] - reach), min(n_sessions - 1, session[i] + reach)
        for t in range(first, last + 1):
            is_open_et[entity[i], t] = False


@kernel
def cluster_sums(row, offset_c, entity, session, is_hit, block_sessions, n_sessions):
    """Sums of squared residual totals by entity, by date block, and by entity-and-block cell.

    Returns float64 ``square_e, square_d, square_x`` and int64 ``n_e, n_d, n_x`` (numbers of
    clusters of each kind), one entry a row; residuals are hit minus the row's own precision.
    """
    n_rows = row.size
    square_e, square_d, square_x = np.zeros(n_rows), np.zeros(n_rows), np.zeros(n_rows)
    n_e = np.zeros(n_rows, dtype=np.int64)
    n_d = np.zeros(n_rows, dtype=np.int64)
    n_x = np.zeros(n_rows, dtype=np.int64)
    n_blocks = (n_sessions + block_sessions - 1) // block_sessions
    sum_d = np.zeros(n_blocks)
    count_d = np.zeros(n_blocks, dtype=np.int64)
    for i in range(n_rows):
        first, last = offset_c[row[i]], offset_c[row[i] + 1]
        if first == last:
            continue
        sum_d[:] = 0.0
        count_d[:] = 0
        n_hits = 0
        for j in range(first, last):
            n_hits += is_hit[j]
        mean = n_hits / (last - first)
        sum_e = 0.0
        sum_x = 0.0
        for j in range(first, last):
            d = session[j] // block_sessions
            if j == first or entity[j] != entity[j - 1]:
                square_e[i] += sum_e * sum_e
                sum_e = 0.0
                n_e[i] += 1
                square_x[i] += sum_x * sum_x
                sum_x = 0.0
                n_x[i] += 1
            elif d != session[j - 1] // block_sessions:
                square_x[i] += sum_x * sum_x
                sum_x = 0.0
                n_x[i] += 1
            r = is_hit[j] - mean
            sum_e += r
            sum_x += r
            sum_d[d] += r
            count_d[d] += 1
        square_e[i] += sum_e * sum_e
        square_x[i] += sum_x * sum_x
        for d in range(n_blocks):
            square_d[i] += sum_d[d] * sum_d[d]
            n_d[i] += count_d[d] > 0
    return square_e, square_d, square_x, n_e, n_d, n_x
