"""The margins null in closed form: entity totals and peer-session totals held on average."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import ndtr

from miner import workers
from miner.columns import HAZARD, ODDS
from miner.kernels import bits
from miner.kernels import hits as hit_kernels
from miner.kernels import margins as kernels
from miner.nulls import Judgement
from miner.open_cells import OpenCells, Spells
from miner.panel import Labels
from miner.triggers import TriggerTable
from miner.units import Case

CELLS_A_BLOCK = 1_000_000
ROWS_A_BLOCK = 64
ROWS_A_TALLY = 256
TOLERANCE = 1e-11
PATIENCE = 60  # sweeps after which cells that force the solution to infinity are looked for
MOST_SWEEPS = 2_000


@dataclass(frozen=True)
class Margins:
    """Fitted rates: ``rates(entity, session)`` is q of open cells.

    Attributes
    ----------
    peers : peer group of each cell
    odds_e, odds_gt : odds of rows and columns that were fitted
    row_order, col_order : rows and columns that are all or nothing (``kernels.settle_sure``)
    fixed : None, or bool [entities, sessions] twice: cells that have the same value in every
        table with these margins, and that value
    miss : float, largest relative difference between a fitted and an observed total
    n_sweeps : int, sweeps it took
    law : how an entity's and a date's share combine (``miner.columns``)
    """

    peers: Labels
    odds_e: np.ndarray
    odds_gt: np.ndarray
    row_order: np.ndarray
    col_order: np.ndarray
    fixed: tuple[np.ndarray, np.ndarray] | None
    miss: float
    n_sweeps: int
    law: str = ODDS

    @cached_property
    def table(self) -> kernels.Rates:
        """The fit as kernels take it."""
        none = np.zeros((0, 0), dtype=bool)
        return kernels.Rates(
            self.peers.code_et,
            self.peers.single_e,
            np.where(self.row_order == 0, self.odds_e, np.nan),
            np.where(self.col_order == 0, self.odds_gt, np.nan),
            self.row_order,
            self.col_order,
            self.law == HAZARD,
            self.fixed is not None,
            *(self.fixed or (none, none)),
        )

    def rates(self, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
        """Chance of an event window at each open cell: float64, the shape of ``entity``."""
        return kernels.cell_rates(entity, session, self.table)


def fit_margins(
    is_open_et: np.ndarray,
    is_window_et: np.ndarray,
    peers: Labels,
    start: Margins | None = None,
    n_workers: int = 1,
    law: str = ODDS,
) -> Margins:
    """``fit``, of boolean arrays [entities, sessions]."""
    cells = OpenCells(is_open_et, peers)
    return fit(cells, bits.pack_flags(is_window_et), start, n_workers, law)


def fit(
    cells: OpenCells,
    window_ew: np.ndarray,
    start: Margins | None = None,
    n_workers: int = 1,
    law: str = ODDS,
) -> Margins:
    """Rates whose row and column sums over open cells are the observed ones.

    With the law "odds", logit q(e, t) = a(e) + b(peer(e, t), t): the Rasch model, of maximum
    entropy, fitted by one Newton step of every row and of every column in turn (the log likelihood
    is concave). With "hazard", log(-log(1 - q)) is that sum: events that arrive at a rate that
    multiplies leave a window empty with chance exp(-u v). The two agree where windows are rare.
    Where the solution lies at infinity for some cells, those are found and held at their value.

    Parameters
    ----------
    window_ew : uint64 [entities, words], bit t: session t is in an event window
    start : a fit to begin from

    References
    ----------
    De Bie (2011), "Maximum entropy models and subjective interestingness", DMKD 23, sec. 3.
    """
    cells_e, cells_gt = cells.counts
    windows_e, windows_gt = cells.windows(window_ew)
    counts = windows_e, cells_e.copy(), windows_gt, cells_gt.copy()
    row_order, col_order = kernels.settle_sure(*cells.spells, *counts)
    is_row, is_col = row_order == 0, col_order == 0
    odds = _Odds(cells, counts, is_row, is_col, start, n_workers, law)
    fixed = None
    if not odds.fit(PATIENCE):
        is_window_et = bits.unpack(window_ew, cells.is_open_et.shape[1])
        is_free_et = _free_cells(cells.is_open_et, is_window_et, cells.peers, is_row, is_col)
        is_fixed_et = cells.is_open_et & ~is_free_et
        is_fixed_et[~is_row] = False
        is_fixed_et &= np.take_along_axis(is_col, cells.peers.code_et, axis=0)
        if is_fixed_et.any():
            fixed = is_fixed_et, is_window_et
            free = OpenCells(is_free_et, cells.peers)
            windows_e, windows_gt = free.windows(window_ew)
            counts = windows_e, free.counts[0], windows_gt, free.counts[1]
            is_row &= free.counts[0] > 0
            is_col &= free.counts[1] > 0
            odds = _Odds(free, counts, is_row, is_col, None, n_workers, law)
        odds.fit(MOST_SWEEPS)
    return Margins(
        cells.peers,
        odds.row,
        odds.column,
        row_order,
        col_order,
        fixed,
        odds.miss,
        odds.n_sweeps,
        law,
    )


class _Odds:
    """What rows and columns multiply to (odds, or a hazard), improved sweep by sweep.

    Rows that are open on the same cells with the same total have the same odds: one of each kind
    is fitted, and counts for all.
    """

    def __init__(
        self,
        cells: OpenCells,
        counts: tuple[np.ndarray, ...],
        is_row: np.ndarray,
        is_col: np.ndarray,
        start: Margins | None,
        n_workers: int,
        law: str,
    ) -> None:
        self.is_hazard = law == HAZARD
        windows_e, cells_e, windows_gt, cells_gt = counts
        self.is_col, self.n_workers = is_col, n_workers
        self.target_gt = np.where(is_col, windows_gt, 0).astype(np.float64)
        overall = windows_e[is_row].sum() / max(1, int(cells_e[is_row].sum()))
        row = windows_e / np.maximum(cells_e - windows_e, 1)
        column = windows_gt / np.maximum(cells_gt - windows_gt, 1) / max(overall, 1e-12)
        if start is not None:
            row = np.where(start.odds_e > 0, start.odds_e, row)
            column = np.where(start.odds_gt > 0, start.odds_gt, column)
        self.column = np.where(is_col, column, 0.0)
        self.order, self.kind = cells.like_rows(np.flatnonzero(is_row), windows_e)
        first = np.flatnonzero(np.diff(self.kind, prepend=-1))
        chosen = self.order[first]
        self.n_rows = is_row.size
        self.odds_k = row[chosen].astype(np.float64)
        self.weight_k = np.bincount(self.kind, minlength=chosen.size).astype(np.float64)
        self.target_k = windows_e[chosen].astype(np.float64)
        self.spells = _spells_of(cells, chosen)
        self.parts = _whole_rows(self.spells, CELLS_A_BLOCK)
        self.sums = [(np.empty(column.shape), np.empty(column.shape)) for _ in self.parts]
        self.miss, self.n_sweeps = 0.0, 0

    @property
    def row(self) -> np.ndarray:
        """Odds of every entity, 0 where it is not fitted."""
        odds_e = np.zeros(self.n_rows)
        odds_e[self.order] = self.odds_k[self.kind]
        return odds_e

    def fit(self, most_sweeps: int) -> bool:
        """Sweep until the totals agree; False if they do not within ``most_sweeps``."""
        if self.odds_k.size == 0:
            return True
        for _ in range(most_sweeps):
            self.n_sweeps += 1
            if len(self.parts) == 1:  # no threads for what takes no time
                misses = [self._sweep_rows(0)]
            else:
                misses = workers.in_order(self._sweep_rows, range(len(self.parts)), self.n_workers)
            sum_gt = np.add.reduce([part[0] for part in self.sums])
            var_gt = np.add.reduce([part[1] for part in self.sums])
            gap_gt = np.where(self.is_col, sum_gt - self.target_gt, 0.0)
            self.miss = max(
                *misses, float((np.abs(gap_gt) / np.maximum(self.target_gt, 1.0)).max())
            )
            if self.miss < TOLERANCE:
                return True
            step_gt = np.zeros_like(gap_gt)
            np.divide(gap_gt, var_gt, out=step_gt, where=var_gt > 0)
            self.column *= np.exp(np.clip(-step_gt, -kernels.MOST_STEP, kernels.MOST_STEP))
        return False

    def _sweep_rows(self, part: int) -> float:
        return kernels.row_sweep(
            *self.parts[part],
            *self.spells,
            self.odds_k,
            self.weight_k,
            self.column,
            self.target_k,
            self.is_hazard,
            *self.sums[part],
        )


def _free_cells(
    is_open_et: np.ndarray,
    is_window_et: np.ndarray,
    peers: Labels,
    is_row: np.ndarray,
    is_col: np.ndarray,
) -> np.ndarray:
    """Open cells of fitted rows and columns that can change without changing any margin.

    Draw an arrow from row to column where the cell is set and from column to row where it is not.
    Changing cells and keeping margins means turning round a cycle of arrows, so a cell is free
    exactly if its row and column are strongly connected.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    n_entities, n_sessions = is_open_et.shape
    entity, session = np.nonzero(is_open_et)
    group = peers.code_et[entity, session].astype(np.int64)
    kept = is_row[entity] & is_col[group, session]
    entity, session, group = entity[kept], session[kept], group[kept]
    column = n_entities + group * n_sessions + session
    is_set = is_window_et[entity, session]
    tail, head = np.where(is_set, entity, column), np.where(is_set, column, entity)
    n_nodes = n_entities + len(peers.names) * n_sessions
    arrows = coo_array((np.ones(tail.size, dtype=np.int8), (tail, head)), shape=(n_nodes, n_nodes))
    _, part = connected_components(arrows.tocsr(), directed=True, connection="strong")
    is_free_et = np.zeros(is_open_et.shape, dtype=bool)
    is_free = part[entity] == part[column]
    is_free_et[entity[is_free], session[is_free]] = True
    return is_free_et


def _spells_of(cells: OpenCells, entities: np.ndarray) -> Spells:
    """The spells of some entities, numbered from 0 in that order."""
    first, last = cells.spell_of_e[entities], cells.spell_of_e[entities + 1]
    n = last - first
    row = np.repeat(np.arange(entities.size, dtype=np.int32), n)
    within = np.arange(row.size) - np.repeat(np.cumsum(n) - n, n)
    place = np.repeat(first, n) + within
    _, start_t, stop_t, group = cells.spells
    return row, start_t[place], stop_t[place], group[place]


def _whole_rows(spells: Spells, n_cells: int) -> list[tuple[int, int]]:
    """Ranges of spells of about ``n_cells`` cells that hold whole rows."""
    row, start_t, stop_t, _ = spells
    if row.size == 0:
        return [(0, 0)]
    cells = np.cumsum(stop_t - start_t, dtype=np.int64)
    is_last = np.append(row[1:] != row[:-1], True)
    ends = np.flatnonzero(is_last) + 1
    block = cells[ends - 1] // n_cells
    stops = ends[np.append(block[1:] != block[:-1], True)]
    return list(zip([0, *stops[:-1].tolist()], stops.tolist(), strict=True))


ALL_LEFT = np.empty(0, dtype=bool)


def tally(
    table: TriggerTable,
    margins: Margins,
    window_ew: np.ndarray,
    is_left: np.ndarray = ALL_LEFT,
    n_workers: int = 1,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Triggers, hits, expected hits and variance of every combination of a table.

    Parameters
    ----------
    window_ew : uint64 [entities, words], the event windows as bits
    is_left : bool, one a trigger: whether it counts; empty where all do
    """
    n_rows = len(table.combos)

    def count(block: tuple[int, int]) -> tuple[np.ndarray, ...]:
        return hit_kernels.tally(
            np.arange(*block),
            table.offset_c,
            table.entity,
            table.session,
            margins.table,
            window_ew,
            is_left,
        )

    parts = workers.in_order(count, workers.blocks(n_rows, ROWS_A_TALLY), n_workers)
    if not parts:
        parts = [count((0, 0))]
    n, hits, expected, variance = (np.concatenate(part) for part in zip(*parts, strict=True))
    return n, hits, expected, variance


def judge_hits(
    rows: np.ndarray,
    table: TriggerTable,
    margins: Margins,
    hits: np.ndarray,
    is_left: np.ndarray = ALL_LEFT,
    n_workers: int = 1,
) -> np.ndarray:
    """P(X >= hits) of the combinations ``rows`` under a fit: float64 [rows]."""

    def judge(block: tuple[int, int]) -> np.ndarray:
        part = slice(*block)
        return hit_kernels.p_values(
            rows[part],
            table.offset_c,
            table.entity,
            table.session,
            margins.table,
            hits[part],
            is_left,
        )

    blocks = workers.blocks(rows.size, ROWS_A_BLOCK)
    return np.concatenate([np.empty(0), *workers.in_order(judge, blocks, n_workers)])


def cannot_pass(
    hits: np.ndarray, expected: np.ndarray, variance: np.ndarray, level: float
) -> np.ndarray:
    """Whether P(X >= hits) is surely above ``level``, without working it out: bool, the shape of
    ``hits``.

    Two sure bounds: the median lies within one of the mean (Jogdeo & Samuels 1968), and the
    normal tail is off by at most 0.56 / sd (Berry-Esseen with the constant of Shevtsova 2010; the
    third absolute moment of a Bernoulli variable is at most its variance).
    """
    spread = np.sqrt(np.maximum(variance, 1e-300))
    is_low = (hits <= np.floor(expected)) & (level < 0.5)
    return is_low | (ndtr(-(hits - expected) / spread) - 0.56 / spread > level)


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
        margins = fit(unit.cells, case.window_ew, None, n_workers, unit.segment.panel.law)
        _, hits, expected, _ = tally(table, margins, case.window_ew, n_workers=n_workers)
        p = judge_hits(rows, table, margins, hits[rows], n_workers=n_workers)
        return Judgement(expected[rows], p)
