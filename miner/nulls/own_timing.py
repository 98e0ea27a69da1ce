"""The own-timing null: each entity's alert history shifted in a circle inside its own life."""

from __future__ import annotations

import numpy as np

from miner import workers
from miner.kernels import margins as margin_kernels
from miner.kernels import shifts as kernels
from miner.nulls import Judgement
from miner.units import Case

ROWS_A_BLOCK = 64


class OwnTimingNull:
    """Without drawing: hits of every shift by entity, their laws joined over entities.

    The circle of an entity for a combination is the cells on which the combination is eligible,
    joined end to end; its triggers go round together, all shifts equally likely, entities apart.
    """

    name = "own-timing"
    holds = (
        "each entity's events, and its alerts' pattern; when that pattern began, in the entity's "
        "own life, is random"
    )

    def judge(self, case: Case, rows: np.ndarray, n_workers: int = 1) -> Judgement:
        """Judge the combinations ``rows`` of ``case.unit.triggers``."""
        table = case.unit.triggers
        hits = case.hits_c[rows]
        expected = np.zeros(rows.size)
        p = np.ones(rows.size)
        by_classes: dict[tuple[int, ...], list[int]] = {}
        for i, row in enumerate(rows):
            by_classes.setdefault(case.unit.classes_of(table.combos[row]), []).append(i)
        for classes, members in by_classes.items():
            is_life_et = case.unit.is_eligible_et(classes)
            is_window_et = case.is_window_et & is_life_et
            share_e = is_window_et.sum(axis=1) / np.maximum(is_life_et.sum(axis=1), 1)
            place = np.array(members)
            expected[place] = [share_e[table.of(row)[0]].sum() for row in rows[place]]
            p[place] = self._p_values(
                case, rows[place], hits[place], is_life_et, is_window_et, n_workers
            )
        return Judgement(expected, p)

    def _p_values(
        self,
        case: Case,
        rows: np.ndarray,
        hits: np.ndarray,
        is_life_et: np.ndarray,
        is_window_et: np.ndarray,
        n_workers: int,
    ) -> np.ndarray:
        n_entities, n_sessions = is_life_et.shape
        table = case.unit.triggers
        alone = np.zeros((n_entities, n_sessions), dtype=np.int16)
        entity, start_t, stop_t, _ = margin_kernels.find_spells(is_life_et, alone)
        life_e = np.searchsorted(entity, np.arange(n_entities + 1)).astype(np.int64)
        window_entity, window_t = np.nonzero(is_window_et)
        window_e = np.searchsorted(window_entity, np.arange(n_entities + 1)).astype(np.int64)
        circles = kernels.rings(life_e, start_t, stop_t, window_e, window_t.astype(np.int32))

        def judge(block: tuple[int, int]) -> np.ndarray:
            part = slice(*block)
            return kernels.shift_p_values(
                rows[part],
                table.offset_c,
                table.entity,
                table.session,
                hits[part],
                life_e,
                start_t,
                stop_t,
                np.diff(window_e),
                *circles,
            )

        blocks = workers.blocks(rows.size, ROWS_A_BLOCK)
        return np.concatenate([np.empty(0), *workers.in_order(judge, blocks, n_workers)])
