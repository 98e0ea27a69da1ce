"""The margins null by permutation: events of one peer group exchange their sessions."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner import workers
from miner.kernels import exchanges as kernels
from miner.nulls import Judgement
from miner.panel import Events
from miner.seeds import stream
from miner.units import Case
from miner.workers import Progress, silent

DRAWS_A_BLOCK = 512
BURN_IN = 10


@dataclass(frozen=True)
class Exchanger:
    """Worlds of a case in which every entity keeps its number of events and every peer group its
    number on each session.

    Swap randomisation (Gionis, Mannila, Mielikainen & Tsaparas 2007). Each block of 512 draws is a
    chain of its own, seeded by its number, that starts from the observed world, is run ``BURN_IN``
    sweeps and then kept once a sweep; a sweep lets every event propose one exchange.
    """

    case: Case
    seed: int
    purpose: str

    @cached_property
    def _pools(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        entity, session = self.case.events
        slot = self.case.unit.slot_et[entity, session]
        _, pool_v = np.unique(slot, return_inverse=True)
        pool_v = pool_v.astype(np.int32)
        start = np.concatenate([[0], np.cumsum(np.bincount(pool_v))]).astype(np.int64)
        return pool_v, start, np.argsort(pool_v, kind="stable").astype(np.int32)

    @cached_property
    def first_event_e(self) -> np.ndarray:
        """Offsets of each entity's events: int64 [entities + 1]."""
        n_entities = self.case.unit.segment.panel.n_entities
        counts = np.bincount(self.case.events[0], minlength=n_entities)
        return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)

    def sessions(self, block: int, n_keep: int = DRAWS_A_BLOCK, between: int = 1) -> np.ndarray:
        """Sessions of the events in the draws of one block: int32 [draws, events]."""
        entity, session = self.case.events
        rng = stream(self.seed, "exchange", self.purpose, *self.case.name, block)
        n_sweeps = BURN_IN + n_keep * between
        random_nv = rng.integers(0, 1 << 32, size=(n_sweeps, entity.size), dtype=np.uint32)
        kept = kernels.exchange(
            session,
            entity,
            *self._pools,
            self.case.unit.slot_et,
            random_nv,
            n_keep * between,
        )
        return kept[between - 1 :: between]

    def worlds(self, n_worlds: int) -> Iterator[Events]:
        """Whole worlds, far apart in their chain."""
        entity, _ = self.case.events
        for first in range(0, n_worlds, DRAWS_A_BLOCK):
            n_keep = min(DRAWS_A_BLOCK, n_worlds - first)
            for drawn in self.sessions(first // DRAWS_A_BLOCK, n_keep, between=5):
                order = np.lexsort((drawn, entity))
                yield entity[order], drawn[order]

    def hits(self, n_draws: int, n_workers: int = 1, progress: Progress = silent) -> np.ndarray:
        """Hits of every combination of the case in each draw: int32 [draws, combinations]."""
        unit = self.case.unit
        table = unit.triggers
        n_planes = max(4, int(table.count_c.max(initial=1)).bit_length())

        def count(block: tuple[int, int]) -> np.ndarray:
            drawn = self.sessions(block[0] // DRAWS_A_BLOCK)[: block[1] - block[0]]
            return kernels.count_hits(
                drawn,
                self.first_event_e,
                table.offset_c,
                table.entity,
                table.session,
                unit.horizon,
                unit.segment.panel.n_sessions,
                n_planes,
            )

        blocks = workers.blocks(n_draws, DRAWS_A_BLOCK)
        parts = workers.in_order(count, blocks, n_workers, "exchanging sessions", progress)
        empty = np.empty((len(table.combos), 0), dtype=np.int32)
        return np.concatenate([empty, *parts], axis=1).T


class ExchangesNull:
    """The margins null with the margins held exactly, drawn; joint over all combinations."""

    name = "exchanges"
    holds = (
        "each entity's number of events, and each peer group's number on each session, exactly; "
        "which entity had which date is random"
    )

    def __init__(self, n_draws: int, seed: int) -> None:
        self.n_draws = n_draws
        self.seed = seed

    def judge(self, case: Case, rows: np.ndarray, n_workers: int = 1) -> Judgement:
        """p = (1 + draws with at least the observed hits) / (1 + draws)."""
        hits_rc = Exchanger(case, self.seed, "judge").hits(self.n_draws, n_workers)[:, rows]
        exceed = (hits_rc >= case.hits_c[rows]).sum(axis=0)
        return Judgement(hits_rc.mean(axis=0), (1 + exceed) / (1 + self.n_draws))
