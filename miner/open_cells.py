"""The cells a null is fitted over, and everything about them that does not depend on events."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner.kernels import margins as kernels
from miner.panel import Labels

Spells = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]


@dataclass(frozen=True)
class OpenCells:
    """Open cells in their peer groups: rows are entities, columns are (peer group, session).

    ``is_open_et`` bool [entities, sessions]; ``peers`` labels every one of its cells.
    """

    is_open_et: np.ndarray
    peers: Labels

    @cached_property
    def spells(self) -> Spells:
        """Entity, first session, session after the last, and peer group of every spell."""
        return kernels.find_spells(self.is_open_et, self.peers.code_et)

    @cached_property
    def counts(self) -> tuple[np.ndarray, np.ndarray]:
        """Open cells by row and by column: int64 [entities] and [groups, sessions]."""
        n_entities, n_sessions = self.is_open_et.shape
        return kernels.count_open(*self.spells, n_entities, len(self.peers.names), n_sessions)

    @cached_property
    def spell_of_e(self) -> np.ndarray:
        """Offsets of each entity's spells: int64 [entities + 1]."""
        n_entities = self.is_open_et.shape[0]
        return np.searchsorted(self.spells[0], np.arange(n_entities + 1)).astype(np.int64)

    @cached_property
    def mark_e(self) -> np.ndarray:
        """A number of each row that rows open on the same cells share: uint64 [entities]."""
        return kernels.row_marks(self.spell_of_e, *self.spells[1:])

    def windows(self, window_ew: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Of them, cells in an event window (bits ``window_ew``), as ``counts``."""
        n_sessions = self.is_open_et.shape[1]
        return kernels.count_windows(*self.spells, window_ew, len(self.peers.names), n_sessions)

    def like_rows(self, rows: np.ndarray, total_e: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Rows open on the same cells with the same total, which a fit cannot tell apart.

        Parameters
        ----------
        rows : int64, entities
        total_e : int64 [entities]

        Returns the rows sorted so that alike ones are neighbours, and a number of each, ascending
        from 0, that alike ones share.
        """
        order = rows[np.lexsort((rows, total_e[rows], self.mark_e[rows]))]
        number = kernels.like_rows(order, self.spell_of_e, *self.spells[1:])
        is_other = np.zeros(order.size, dtype=np.int64)
        is_other[1:] = (np.diff(number) > 0) | (np.diff(total_e[order]) != 0)
        return order, np.cumsum(is_other)
