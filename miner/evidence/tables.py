"""Cuts of a trigger table: some of its rows, some of its triggers."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from miner.panel import Panel
from miner.triggers import TriggerTable


def part_of(table: TriggerTable, row: int) -> slice:
    """Where a row's triggers stand in the table's arrays."""
    return slice(table.offset_c[row], table.offset_c[row + 1])


def with_rows(table: TriggerTable, rows: Sequence[int]) -> TriggerTable:
    """Some rows of a table, in the order given."""
    parts = [part_of(table, row) for row in rows]
    empty = np.empty(0, dtype=np.int32)
    return TriggerTable(
        tuple(table.combos[row] for row in rows),
        np.concatenate([[0], np.cumsum(table.count_c[list(rows)], dtype=np.int64)]),
        np.concatenate([empty, *(table.entity[part] for part in parts)]),
        np.concatenate([empty, *(table.session[part] for part in parts)]),
    )


def within(table: TriggerTable, is_kept: np.ndarray) -> TriggerTable:
    """The triggers of a table for which ``is_kept`` (bool, one a trigger), every row kept."""
    count_c = np.bincount(table.trigger_combo[is_kept], minlength=len(table.combos))
    offset_c = np.concatenate([[0], np.cumsum(count_c, dtype=np.int64)])
    return TriggerTable(table.combos, offset_c, table.entity[is_kept], table.session[is_kept])


def in_stratum(table: TriggerTable, panel: Panel, code: int | None) -> TriggerTable:
    """The triggers of a table in one stratum (``code`` in ``panel.strata``, None: all)."""
    if code is None or panel.strata is None:
        return table
    return within(table, panel.strata.code_et[table.entity, table.session] == code)
