"""Rates of open cells with given row and column sums: q = u v / (1 + u v), or 1 - exp(-u v).

Rows are entities, columns are (peer group, session). Open cells come as *spells*: runs of
sessions on which an entity is open and stays in one peer group, sorted by entity.
"""

from __future__ import annotations

from collections import namedtuple

import numpy as np

from miner.kernels.bits import ALL, ONE, lowest_bit, popcount
from miner.kernels.compiling import kernel, summing_kernel

MOST_STEP = 1.5  # of a logarithm, in one Newton step
TINY = 1e-300


@kernel
def find_spells(is_open_et, group_et):
    """Spells of the open cells: int32 arrays entity, start_t, stop_t, group."""
    n_entities, n_sessions = is_open_et.shape
    n = 0
    for e in range(n_entities):
        for t in range(n_sessions):
            if is_open_et[e, t] and (
                t == 0 or not is_open_et[e, t - 1] or group_et[e, t] != group_et[e, t - 1]
            ):
                n += 1
    entity = np.empty(n, dtype=np.int32)
    start_t = np.empty(n, dtype=np.int32)
    stop_t = np.empty(n, dtype=np.int32)
    group = np.empty(n, dtype=np.int32)
    i = -1
    for e in range(n_entities):
        for t in range(n_sessions):
            if is_open_et[e, t]:
                if t == 0 or not is_open_et[e, t - 1] or group_et[e, t] != group_et[e, t - 1]:
                    i += 1
                    entity[i], start_t[i], group[i] = e, t, group_et[e, t]
                stop_t[i] = t + 1
    return entity, start_t, stop_t, group


@kernel
def count_open(spell_e, start_i, stop_i, group_i, n_entities, n_groups, n_sessions):
    """Open cells by row and by column: int64 [entities] and [groups, sessions]."""
    cells_e = np.zeros(n_entities, dtype=np.int64)
    cells_gt = np.zeros((n_groups, n_sessions + 1), dtype=np.int64)
    for i in range(spell_e.size):
        cells_e[spell_e[i]] += stop_i[i] - start_i[i]
        cells_gt[group_i[i], start_i[i]] += 1
        cells_gt[group_i[i], stop_i[i]] -= 1
    for g in range(n_groups):
        for t in range(1, n_sessions + 1):
            cells_gt[g, t] += cells_gt[g, t - 1]
    return cells_e, cells_gt[:, :n_sessions].copy()


@kernel
def count_windows(spell_e, start_i, stop_i, group_i, window_ew, n_groups, n_sessions):
    """Open cells in an event window by row and by column: int64 [entities], [groups, sessions]."""
    windows_e = np.zeros(window_ew.shape[0], dtype=np.int64)
    windows_gt = np.zeros((n_groups, n_sessions), dtype=np.int64)
    for i in range(spell_e.size):
        e, g = spell_e[i], group_i[i]
        first, last = start_i[i] >> 6, (stop_i[i] - 1) >> 6
        for w in range(first, last + 1):
            word = window_ew[e, w]
            if word == 0:
                continue
            if w == first:
                word &= ALL << np.uint64(start_i[i] & 63)
            if w == last:
                word &= ALL >> np.uint64(63 - ((stop_i[i] - 1) & 63))
            windows_e[e] += np.int64(popcount(word))
            while word:
                windows_gt[g, (w << 6) + np.int64(lowest_bit(word))] += 1
                word &= word - ONE
    return windows_e, windows_gt


@kernel
def like_rows(order, spell_of_e, start_i, stop_i, group_i):
    """Number the rows of ``order`` so that rows open on the same cells share a number.

    ``order`` lists entities so that alike ones are neighbours; ``spell_of_e`` int64 [entities + 1]
    are offsets into the spells. Returns int64, one an entry of ``order``, ascending from 0.
    """
    number = np.zeros(order.size, dtype=np.int64)
    for j in range(1, order.size):
        a, b = spell_of_e[order[j - 1]], spell_of_e[order[j]]
        n = spell_of_e[order[j] + 1] - b
        is_same = n == spell_of_e[order[j - 1] + 1] - a
        i = 0
        while is_same and i < n:
            is_same = (
                start_i[a + i] == start_i[b + i]
                and stop_i[a + i] == stop_i[b + i]
                and group_i[a + i] == group_i[b + i]
            )
            i += 1
        number[j] = number[j - 1] + (not is_same)
    return number


@kernel
def row_marks(spell_of_e, start_i, stop_i, group_i):
    """A number of each row's spells, the same for rows open on the same cells: uint64 [entities].

    FNV-1a over the spells (Fowler, Noll & Vo); rows that differ may rarely share one.
    """
    mark_e = np.full(spell_of_e.size - 1, np.uint64(14695981039346656037))
    for e in range(mark_e.size):
        for i in range(spell_of_e[e], spell_of_e[e + 1]):
            for part in (start_i[i], stop_i[i], group_i[i]):
                mark_e[e] = (mark_e[e] ^ np.uint64(part)) * np.uint64(1099511628211)
    return mark_e


@kernel
def settle_sure(spell_e, start_i, stop_i, group_i, windows_e, cells_e, windows_gt, cells_gt):
    """Take out rows and columns that are all or nothing, until none is left.

    A row without a window has q = 0, one that is all windows q = 1; likewise columns; each taken
    out changes what is left of the others. The four counts are reduced in place to what is left.

    Returns ``row_order, col_order``: int32, 0 where the row (column) is left to be fitted, else
    the round it went, positive for q = 1 and negative for q = 0. Of a cell's row and column the
    one that went first decides.
    """
    n_entities = windows_e.size
    n_groups, n_sessions = windows_gt.shape
    row_order = np.zeros(n_entities, dtype=np.int32)
    col_order = np.zeros((n_groups, n_sessions), dtype=np.int32)
    step = 0
    while True:
        # rows first, then columns: within one half-round no two decisions can disagree
        step += 1
        any_row = False
        for e in range(n_entities):
            if row_order[e] == 0 and (windows_e[e] == 0 or windows_e[e] == cells_e[e]):
                row_order[e] = -step if windows_e[e] == 0 else step
                any_row = True
        if any_row:
            for i in range(spell_e.size):
                e, g = spell_e[i], group_i[i]
                if abs(row_order[e]) == step:
                    for t in range(start_i[i], stop_i[i]):
                        if col_order[g, t] == 0:
                            cells_gt[g, t] -= 1
                            if row_order[e] > 0:
                                windows_gt[g, t] -= 1
        step += 1
        any_col = False
        for g in range(n_groups):
            for t in range(n_sessions):
                if col_order[g, t] == 0 and (
                    windows_gt[g, t] == 0 or windows_gt[g, t] == cells_gt[g, t]
                ):
                    col_order[g, t] = -step if windows_gt[g, t] == 0 else step
                    any_col = True
        if any_col:
            for i in range(spell_e.size):
                e, g = spell_e[i], group_i[i]
                if row_order[e] == 0:
                    for t in range(start_i[i], stop_i[i]):
                        if abs(col_order[g, t]) == step:
                            cells_e[e] -= 1
                            if col_order[g, t] > 0:
                                windows_e[e] -= 1
        if not any_col:
            return row_order, col_order


@summing_kernel
def row_sums(u, v_t, start_t, stop_t, is_hazard):
    """Sums over a run of cells of q and of its slope in log u."""
    total = 0.0
    slope = 0.0
    if is_hazard:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            none = np.exp(-w)
            total += 1.0 - none
            slope += w * none
    else:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            q = w / (1.0 + w)
            total += q
            slope += q / (1.0 + w)
    return total, slope


@summing_kernel
def add_to_columns(u, weight, v_t, start_t, stop_t, is_hazard, sum_t, slope_t):
    """Add ``weight`` times a run of cells' q, and its slope in log v, to the sums in place."""
    if is_hazard:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            none = np.exp(-w)
            sum_t[t] += weight * (1.0 - none)
            slope_t[t] += weight * w * none
    else:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            q = w / (1.0 + w)
            sum_t[t] += weight * q
            slope_t[t] += weight * q / (1.0 + w)


@kernel
def row_sweep(
    first_i,
    last_i,
    spell_e,
    start_i,
    stop_i,
    group_i,
    u_e,
    weight_e,
    v_gt,
    target_e,
    is_hazard,
    sum_gt,
    slope_gt,
):
    """One Newton step of every row of a block, then the block's column sums with the new rows.

    q is u v / (1 + u v), or 1 - exp(-u v) where ``is_hazard``. Spells ``[first_i, last_i)`` hold
    whole rows; each row stands for ``weight_e`` entities. ``u_e`` is changed in place; ``sum_gt``
    and ``slope_gt`` [groups, sessions] receive the sums of q and of its slope in log v. Returns the
    largest relative miss of a row
    before its step.
    """
    sum_gt[:] = 0.0
    slope_gt[:] = 0.0
    worst = 0.0
    i = first_i
    while i < last_i:
        e = spell_e[i]
        j = i
        while j < last_i and spell_e[j] == e:
            j += 1
        u = u_e[e]
        if u > 0.0:
            total = 0.0
            slope = 0.0
            for m in range(i, j):
                run_total, run_slope = row_sums(
                    u, v_gt[group_i[m]], start_i[m], stop_i[m], is_hazard
                )
                total += run_total
                slope += run_slope
            miss = total - target_e[e]
            worst = max(worst, abs(miss) / target_e[e])
            u *= np.exp(min(MOST_STEP, max(-MOST_STEP, -miss / max(slope, TINY))))
            u_e[e] = u
            for m in range(i, j):
                g = group_i[m]
                add_to_columns(
                    u,
                    weight_e[e],
                    v_gt[g],
                    start_i[m],
                    stop_i[m],
                    is_hazard,
                    sum_gt[g],
                    slope_gt[g],
                )
        i = j
    return worst


@kernel
def single_groups(group_et):
    """The group of each entity that is in one throughout, else -1: int16 [entities]."""
    group_e = np.empty(group_et.shape[0], dtype=np.int16)
    for e in range(group_et.shape[0]):
        group_e[e] = group_et[e, 0]
        for t in range(1, group_et.shape[1]):
            if group_et[e, t] != group_et[e, 0]:
                group_e[e] = -1
                break
    return group_e


Rates = namedtuple(
    "Rates",
    "group_et, group_e, u_e, v_gt, row_order, col_order, is_hazard, has_fixed, is_fixed_et, "
    "value_et",
)
"""A fit as kernels take it: ``u_e`` and ``v_gt`` are NaN in rows and columns that are all or
nothing (``settle_sure`` gives their orders); ``group_e`` is ``single_groups(group_et)`` and spares
most cells a look into a large array; with ``has_fixed`` the cells ``is_fixed_et`` have the value
``value_et``."""


@kernel
def rate_at(e, t, rates):
    """q of one cell."""
    g = np.int64(rates.group_e[e])
    if g < 0:
        g = np.int64(rates.group_et[e, t])
    if rates.has_fixed and rates.is_fixed_et[e, t]:
        return 1.0 if rates.value_et[e, t] else 0.0
    w = rates.u_e[e] * rates.v_gt[g, t]
    if w == w:
        return -np.expm1(-w) if rates.is_hazard else w / (1.0 + w)
    row, col = rates.row_order[e], rates.col_order[g, t]
    if col == 0 or (row != 0 and abs(row) < abs(col)):
        return 1.0 if row > 0 else 0.0
    return 1.0 if col > 0 else 0.0


@kernel
def cell_rates(entity, session, rates):
    """q of the cells (entity[i], session[i]): float64, the shape of ``entity``."""
    q = np.empty(entity.size, dtype=np.float64)
    for i in range(entity.size):
        q[i] = rate_at(entity[i], session[i], rates)
    return q
