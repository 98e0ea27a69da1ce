"""Triggers of combinations, and the label-blind family: what could be reported at all."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner import workers
from miner.errors import SettingsError, explain
from miner.kernels import triggers as kernels
from miner.memory_estimate import Growing
from miner.panel import Panel
from miner.time_split import Segment

Combo = tuple[int, ...]

BLOCKS = 32
MOST_COMBINATIONS = 5_000_000


@dataclass(frozen=True)
class TriggerTable:
    """Triggers by combination: those of ``combos[c]`` are at ``offset_c[c] .. offset_c[c + 1]``.

    ``entity`` and ``session`` are int32, sorted by entity, then session, within a combination;
    combinations are sorted by size, then by their types.
    """

    combos: tuple[Combo, ...]
    offset_c: np.ndarray
    entity: np.ndarray
    session: np.ndarray

    @property
    def count_c(self) -> np.ndarray:
        """Triggers of each combination."""
        return np.diff(self.offset_c)

    def of(self, row: int) -> tuple[np.ndarray, np.ndarray]:
        """Entity and session of one combination's triggers."""
        part = slice(self.offset_c[row], self.offset_c[row + 1])
        return self.entity[part], self.session[part]

    @property
    def trigger_combo(self) -> np.ndarray:
        """Row of ``combos`` of every trigger."""
        return np.repeat(np.arange(len(self.combos)), self.count_c)

    @cached_property
    def combo_ck(self) -> np.ndarray:
        """The combinations' types, padded with -1: int64 [combinations, largest size]."""
        size = max(map(len, self.combos), default=1)
        padded = [combo + (-1,) * (size - len(combo)) for combo in self.combos]
        return np.array(padded, dtype=np.int64).reshape(-1, size)

    def until(self, stop_t: int, min_triggers: int, n_workers: int = 1) -> TriggerTable:
        """The table as it stood before session ``stop_t``: what had enough triggers by then."""
        n_rows = len(self.combos)
        count_c = np.zeros(n_rows, dtype=np.int64)
        parts = workers.blocks(n_rows, -(-max(n_rows, 1) // BLOCKS))

        def count(part: tuple[int, int]) -> None:
            first, last = part
            kernels.count_before(
                self.offset_c[first : last + 1], self.session, stop_t, count_c[first:last]
            )

        workers.in_order(count, parts, n_workers)
        rows = np.flatnonzero(count_c >= max(min_triggers, 1))
        offset_c = _offsets(count_c[rows])
        entity = np.empty(offset_c[-1], dtype=np.int32)
        session = np.empty(offset_c[-1], dtype=np.int32)

        def take(part: tuple[int, int]) -> None:
            mine = slice(*np.searchsorted(rows, part))
            kernels.take_before(
                rows[mine],
                self.offset_c,
                self.entity,
                self.session,
                stop_t,
                offset_c[:-1][mine],
                entity,
                session,
            )

        workers.in_order(take, parts, n_workers)
        return TriggerTable(tuple(self.combos[row] for row in rows), offset_c, entity, session)


def _offsets(counts: np.ndarray) -> np.ndarray:
    """Where each of parts of these sizes starts when they are joined, and the end: int64."""
    return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)


def no_triggers() -> TriggerTable:
    """A table of no combination."""
    empty = np.empty(0, dtype=np.int32)
    return TriggerTable((), np.zeros(1, dtype=np.int64), empty, empty)


@dataclass(frozen=True)
class _Tree:
    """Combinations sorted by size, then by types, with the leading part of each among them."""

    nodes: tuple[Combo, ...]
    type_n: np.ndarray
    child_n: np.ndarray
    n_roots: int
    size: int


def _tree(combos: Sequence[Combo]) -> _Tree:
    """The tree of combinations, their leading parts added where they are missing."""
    parts = {combo[:d] for combo in combos for d in range(1, len(combo) + 1)}
    nodes = tuple(sorted(parts, key=lambda combo: (len(combo), combo)))
    count_n = np.zeros(len(nodes), dtype=np.int64)
    place = {node: n for n, node in enumerate(nodes)}
    for node in nodes:
        if len(node) > 1:
            count_n[place[node[:-1]]] += 1
    n_roots = sum(len(node) == 1 for node in nodes)
    return _Tree(
        nodes,
        np.array([node[-1] for node in nodes], dtype=np.int32),
        n_roots + _offsets(count_n),
        n_roots,
        max(map(len, nodes), default=0),
    )


Stream = tuple[np.ndarray, np.ndarray, np.ndarray]


def _find(
    segment: Segment, tree: _Tree, lookback: int, rest: int, horizon: int, n_workers: int
) -> list[Stream]:
    """Eligible triggers of a tree's combinations, block by block of entities."""
    panel = segment.panel
    first_t, stop_t = max(segment.first, lookback - 1), segment.last - horizon + 1

    blocks = _entity_blocks(panel)
    growing = Growing(len(blocks))

    def find(block: tuple[int, int]) -> Stream:
        part = slice(*block)
        stream: Stream = kernels.find_triggers(
            panel.alert_ekw[part],
            panel.cover_eqw[part],
            panel.class_k,
            tree.type_n,
            tree.child_n,
            tree.n_roots,
            tree.size,
            block[0],
            lookback,
            rest,
            first_t,
            stop_t,
        )
        growing.add(stream[0].size)
        return stream

    return workers.in_order(find, blocks, n_workers)


def _entity_blocks(panel: Panel) -> list[tuple[int, int]]:
    return workers.blocks(panel.n_entities, max(16, -(-panel.n_entities // BLOCKS)))


def _table(
    tree: _Tree,
    streams: Sequence[Stream],
    panel: Panel,
    stratum_code: int | None,
    is_wanted: np.ndarray | None,
    min_triggers: int,
    n_workers: int,
) -> TriggerTable:
    """One stratum's table, of the wanted combinations with enough triggers in it."""
    labels = panel.peers if stratum_code is None or panel.strata is None else panel.strata
    label = -1 if stratum_code is None or panel.strata is None else stratum_code
    n_nodes = len(tree.nodes)

    def count(stream: Stream) -> np.ndarray:
        return kernels.count_triggers(*stream, labels.code_et, label, panel.n_sessions, n_nodes)

    counts = workers.in_order(count, streams, n_workers)  # none where there is no entity
    count_bn = np.array(counts, dtype=np.int64).reshape(-1, n_nodes)
    count_n = count_bn.sum(axis=0)
    is_kept = count_n >= min_triggers
    if is_wanted is not None:
        is_kept &= is_wanted
    rows = np.flatnonzero(is_kept)
    offset_c = _offsets(count_n[rows])
    # each block writes its triggers of a combination after those of the blocks before it
    next_bn = np.full(count_bn.shape, -1, dtype=np.int64)
    next_bn[:, rows] = offset_c[:-1] + np.cumsum(count_bn[:, rows], axis=0) - count_bn[:, rows]
    entity = np.empty(offset_c[-1], dtype=np.int32)
    session = np.empty(offset_c[-1], dtype=np.int32)

    def sort(b: int) -> None:
        kernels.scatter(*streams[b], labels.code_et, label, next_bn[b], entity, session)

    workers.in_order(sort, range(len(streams)), n_workers)
    return TriggerTable(tuple(tree.nodes[n] for n in rows), offset_c, entity, session)


def _on_counts(panel: Panel, combos: Sequence[Combo], lookback: int, n_workers: int) -> np.ndarray:
    """Sessions on which each of combinations of one size (sorted) is on: int64."""
    combo_ck = np.array(combos, dtype=np.int64)

    def count(block: tuple[int, int]) -> np.ndarray:
        return kernels.count_on(panel.alert_ekw[slice(*block)], lookback, combo_ck)

    return np.sum(workers.in_order(count, _entity_blocks(panel), n_workers), axis=0)


def _grow(combos: Sequence[Combo], max_types: int) -> list[Combo]:
    """Combinations one type larger, all of whose parts are in ``combos`` (sorted)."""
    known = set(combos)
    grown: list[Combo] = []
    start = 0
    while start < len(combos):
        stop = start
        while stop < len(combos) and combos[stop][:-1] == combos[start][:-1]:
            stop += 1
        for i in range(start, stop):
            for j in range(i + 1, stop):
                combo = (*combos[i], combos[j][-1])
                if all(combo[:d] + combo[d + 1 :] in known for d in range(len(combo) - 2)):
                    grown.append(combo)
            if len(grown) > max_types:
                raise SettingsError(
                    explain(
                        "study",
                        "mining",
                        f"leave at most {max_types:,} combinations of one size to look at",
                        f"more than that of size {len(grown[0])}",
                        "Raise min_triggers, lower max_size, or hunt with fewer alert types.",
                    )
                )
        start = stop
    return grown


def find_family(
    segment: Segment,
    stratum_codes: dict[str, int | None],
    *,
    lookback: int,
    horizon: int,
    rest: int,
    max_size: int,
    min_triggers: int,
    n_workers: int = 1,
) -> dict[str, TriggerTable]:
    """The family of each stratum: every combination with at least ``min_triggers`` triggers.

    Events are never looked at. A combination is on for no more sessions than any part of it, and
    has no more triggers than sessions on, so parts that are on too rarely are not grown.

    Parameters
    ----------
    stratum_codes : stratum name -> code in ``panel.strata``, None for all entities together

    Raises
    ------
    SettingsError : more combinations of one size than can be looked at
    """
    panel = segment.panel
    level: list[Combo] = [(k,) for k in range(len(panel.type_names))]
    combos = list(level)
    for _ in range(1, max_size):
        if not level:
            break
        on_count_c = _on_counts(panel, level, lookback, n_workers)
        level = _grow(
            [level[c] for c in np.flatnonzero(on_count_c >= min_triggers)], MOST_COMBINATIONS
        )
        combos += level
    tree = _tree(combos)
    streams = _find(segment, tree, lookback, rest, horizon, n_workers)
    return {
        name: _table(tree, streams, panel, code, None, min_triggers, n_workers)
        for name, code in stratum_codes.items()
    }


def find_triggers(
    segment: Segment,
    combos: Sequence[Combo],
    stratum_code: int | None,
    *,
    lookback: int,
    horizon: int,
    rest: int,
    n_workers: int = 1,
) -> TriggerTable:
    """Eligible triggers of given combinations, in sorted order, however few they are."""
    if not combos:
        return no_triggers()
    tree = _tree(combos)
    wanted = set(combos)
    is_wanted = np.array([node in wanted for node in tree.nodes])
    streams = _find(segment, tree, lookback, rest, horizon, n_workers)
    return _table(tree, streams, segment.panel, stratum_code, is_wanted, 0, n_workers)
