"""Discovery: every case's candidates, judged by the margins null and adjusted over the family."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner import workers
from miner.adjust import benjamini_hochberg, benjamini_yekutieli, step_down_min_p
from miner.event_windows import types_before_events
from miner.kernels import hits as hit_kernels
from miner.nulls.exchanges import Exchanger
from miner.nulls.margins import (
    ROWS_A_BLOCK,
    Margins,
    cannot_pass,
    fit,
    judge_hits,
    tally,
)
from miner.proposals import count_windows, propose
from miner.units import Case
from miner.workers import Progress, silent

FEW_APART = 10
DRAWS_A_BLOCK = 128
TIE = 0.01  # drawn log p-values are interpolated and rounded by less: within it, a tie


@dataclass(frozen=True)
class Found:
    """A case with its family judged. Arrays are over the family (``case.unit.triggers``).

    Attributes
    ----------
    n_proposed : int, combinations frequent before events, in the family or not
    is_proposed : bool [family]
    margins : the fitted null
    hits, expected, variance, p : observed hits and what the null says; p = 1 if not proposed
    """

    case: Case
    n_proposed: int
    is_proposed: np.ndarray
    margins: Margins
    hits: np.ndarray
    expected: np.ndarray
    variance: np.ndarray
    p: np.ndarray

    @property
    def rows(self) -> np.ndarray:
        """Family rows of the candidates: proposed and in the family."""
        return np.flatnonzero(self.is_proposed)

    @property
    def size(self) -> int:
        """Size of the case's family."""
        return self.is_proposed.size

    def rates_of(self, row: int) -> np.ndarray:
        """The null's rate at each trigger of one combination: float64."""
        return self.margins.rates(*self.case.unit.triggers.of(row))


def find(
    case: Case,
    *,
    min_hits: int,
    max_size: int,
    start: Margins | None = None,
    by_mining: bool = True,
    level: float | None = None,
    n_workers: int = 1,
) -> Found:
    """Propose combinations from the pre-event windows and judge them by the margins null.

    Parameters
    ----------
    start : margins of a similar case, to begin the fit from
    by_mining : False counts the family's members over the windows instead of mining them, with
        the same result for the family; ``n_proposed`` then counts family members only
    level : give p = 1 to what is surely above this level, instead of working it out
    """
    combos = case.unit.triggers.combos
    is_seen_vk = types_before_events(case)
    if by_mining:
        proposals = propose(is_seen_vk, min_hits, max_size)
        is_proposed = np.array([combo in proposals for combo in combos], dtype=bool)
        n_proposed = len(proposals)
    else:
        is_proposed = count_windows(is_seen_vk, case.unit.triggers.combo_ck) >= min_hits
        n_proposed = int(is_proposed.sum())
    table, panel = case.unit.triggers, case.unit.segment.panel
    margins = fit(case.unit.cells, case.window_ew, start, n_workers, panel.law)
    _, hits, expected, variance = tally(table, margins, case.window_ew, n_workers=n_workers)
    p = np.ones(len(combos))
    rows = np.flatnonzero(is_proposed)
    asked = hits[rows]
    if level is not None:
        sure = cannot_pass(asked, expected[rows], variance[rows], level)
        asked = np.where(sure, 0, asked)
    p[rows] = judge_hits(rows, table, margins, asked, n_workers=n_workers)
    return Found(case, n_proposed, is_proposed, margins, hits, expected, variance, p)


class Adjuster:
    """One adjustment over the whole family of a run: all targets and strata together.

    ``adjust`` is "bh", "by" or "westfall-young"; the last needs drawn p-values
    (``draw``), in the order of ``found``.
    """

    def __init__(
        self, found: Sequence[Found], adjust: str, log_p_cr: Sequence[np.ndarray] | None = None
    ) -> None:
        self.sizes = [f.size for f in found]
        self.family = sum(self.sizes)
        self.adjust = adjust
        self._null_cr = None if log_p_cr is None else np.concatenate(log_p_cr)

    def adjusted(self, p: Sequence[np.ndarray], adjust: str | None = None) -> list[np.ndarray]:
        """Adjusted p-values, case by case, of p-values given case by case over the family."""
        joined = np.concatenate(p)
        how = adjust or self.adjust
        if self.family == 0:
            result = joined
        elif how == "bh":
            result = benjamini_hochberg(joined, self.family)
        elif how == "by":
            result = benjamini_yekutieli(joined, self.family)
        elif self._null_cr is not None:
            result = step_down_min_p(np.log(joined), self._null_cr, TIE)
        else:
            raise ValueError("westfall-young needs draws")
        return np.split(result, np.cumsum(self.sizes)[:-1])

    @property
    def has_draws(self) -> bool:
        """Whether westfall-young can be asked for."""
        return self._null_cr is not None


@dataclass(frozen=True)
class Drawn:
    """A case's family in worlds with exchanged sessions.

    Attributes
    ----------
    hits_cr, log_p_cr : int32 and float32 [family, draws], hits of every member in every world, and
        log p of as many
    """

    hits_cr: np.ndarray
    log_p_cr: np.ndarray


def draw(
    found: Found, n_draws: int, seed: int, n_workers: int = 1, progress: Progress = silent
) -> Drawn:
    """Judge the family in ``n_draws`` worlds with exchanged sessions."""
    table = found.case.unit.triggers
    hits_cr = Exchanger(found.case, seed, "joint").hits(n_draws, n_workers, progress).T

    def rank(block: tuple[int, int]) -> np.ndarray:
        part = slice(*block)
        rows = np.arange(*block)
        return hit_kernels.log_tail_ranks(
            rows,
            table.offset_c,
            table.entity,
            table.session,
            found.margins.table,
            np.ascontiguousarray(hits_cr[part]),
        )

    blocks = workers.blocks(found.size, ROWS_A_BLOCK)
    empty = np.empty((0, n_draws), dtype=np.float32)
    log_p_cr = np.concatenate([empty, *workers.in_order(rank, blocks, n_workers)])
    return Drawn(hits_cr, log_p_cr)


def lean_p(found: Found, drawn: Drawn, rule_rows: Sequence[int], n_workers: int = 1) -> float:
    """Chance of the family as a whole leaning towards events as much as it does.

    The median, over combinations that share no type with a rule, of (hits - mean of draws) / sd of
    draws, against the same of each draw. Small where something that is not held fixed drives both
    sides; 1 where rules leave under ten combinations to tell it by.
    """
    combos = found.case.unit.triggers.combos
    taken = {k for row in rule_rows for k in combos[row]}
    mean, spread = drawn.hits_cr.mean(axis=1), drawn.hits_cr.std(axis=1)
    apart = (mean >= 1.0) & (spread > 0)
    apart &= np.array([taken.isdisjoint(combo) for combo in combos], dtype=bool)
    some = np.flatnonzero(apart)
    if some.size < FEW_APART:
        return 1.0
    observed = np.median((found.hits[some] - mean[some]) / spread[some])

    def middle(block: tuple[int, int]) -> np.ndarray:
        hits_rc = np.ascontiguousarray(drawn.hits_cr[some, slice(*block)].T)
        return np.median((hits_rc - mean[some]) / spread[some], axis=1)

    blocks = workers.blocks(drawn.hits_cr.shape[1], DRAWS_A_BLOCK)
    middle_r = np.concatenate(workers.in_order(middle, blocks, n_workers))
    return float((1 + np.sum(middle_r >= observed)) / (1 + middle_r.size))
