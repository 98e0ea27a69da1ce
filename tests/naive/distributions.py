"""The Poisson-binomial law: independent yes/no draws with their own chances, and odds tilts."""

from collections.abc import Sequence
from itertools import product
from math import prod

from scipy.optimize import brentq
from scipy.special import expit, logit


def poisson_binomial_pmf(chances: Sequence[float]) -> list[float]:
    """P(X = 0 .. n), one draw added at a time."""
    pmf = [1.0]
    for q in chances:
        stay = [p * (1 - q) for p in pmf] + [0.0]
        step = [0.0] + [p * q for p in pmf]
        pmf = [a + b for a, b in zip(stay, step, strict=True)]
    return pmf


def poisson_binomial_by_enumeration(chances: Sequence[float]) -> list[float]:
    """The same by writing out all 2^n outcomes."""
    pmf = [0.0] * (len(chances) + 1)
    for outcome in product((0, 1), repeat=len(chances)):
        pmf[sum(outcome)] += prod(
            q if hit else 1 - q for q, hit in zip(chances, outcome, strict=True)
        )
    return pmf


def poisson_binomial_tail(chances: Sequence[float], at_least: int) -> float:
    """P(X >= at_least); exactly 1 at 0."""
    if at_least <= 0:
        return 1.0
    return sum(poisson_binomial_pmf(chances)[at_least:])


def tilt(q: float, theta: float) -> float:
    """The chance whose odds are exp(theta) times those of q; 0 and 1 stay."""
    return float(expit(logit(q) + theta))


def solve_tilt(chances: Sequence[float], total: float) -> float:
    """The theta at which the tilted chances (all strictly between 0 and 1) add up to total."""
    if not 0 < total < len(chances):
        raise ValueError(f"no tilt of {len(chances)} chances adds up to {total}")

    def excess(theta: float) -> float:
        return sum(tilt(q, theta) for q in chances) - total

    return float(brentq(excess, -200, 200, xtol=1e-13))
