"""Hits of combinations against a null's rates, over combination-major triggers.

Triggers of combination c are positions ``offset_c[c] .. offset_c[c + 1] - 1`` of the flat arrays
(``entity, session, q, is_hit, is_left``), sorted by entity, then session.
"""

from __future__ import annotations

import math

import numpy as np

from miner.kernels.bits import ALL, ONE
from miner.kernels.compiling import kernel
from miner.kernels.margins import rate_at
from miner.kernels.tails import TINY, tail_table, upper_tail


@kernel
def is_set_at(bits_ew, e, t):
    """Whether bit ``t`` of row ``e`` is set."""
    return (bits_ew[e, t >> 6] >> np.uint64(t & 63)) & ONE != 0


@kernel
def look_up(entity, session, bits_ew):
    """Whether the bit of each cell (entity[i], session[i]) is set."""
    found = np.empty(entity.size, dtype=np.bool_)
    for i in range(entity.size):
        found[i] = is_set_at(bits_ew, entity[i], session[i])
    return found


@kernel
def keep_open(entity, session, open_ew, is_left):
    """Clear ``is_left`` where a cell is not open, in place."""
    for i in range(entity.size):
        if is_left[i] and not is_set_at(open_ew, entity[i], session[i]):
            is_left[i] = False


@kernel
def tally(row, offset_c, entity, session, rates, window_ew, is_left):
    """Triggers, hits, expected hits and variance of the combinations ``row``.

    ``rates`` is a fit (``margins.Rates``); ``is_left`` says of each trigger whether it counts, and
    is empty where all do. Returns int64 ``n, hits`` and float64 ``expected, variance``.
    """
    n = np.zeros(row.size, dtype=np.int64)
    hits = np.zeros(row.size, dtype=np.int64)
    expected = np.zeros(row.size)
    variance = np.zeros(row.size)
    counts_all = is_left.size == 0
    for i in range(row.size):
        n_i = 0
        hits_i = 0
        sum_i = 0.0
        var_i = 0.0
        for j in range(offset_c[row[i]], offset_c[row[i] + 1]):
            if counts_all or is_left[j]:
                e, t = entity[j], session[j]
                q = rate_at(e, t, rates)
                n_i += 1
                hits_i += is_set_at(window_ew, e, t)
                sum_i += q
                var_i += q * (1.0 - q)
        n[i], hits[i], expected[i], variance[i] = n_i, hits_i, sum_i, var_i
    return n, hits, expected, variance


@kernel
def row_rates(row, offset_c, entity, session, rates, is_left):
    """q of the triggers of one combination, those left only (``is_left`` as in ``tally``)."""
    first, last = offset_c[row], offset_c[row + 1]
    q = np.empty(last - first)
    n = 0
    for j in range(first, last):
        if is_left.size == 0 or is_left[j]:
            q[n] = rate_at(entity[j], session[j], rates)
            n += 1
    return q[:n]


@kernel
def p_values(row, offset_c, entity, session, rates, hits, is_left):
    """P(X >= hits) of the combinations ``row``; never 0: what is below 1e-300 is given as that."""
    p = np.ones(row.size)
    for i in range(row.size):
        if hits[i] > 0:
            q = row_rates(row[i], offset_c, entity, session, rates, is_left)
            p[i] = max(TINY, upper_tail(q, hits[i]))
    return p


@kernel
def log_tail_ranks(row, offset_c, entity, session, rates, hits_cr):
    """log P(X >= hits) for the drawn hits of each combination: float32 [rows, draws].

    ``hits_cr`` int32 [rows, draws]. The rates are the observed world's, for draws as for what was
    observed: a test by drawing is valid with any yardstick as long as it is the same for both.
    (One that follows each combination's draws gains power where events come in bursts, but takes
    the closed form at its word: noise then passed 38 % of hunts where base rates are high.)
    """
    n_rows, n_draws = hits_cr.shape
    log_p_cr = np.zeros((n_rows, n_draws), dtype=np.float32)
    every = np.empty(0, dtype=np.bool_)
    for i in range(n_rows):
        first = np.int64(hits_cr[i].min())
        last = np.int64(hits_cr[i].max())
        if last == 0:
            continue
        q = row_rates(row[i], offset_c, entity, session, rates, every)
        table = tail_table(q, first, last)
        for x in range(table.size):
            table[x] = math.log(max(table[x], TINY))
        for r in range(n_draws):
            log_p_cr[i, r] = table[hits_cr[i, r] - first]
    return log_p_cr


@kernel
def count_flags(offset_c, is_set):
    """Set flags of each combination's triggers: int64 [combinations]."""
    count_c = np.zeros(offset_c.size - 1, dtype=np.int64)
    for c in range(count_c.size):
        for j in range(offset_c[c], offset_c[c + 1]):
            count_c[c] += is_set[j]
    return count_c


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
def close_around(open_ew, entity, session, reach, n_sessions):
    """Close every cell within ``reach`` sessions of the given ones, in place."""
    for i in range(entity.size):
        first, last = max(0, session[i] - reach), min(n_sessions - 1, session[i] + reach)
        for w in range(first >> 6, (last >> 6) + 1):
            word = ALL
            if w == first >> 6:
                word &= ALL << np.uint64(first & 63)
            if w == last >> 6:
                word &= ALL >> np.uint64(63 - (last & 63))
            open_ew[entity[i], w] &= ~word


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
