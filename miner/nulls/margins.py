"""The margins null in closed form: entity totals and peer-session totals held on average."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner import workers
from miner.kernels import hits as hit_kernels
from miner.kernels import margins as kernels
from miner.nulls import Judgement
from miner.panel import Labels
from miner.units import Case

CELLS_A_BLOCK = 1_000_000
ROWS_A_BLOCK = 64
TOLERANCE = 1e-11
MOST_SWEEPS = 2_000


@dataclass(frozen=True)
class Margins:
    """Fitted rates: ``rates(entity, session)`` is q of open cells.

    Attributes
    ----------
    miss : float, largest relative difference between a fitted and an observed total
    n_sweeps : int, sweeps it took
    n_sure_entities, n_sure_columns : int, rows and columns whose cells are all or nothing
    """

    peers: Labels
    odds_e: np.ndarray
    odds_gt: np.ndarray
    row_order: np.ndarray
    col_order: np.ndarray
    miss: float
    n_sweeps: int

    def rates(self, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
        """Chance of an event window at each open cell: float64, the shape of ``entity``."""
        return kernels.cell_rates(
            entity, session, self.peers.code_et, self.odds_e, self.odds_gt, self.row_order, self.col_order
        )


def fit_margins(
    is_open_et: np.ndarray,
    is_window_et: np.ndarray,
    peers: Labels,
    start: Margins | None = None,
    n_workers: int = 1,
) -> Margins:
    """Maximum-entropy rates whose row and column sums over open cells are the observed ones.

    logit q(e, t) = a(e) + b(peer(e, t), t): the Rasch model, fitted by maximum likelihood, one
    Newton step of every row and of every column in turn (the log likelihood is concave).

    Parameters
    ----------
    is_open_et, is_window_et : bool [entities, sessions]
    start : a fit to begin from

    References
    ----------
    De Bie (2011), "Maximum entropy models and subjective interestingness", DMKD 23, sec. 3.
    """
    n_groups = len(peers.names)
    spells = kernels.find_spells(is_open_et, peers.code_et)
    windows_e, cells_e, windows_gt, cells_gt = kernels.totals(*spells, is_window_et, n_groups)
    row_order, col_order = kernels.settle_sure(*spells, windows_e, cells_e, windows_gt, cells_gt)
    is_row, is_col = row_order == 0, col_order == 0
    target_e = np.where(is_row, windows_e, 1).astype(np.float64)
    target_gt = np.where(is_col, windows_gt, 0).astype(np.float64)

    n_open = max(1, int(cells_e[is_row].sum()))
    overall = windows_e[is_row].sum() / n_open
    share_e = windows_e / np.maximum(cells_e, 1)
    share_gt = windows_gt / np.maximum(cells_gt, 1)
    odds_e = np.where(is_row, share_e / np.maximum(1 - share_e, 1e-9), 0.0)
    odds_gt = np.where(is_col, share_gt / np.maximum(1 - share_gt, 1e-9) / max(overall, 1e-12), 0.0)
    if start is not None:
        odds_e = np.where(is_row & (start.odds_e > 0), start.odds_e, odds_e)
        odds_gt = np.where(is_col & (start.odds_gt > 0), start.odds_gt, odds_gt)

    parts = _whole_entities(spells, CELLS_A_BLOCK)
    sums = [(np.empty(odds_gt.shape), np.empty(odds_gt.shape)) for _ in parts]

    def sweep(i: int) -> float:
        return kernels.row_sweep(*parts[i], *spells, odds_e, odds_gt, target_e, *sums[i])

    miss, n_sweeps = 0.0, 0
    if is_row.any():
        while n_sweeps < MOST_SWEEPS:
            n_sweeps += 1
            miss = max(workers.in_order(sweep, range(len(parts)), n_workers))
            sum_gt = np.add.reduce([part[0] for part in sums])
            var_gt = np.add.reduce([part[1] for part in sums])
            gap_gt = np.where(is_col, sum_gt - target_gt, 0.0)
            miss = max(miss, float((np.abs(gap_gt) / np.maximum(target_gt, 1.0)).max()))
            if miss < TOLERANCE:
                break
            step_gt = np.zeros_like(gap_gt)
            np.divide(gap_gt, var_gt, out=step_gt, where=var_gt > 0)
            odds_gt *= np.exp(np.clip(-step_gt, -2.0, 2.0))
    return Margins(peers, odds_e, odds_gt, row_order, col_order, miss, n_sweeps)


def _whole_entities(spells: tuple[np.ndarray, ...], n_cells: int) -> list[tuple[int, int]]:
    """Ranges of spells of about ``n_cells`` cells that hold whole entities."""
    entity, start_t, stop_t, _ = spells
    if entity.size == 0:
        return [(0, 0)]
    cells = np.cumsum(stop_t - start_t, dtype=np.int64)
    is_last = np.append(entity[1:] != entity[:-1], True)
    ends = np.flatnonzero(is_last) + 1
    block = cells[ends - 1] // n_cells
    stops = ends[np.append(block[1:] != block[:-1], True)]
    return list(zip([0, *stops[:-1].tolist()], stops.tolist(), strict=True))


def judge_hits(
    rows: np.ndarray,
    offset_c: np.ndarray,
    rates: np.ndarray,
    hits: np.ndarray,
    is_left: np.ndarray,
    n_workers: int = 1,
) -> np.ndarray:
    """P(X >= hits) of combinations whose triggers have the given rates: float64 [rows]."""

    def judge(block: tuple[int, int]) -> np.ndarray:
        part = slice(*block)
        return hit_kernels.p_values(rows[part], offset_c, rates, hits[part], is_left)

    blocks = workers.blocks(rows.size, ROWS_A_BLOCK)
    return np.concatenate([np.empty(0), *workers.in_order(judge, blocks, n_workers)])


class MarginsNull:
    """The gate. Hits are Poisson-binomial with the fitted rates of the combination's triggers."""

    name = "margins"
    holds = (
        "how often each entity is in an event window, and how often each peer group is on each "
        "session, on average; which entity had which date is random"
    )

    def judge(self, case: Case, rows: np.ndarray, n_workers: int = 1) -> Judgement:
        """Judge the combinations ``rows`` of ``case.unit.triggers``."""
        unit, table = case.unit, case.unit.triggers
        margins = fit_margins(
            unit.is_open_et, case.is_window_et, unit.segment.panel.peers, n_workers=n_workers
        )
        rates = margins.rates(table.entity, table.session)
        is_left = np.ones(rates.size, dtype=bool)
        _, hits, expected, _ = hit_kernels.tally(rows, table.offset_c, rates, case.is_hit, is_left)
        p = judge_hits(rows, table.offset_c, rates, hits, is_left, n_workers)
        return Judgement(expected, p)
