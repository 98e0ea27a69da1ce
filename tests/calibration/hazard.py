"""Hands on the margins null with another link: rates of a hazard that multiplies.

The gate's rates have odds u(e) v(g, t). Events that arrive at a rate u(e) v(g, t) a session leave
a window empty with chance exp(-u v), so that q = 1 - exp(-u v); the two agree where windows are
rare and part where a busy name meets a busy session. Same margins, same cells, same Newton sweeps.
"""

from __future__ import annotations

import numpy as np

from miner.kernels import margins as kernels
from miner.kernels.compiling import kernel
from miner.units import Case

TOLERANCE = 1e-9
MOST_SWEEPS = 400


@kernel
def sweep(spell_e, start_i, stop_i, group_i, u_e, v_gt, target_e, target_gt, is_col_gt):
    """One Newton step of every row, then of every column; returns the largest relative miss."""
    worst = 0.0
    sum_gt = np.zeros(v_gt.shape)
    slope_gt = np.zeros(v_gt.shape)
    i = 0
    while i < spell_e.size:
        e = spell_e[i]
        j = i
        while j < spell_e.size and spell_e[j] == e:
            j += 1
        if u_e[e] > 0.0:
            total = 0.0
            slope = 0.0
            for m in range(i, j):
                for t in range(start_i[m], stop_i[m]):
                    if is_col_gt[group_i[m], t]:
                        w = u_e[e] * v_gt[group_i[m], t]
                        none = np.exp(-w)
                        total += 1.0 - none
                        slope += w * none
            miss = total - target_e[e]
            worst = max(worst, abs(miss) / target_e[e])
            u_e[e] *= np.exp(min(1.0, max(-1.0, -miss / max(slope, 1e-12))))
            for m in range(i, j):
                for t in range(start_i[m], stop_i[m]):
                    w = u_e[e] * v_gt[group_i[m], t]
                    none = np.exp(-w)
                    sum_gt[group_i[m], t] += 1.0 - none
                    slope_gt[group_i[m], t] += w * none
        i = j
    for g in range(v_gt.shape[0]):
        for t in range(v_gt.shape[1]):
            if is_col_gt[g, t]:
                miss = sum_gt[g, t] - target_gt[g, t]
                worst = max(worst, abs(miss) / target_gt[g, t])
                v_gt[g, t] *= np.exp(min(1.0, max(-1.0, -miss / max(slope_gt[g, t], 1e-12))))
    return worst


def hazard_rates(case: Case, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
    """q = 1 - exp(-u v) at open cells of the case, fitted to its margins: float64 [cells]."""
    unit = case.unit
    peers = unit.segment.panel.peers
    spells = unit.cells.spells
    windows_e, windows_gt = unit.cells.windows(case.window_ew)
    cells_e, cells_gt = (part.copy() for part in unit.cells.counts)
    row_order, col_order = kernels.settle_sure(*spells, windows_e, cells_e, windows_gt, cells_gt)
    is_row, is_col = row_order == 0, col_order == 0
    u_e = np.where(is_row, -np.log1p(-windows_e / np.maximum(cells_e, windows_e + 1)), 0.0)
    v_gt = np.where(is_col, -np.log1p(-windows_gt / np.maximum(cells_gt, windows_gt + 1)), 0.0)
    v_gt /= max(float(u_e[is_row].mean()) if is_row.any() else 1.0, 1e-12)
    target_e = np.where(is_row, windows_e, 1).astype(float)
    target_gt = np.where(is_col, windows_gt, 1).astype(float)
    for _ in range(MOST_SWEEPS):
        if sweep(*spells, u_e, v_gt, target_e, target_gt, is_col) < TOLERANCE:
            break
    group = peers.code_et[entity, session]
    row, column = row_order[entity], col_order[group, session]
    # of a cell's row and column the one that was settled first decides
    is_by_row = (column == 0) | ((row != 0) & (np.abs(row) < np.abs(column)))
    sure = np.where(is_by_row, row, column) > 0
    rates = -np.expm1(-u_e[entity] * v_gt[group, session])
    return np.where((row == 0) & (column == 0), rates, sure.astype(float))
