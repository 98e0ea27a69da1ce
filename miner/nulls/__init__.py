"""Nulls: worlds in which alerts carry no information about events, with stated things held.

Every null has the same face (``Null``): given a case it says, for rows of the case's triggers,
what hits to expect and how surprising the observed ones are. To add one, write a file here and
put it into ``registered()``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from miner.units import Case


@dataclass(frozen=True)
class Judgement:
    """What a null says of combinations; arrays of one length.

    Attributes
    ----------
    expected_hits : float64, the null's mean
    p_value : float64 in (0, 1], chance under the null of at least the observed (hits, or
        precision where the null's number of triggers varies)
    """

    expected_hits: np.ndarray
    p_value: np.ndarray


class Null(Protocol):
    """The face of every null."""

    name: str
    holds: str
    """In words: what is held fixed, and what is random."""

    def judge(self, case: Case, rows: np.ndarray, n_workers: int = 1) -> Judgement:
        """Judge the combinations ``rows`` of ``case.unit.triggers``."""
        ...


def registered(draws: int = 2000, seed: int = 7) -> dict[str, Null]:
    """Every null by name; those that draw make ``draws`` draws from ``seed``."""
    from miner.nulls.exchanges import ExchangesNull
    from miner.nulls.margins import MarginsNull
    from miner.nulls.own_timing import OwnTimingNull
    from miner.nulls.plain_shuffle import PlainShuffleNull

    nulls: list[Null] = [
        MarginsNull(),
        ExchangesNull(draws, seed),
        OwnTimingNull(),
        PlainShuffleNull(draws, seed),
    ]
    return {null.name: null for null in nulls}
