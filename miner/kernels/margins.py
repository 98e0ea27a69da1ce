"""Rates of open cells with given row and column sums: q = u v / (1 + u v), or 1 - exp(-u v).

Rows are entities, columns are (peer group, session). Open cells come as *spells*: runs of
sessions on which an entity is open and stays in one peer group, sorted by entity.
"""

from __future__ import annotations

import numpy as np

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
def totals(spell_e, start_i, stop_i, group_i, is_window_et, n_groups):
    """Windows and open cells by row and by column.

    Returns int64 ``windows_e, cells_e`` [entities] and ``windows_gt, cells_gt`` [groups, sessions].
    """
    n_entities, n_sessions = is_window_et.shape
    windows_e = np.zeros(n_entities, dtype=np.int64)
    cells_e = np.zeros(n_entities, dtype=np.int64)
    windows_gt = np.zeros((n_groups, n_sessions), dtype=np.int64)
    cells_gt = np.zeros((n_groups, n_sessions), dtype=np.int64)
    for i in range(spell_e.size):
        e, g = spell_e[i], group_i[i]
        for t in range(start_i[i], stop_i[i]):
            cells_gt[g, t] += 1
            if is_window_et[e, t]:
                windows_e[e] += 1
                windows_gt[g, t] += 1
        cells_e[e] += stop_i[i] - start_i[i]
    return windows_e, cells_e, windows_gt, cells_gt


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
def add_to_columns(u, v_t, start_t, stop_t, is_hazard, sum_t, slope_t):
    """Add a run of cells' q, and its slope in log v, to the column sums in place."""
    if is_hazard:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            none = np.exp(-w)
            sum_t[t] += 1.0 - none
            slope_t[t] += w * none
    else:
        for t in range(start_t, stop_t):
            w = u * v_t[t]
            q = w / (1.0 + w)
            sum_t[t] += q
            slope_t[t] += q / (1.0 + w)


@kernel
def row_sweep(
    first_i,
    last_i,
    spell_e,
    start_i,
    stop_i,
    group_i,
    u_e,
    v_gt,
    target_e,
    is_hazard,
    sum_gt,
    slope_gt,
):
    """One Newton step of every row of a block, then the block's column sums with the new rows.

    q is u v / (1 + u v), or 1 - exp(-u v) where ``is_hazard``. Spells ``[first_i, last_i)`` hold
    whole entities. ``u_e`` is changed in place; ``sum_gt`` and ``slope_gt`` [groups, sessions]
    receive the sums of q and of its slope in log v. Returns the largest relative miss of a row
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
                add_to_columns(u, v_gt[g], start_i[m], stop_i[m], is_hazard, sum_gt[g], slope_gt[g])
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


@kernel
def cell_rates(
    entity, session, group_et, group_e, u_e, v_gt, row_order, col_order, is_hazard=False
):
    """q of the cells (entity[i], session[i]): float64, the shape of ``entity``.

    ``group_e`` is ``single_groups(group_et)``: it spares most cells a look into a large array.
    """
    q = np.empty(entity.size, dtype=np.float64)
    for i in range(entity.size):
        e, t = entity[i], session[i]
        g = group_e[e]
        if g < 0:
            g = group_et[e, t]
        row, col = row_order[e], col_order[g, t]
        if row == 0 and col == 0:
            w = u_e[e] * v_gt[g, t]
            q[i] = -np.expm1(-w) if is_hazard else w / (1.0 + w)
        elif col == 0 or (row != 0 and abs(row) < abs(col)):
            q[i] = 1.0 if row > 0 else 0.0
        else:
            q[i] = 1.0 if col > 0 else 0.0
    return q
