"""Triggers of combinations, and the label-blind family: what could be reported at all."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner import workers
from miner.errors import SettingsError, explain
from miner.kernels import triggers as kernels
from miner.panel import Panel
from miner.time_split import Segment

Combo = tuple[int, ...]

ENTITIES_A_BLOCK = 64
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

    def until(self, stop_t: int, min_triggers: int) -> TriggerTable:
        """The table as it stood before session ``stop_t``: what had enough triggers by then."""
        is_before = self.session < stop_t
        count_c = np.add.reduceat(np.append(is_before, False), self.offset_c[:-1], dtype=np.int64)
        is_kept_c = count_c >= max(min_triggers, 1)
        is_kept = is_before & np.repeat(is_kept_c, self.count_c)
        return TriggerTable(
            tuple(combo for combo, kept in zip(self.combos, is_kept_c, strict=True) if kept),
            np.concatenate([[0], np.cumsum(count_c[is_kept_c])]).astype(np.int64),
            self.entity[is_kept],
            self.session[is_kept],
        )


def no_triggers() -> TriggerTable:
    """A table of no combination."""
    empty = np.empty(0, dtype=np.int32)
    return TriggerTable((), np.zeros(1, dtype=np.int64), empty, empty)


def _rows(combos: Sequence[Combo]) -> tuple[np.ndarray, np.ndarray]:
    """Combinations of one size as the kernel takes them: sorted rows and where prefixes change."""
    combo_ck = np.array(combos, dtype=np.int64)
    n, size = combo_ck.shape
    jump_ck = np.empty((n, size), dtype=np.int64)
    changes = np.zeros(n, dtype=bool)  # row differs from the one before in its first d + 1 types
    changes[0] = True
    for d in range(size):
        changes[1:] |= combo_ck[1:, d] != combo_ck[:-1, d]
        starts = np.append(np.flatnonzero(changes), n)
        jump_ck[:, d] = starts[np.searchsorted(starts, np.arange(n), side="right")]
    return combo_ck, jump_ck


Stream = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]


def _find(
    segment: Segment,
    combos: Sequence[Combo],
    lookback: int,
    rest: int,
    horizon: int,
    n_workers: int,
) -> list[Stream]:
    """Eligible triggers of combinations of one size, block by block of entities."""
    panel = segment.panel
    combo_ck, jump_ck = _rows(combos)
    first_t, stop_t = max(segment.first, lookback - 1), segment.last - horizon + 1

    def find(block: tuple[int, int]) -> Stream:
        part = slice(*block)
        return kernels.find_triggers(
            panel.alert_ekw[part],
            panel.cover_eqw[part],
            panel.class_k,
            combo_ck,
            jump_ck,
            block[0],
            lookback,
            rest,
            first_t,
            stop_t,
        )

    return workers.in_order(find, workers.blocks(panel.n_entities, ENTITIES_A_BLOCK), n_workers)


def _in_stratum(panel: Panel, stratum_code: int | None, stream: Stream) -> np.ndarray | None:
    if stratum_code is None or panel.strata is None:
        return None
    return panel.strata.code_et[stream[1], stream[2]] == stratum_code


def _table(
    levels: list[tuple[Sequence[Combo], list[Stream]]],
    panel: Panel,
    stratum_code: int | None,
    min_triggers: int,
) -> TriggerTable:
    """One stratum's table, of the combinations with enough triggers in it."""
    combos: list[Combo] = []
    counts: list[np.ndarray] = []
    kept_levels = []
    for level, streams in levels:
        masks = [_in_stratum(panel, stratum_code, stream) for stream in streams]
        count_c = np.zeros(len(level), dtype=np.int64)
        for stream, mask in zip(streams, masks, strict=True):
            chosen = stream[0] if mask is None else stream[0][mask]
            count_c += np.bincount(chosen, minlength=len(level))
        is_kept = count_c >= min_triggers
        kept_levels.append((streams, masks, is_kept))
        combos += [combo for combo, kept in zip(level, is_kept, strict=True) if kept]
        counts.append(count_c[is_kept])
    offset_c = np.concatenate([[0], np.cumsum(np.concatenate(counts))]).astype(np.int64)
    entity = np.empty(offset_c[-1], dtype=np.int32)
    session = np.empty(offset_c[-1], dtype=np.int32)
    next_c = offset_c[:-1].copy()
    n_before = 0
    for streams, masks, is_kept in kept_levels:
        row_c = np.where(is_kept, n_before + np.cumsum(is_kept) - 1, -1)
        n_before += int(is_kept.sum())
        for (combo, e, t, _), mask in zip(streams, masks, strict=True):
            if mask is not None:
                combo, e, t = combo[mask], e[mask], t[mask]
            kernels.scatter(combo, e, t, row_c, next_c, entity, session)
    return TriggerTable(tuple(combos), offset_c, entity, session)


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
    levels: list[tuple[Sequence[Combo], list[Stream]]] = []
    level: list[Combo] = [(k,) for k in range(len(segment.panel.type_names))]
    for size in range(1, max_size + 1):
        if not level:
            break
        streams = _find(segment, level, lookback, rest, horizon, n_workers)
        levels.append((level, streams))
        if size < max_size:
            on_count_c = np.sum([stream[3] for stream in streams], axis=0)
            level = _grow(
                [level[c] for c in np.flatnonzero(on_count_c >= min_triggers)], MOST_COMBINATIONS
            )
    return {
        name: _table(levels, segment.panel, code, min_triggers)
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
    wanted = sorted(set(combos), key=lambda combo: (len(combo), combo))
    levels: list[tuple[Sequence[Combo], list[Stream]]] = []
    for size in sorted({len(combo) for combo in wanted}):
        level = [combo for combo in wanted if len(combo) == size]
        levels.append((level, _find(segment, level, lookback, rest, horizon, n_workers)))
    if not levels:
        return no_triggers()
    return _table(levels, segment.panel, stratum_code, 0)
