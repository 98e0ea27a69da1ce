"""The law of a rule's hits under the margins null, for drawing beside the observed count."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.kernels.tails import few_states

MOST_BINS = 120
SPREADS = 5.0


@dataclass(frozen=True)
class HitsNull:
    """Chances of ranges of hits; range i holds ``first + i * width`` and the ``width - 1`` after.

    Attributes
    ----------
    triggers, hits, expected : observed triggers and hits, mean under the null
    first, width : int, the first range's first count, and how many counts a range holds
    chance : float64, of each range
    """

    triggers: int
    hits: int
    expected: float
    first: int
    width: int
    chance: np.ndarray


def hits_null(rates: np.ndarray, hits: int) -> HitsNull:
    """Exact Poisson-binomial chances (``rates``: float64, one a trigger), five sd either side.

    Counts are joined to at most 120 ranges. Tails beyond the window are left out, not added.
    """
    mean = float(rates.sum())
    spread = float(np.sqrt((rates * (1 - rates)).sum()))
    first = max(0, int(mean - SPREADS * spread) - 1)
    last = min(rates.size, int(mean + SPREADS * spread) + 2)
    chance, beyond = few_states(np.ascontiguousarray(rates), last + 1)
    if last == rates.size:
        chance[last] += beyond  # nothing is beyond every trigger a hit but rounding
    chance = chance[first : last + 1]
    width = -(-chance.size // MOST_BINS)
    chance = np.add.reduceat(chance, np.arange(0, chance.size, width))
    return HitsNull(rates.size, hits, mean, first, width, chance)
