"""Which alert types come together more than busy names and busy days explain.

When a type arrives (a trigger of it alone), is another there, with an alert in the look-back that
ends on that session? What is expected holds, for the other type, how often each entity has it in
its look-back and how often each peer group has it on each session: the margins null, with alerts
in the place of events. No event is looked at.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner import workers
from miner.evidence.tables import within
from miner.kernels import bits
from miner.kernels import hits as hit_kernels
from miner.kernels import triggers as trigger_kernels
from miner.nulls.margins import fit, tally
from miner.open_cells import OpenCells
from miner.panel import Panel
from miner.triggers import TriggerTable

MOST_ARRIVALS = 20_000


@dataclass(frozen=True)
class Together:
    """Arrivals of one type (row) that find another there (column): arrays [types, types].

    Attributes
    ----------
    arrivals : int64, arrivals of the row's type where the column's is covered
    seen : int64, of those, with the column's type in the look-back
    expected, variance : float64, under the null; NaN on the diagonal
    """

    arrivals: np.ndarray
    seen: np.ndarray
    expected: np.ndarray
    variance: np.ndarray

    @property
    def ratio(self) -> np.ndarray:
        """Seen over expected, NaN where nothing is expected."""
        ratio = np.full(self.expected.shape, np.nan)
        return np.divide(self.seen, self.expected, out=ratio, where=self.expected > 0)

    @property
    def excess(self) -> np.ndarray:
        """Seen less expected in standard deviations, NaN where nothing is open."""
        excess = np.full(self.expected.shape, np.nan)
        spread = np.sqrt(self.variance)
        return np.divide(self.seen - self.expected, spread, out=excess, where=spread > 0)


def together(panel: Panel, singles: TriggerTable, lookback: int, n_workers: int = 1) -> Together:
    """Co-occurrence of all types.

    ``singles`` holds the triggers of each type alone, in order of type, wherever its own type is
    covered. Of a type with more than 20,000 every so many-th is looked at.
    """
    n_types = len(panel.type_names)
    singles = _thinned(singles)

    open_eqw = panel.cover_eqw.copy()
    open_eqw[:, :, : (lookback - 1) >> 6] = 0
    open_eqw[:, :, (lookback - 1) >> 6] &= bits.ALL << np.uint64((lookback - 1) & 63)
    cells_of: dict[int, OpenCells] = {}  # types covered alike share theirs

    def column(k: int) -> tuple[np.ndarray, ...]:
        q = int(panel.class_k[k])
        open_ew = np.ascontiguousarray(open_eqw[:, q])
        if q not in cells_of:
            cells_of[q] = OpenCells(bits.unpack(open_ew, panel.n_sessions), panel.peers)
        on_ew = _kept_on(np.ascontiguousarray(panel.alert_ekw[:, k]), lookback)
        margins = fit(cells_of[q], on_ew, law=panel.law)
        is_asked = hit_kernels.look_up(singles.entity, singles.session, open_ew)
        return tally(singles, margins, on_ew, is_asked)

    columns = workers.in_order(column, range(n_types), n_workers)
    parts = [np.stack(part, axis=1) for part in zip(*columns, strict=True)]
    for part in parts[2:]:
        np.fill_diagonal(part, np.nan)
    return Together(*parts)


def _thinned(table: TriggerTable) -> TriggerTable:
    """At most ``MOST_ARRIVALS`` triggers of each combination, evenly taken."""
    step_c = -(-table.count_c // MOST_ARRIVALS)
    place = np.arange(table.entity.size) - np.repeat(table.offset_c[:-1], table.count_c)
    is_kept = place % np.repeat(np.maximum(step_c, 1), table.count_c) == 0
    return within(table, is_kept)


def _kept_on(alert_ew: np.ndarray, lookback: int) -> np.ndarray:
    """Each row's bits kept on for ``lookback`` sessions."""
    on_ew = np.empty_like(alert_ew)
    trigger_kernels.smear(alert_ew, lookback, on_ew)
    return on_ew
