"""The order in which a combination's alerts arrive before it is complete."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.kernels import profiles as kernels
from miner.triggers import Combo

MOST_ORDERS = 6


@dataclass(frozen=True)
class Arrivals:
    """Ages of a combination's types at its triggers, and the orders that occur.

    Attributes
    ----------
    median_age : median sessions from each type's first alert inside the look-back to the trigger
    completes : share of triggers whose own session is the type's first
    orders : (groups of types that came on one session, earliest first; triggers; hits), the six
        commonest, ties by the groups
    other : (triggers, hits) of all other orders
    """

    median_age: tuple[float, ...]
    completes: tuple[float, ...]
    orders: tuple[tuple[tuple[Combo, ...], int, int], ...]
    other: tuple[int, int]


def arrivals(
    alert_ekw: np.ndarray,
    entity: np.ndarray,
    session: np.ndarray,
    is_hit: np.ndarray,
    combo: Combo,
    lookback: int,
) -> Arrivals:
    """Orders of arrival at the triggers (``entity``, ``session``, ``is_hit``: one a trigger).

    A type arrives with its first alert in ``[t - lookback + 1, t]``.
    """
    age_gk = kernels.first_ages(alert_ekw, entity, session, np.array(combo), lookback)
    if entity.size == 0:
        return Arrivals((), (), (), (0, 0))
    patterns, place = np.unique(age_gk_ranks(age_gk), axis=0, return_inverse=True)
    n = np.bincount(place.ravel(), minlength=len(patterns))
    hits = np.bincount(place.ravel(), weights=is_hit, minlength=len(patterns)).astype(int)
    named = []
    for pattern, triggers, hit in zip(patterns, n, hits, strict=True):
        groups = tuple(
            tuple(combo[i] for i in np.flatnonzero(pattern == rank)) for rank in np.unique(pattern)
        )
        named.append((groups, int(triggers), int(hit)))
    named.sort(key=lambda order: (-order[1], order[0]))
    rest = named[MOST_ORDERS:]
    return Arrivals(
        tuple(float(x) for x in np.median(age_gk, axis=0)),
        tuple(float(x) for x in (age_gk == 0).mean(axis=0)),
        tuple(named[:MOST_ORDERS]),
        (sum(order[1] for order in rest), sum(order[2] for order in rest)),
    )


def age_gk_ranks(age_gk: np.ndarray) -> np.ndarray:
    """Rank of each type within its trigger, 0 the earliest to arrive, equal ages equal ranks."""
    is_older_gkk = age_gk[:, None, :] > age_gk[:, :, None]
    older = np.sort(np.where(is_older_gkk, age_gk[:, None, :], -1), axis=2)
    return (np.diff(older, axis=2, prepend=-1) > 0).sum(axis=2)
