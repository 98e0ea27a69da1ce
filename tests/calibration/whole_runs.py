"""Hands on a trial form of the permutation null: whole runs of event windows change places.

Events of one entity closer than the horizon share part of their windows. Exchanging single events
tears such runs apart, and the drawn worlds then hold more window cells than the observed one. Here
runs of equal length and peer group exchange their places instead, so that every entity keeps its
number of window cells and every peer group its number on each session, exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner.kernels.compiling import kernel
from miner.kernels.margins import find_spells
from miner.nulls.exchanges import BURN_IN
from miner.seeds import stream
from miner.units import Case


@kernel
def exchange_runs(
    start_v, length_v, entity_v, first_e, pool_v, pool_start, member, room_et, random_nv, n_keep
):
    """As the exchange of single events, for runs of ``length_v`` cells that must not touch.

    ``room_et`` int32 [entities, sessions]: open cells of the same peer group from here on without
    a break, so that a run of n cells fits where it is at least n. Peer groups must not change
    within a life: a run may move to any place of its pool where it fits.
    """
    n_sweeps, n_runs = random_nv.shape
    now_v = start_v.copy()
    kept = np.empty((n_keep, n_runs), dtype=np.int32)
    for n in range(n_sweeps):
        for i in range(n_runs):
            size = np.uint64(pool_start[pool_v[i] + 1] - pool_start[pool_v[i]])
            j = member[
                pool_start[pool_v[i]]
                + np.int64((np.uint64(random_nv[n, i]) * size) >> np.uint64(32))
            ]
            a, b = entity_v[i], entity_v[j]
            s, u = now_v[i], now_v[j]
            if a == b or s == u or room_et[a, u] < length_v[i] or room_et[b, s] < length_v[j]:
                continue
            is_free = True
            for side in range(2):
                e = a if side == 0 else b
                place = u if side == 0 else s
                own = i if side == 0 else j
                length = length_v[own]
                for v in range(first_e[e], first_e[e + 1]):
                    if v != own and now_v[v] <= place + length and place <= now_v[v] + length_v[v]:
                        is_free = False
                        break
            if is_free:
                now_v[i] = u
                now_v[j] = s
        if n >= n_sweeps - n_keep:
            kept[n - (n_sweeps - n_keep)] = now_v
    return kept


@kernel
def count_run_hits(start_rv, length_v, entity_v, n_entities, n_sessions, offset_c, entity, session):
    """Hits of every combination in each draw: int32 [draws, combinations]."""
    n_draws, n_runs = start_rv.shape
    hits_rc = np.zeros((n_draws, offset_c.size - 1), dtype=np.int32)
    for r in range(n_draws):
        is_window_et = np.zeros((n_entities, n_sessions), dtype=np.bool_)
        for v in range(n_runs):
            for t in range(start_rv[r, v], start_rv[r, v] + length_v[v]):
                is_window_et[entity_v[v], t] = True
        for c in range(offset_c.size - 1):
            for j in range(offset_c[c], offset_c[c + 1]):
                hits_rc[r, c] += is_window_et[entity[j], session[j]]
    return hits_rc


@dataclass(frozen=True)
class RunExchanger:
    """Worlds of a case in which whole runs of window cells of equal length exchange places."""

    case: Case
    seed: int

    @cached_property
    def runs(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Runs of open window cells within one peer group: entity, start, length, group."""
        is_set_et = self.case.is_window_et & self.case.unit.is_open_et
        entity, start, stop, group = find_spells(
            is_set_et, self.case.unit.segment.panel.peers.code_et
        )
        return entity, start, stop - start, group

    def starts(self, n_draws: int) -> np.ndarray:
        """First sessions of the runs in each of ``n_draws`` draws of one chain."""
        entity, start, length, group = self.runs
        n_entities = self.case.unit.is_open_et.shape[0]
        _, pool_v = np.unique(group.astype(np.int64) * 100_000 + length, return_inverse=True)
        random_nv = stream(self.seed, "whole runs").integers(
            0, 1 << 32, (BURN_IN + n_draws, entity.size), dtype=np.uint32
        )
        return exchange_runs(
            start,
            length,
            entity,
            np.searchsorted(entity, np.arange(n_entities + 1)).astype(np.int64),
            pool_v.astype(np.int32),
            np.concatenate([[0], np.cumsum(np.bincount(pool_v))]).astype(np.int64),
            np.argsort(pool_v, kind="stable").astype(np.int32),
            self._room(),
            random_nv,
            n_draws,
        )

    def hits(self, n_draws: int) -> np.ndarray:
        """Hits of every combination in each draw: int32 [draws, combinations]."""
        entity, _, length, _ = self.runs
        table = self.case.unit.triggers
        return count_run_hits(
            self.starts(n_draws),
            length,
            entity,
            *self.case.unit.is_open_et.shape,
            table.offset_c,
            table.entity,
            table.session,
        )

    def _room(self) -> np.ndarray:
        peers = self.case.unit.segment.panel.peers.code_et
        entity, start, stop, _ = find_spells(self.case.unit.is_open_et, peers)
        room = np.zeros(peers.shape, dtype=np.int32)
        for e, first, last in zip(entity, start, stop, strict=True):
            room[e, first:last] = np.arange(last - first, 0, -1)
        return room
