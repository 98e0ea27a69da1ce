"""Hands on significance levels for a stream of new hypotheses, false discoveries held for ever.

The state is the list of what was tested. A batch (the new rules of one quarter) is tested at levels
that depend on earlier batches only, so the p-values of a batch may depend on each other; inside a
batch, the order is one that is blind to p (by rule id).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Literal, NamedTuple, get_args

import numpy as np

Procedure = Literal["lord++", "saffron", "addis"]
PROCEDURES: tuple[str, ...] = get_args(Procedure)
DEFAULT_PROCEDURE: Procedure = "lord++"
# p up to which a hypothesis is a candidate, and above which it is not counted as tested
CANDIDATE_DISCARD = {"saffron": (0.5, 1.0), "addis": (0.25, 0.5)}


class Tested(NamedTuple):
    """One hypothesis that was tested."""

    p: float
    level: float
    is_rejected: bool


Tested.__test__ = False  # type: ignore[attr-defined]  # pytest would take it for a test class


def next_levels(
    procedure: Procedure, history: Sequence[Tested], n: int, alpha: float = 0.05
) -> np.ndarray:
    """Levels of the next ``n`` hypotheses, which form one batch.

    Parameters
    ----------
    history : everything tested before, in order
    alpha : the share of false discoveries

    Returns
    -------
    float64 [n] : a hypothesis is rejected when its p is at most its level

    Raises
    ------
    ValueError : an unknown procedure

    References
    ----------
    LORD++: Ramdas, Yang, Wainwright & Jordan (2017), NeurIPS 30, with the weights of Javanmard &
    Montanari (2018), Annals of Statistics 46:526-554. SAFFRON: Ramdas, Zrnic, Wainwright & Jordan
    (2018), ICML 35. ADDIS: Tian & Ramdas (2019), NeurIPS 32. Batches: Zrnic, Ramdas & Jordan
    (2021), JMLR 22:33 (levels that do not see what runs at the same time).
    """
    if procedure not in PROCEDURES:
        raise ValueError(f"`procedure` must be one of {', '.join(PROCEDURES)}; got {procedure!r}")
    p = np.array([t.p for t in history], dtype=float)
    is_rejected = np.array([t.is_rejected for t in history], dtype=bool)
    if procedure == "lord++":
        every = np.ones(p.size, dtype=bool)
        return _levels(every, is_rejected, n, alpha, alpha / 10, lord_weights)
    candidate, discard = CANDIDATE_DISCARD[procedure]
    counts = (p > candidate) & (p <= discard)
    pay = _levels(counts, is_rejected, n, alpha, alpha / 2, saffron_weights)
    return np.minimum((discard - candidate) * pay, candidate)


def test_batch(
    procedure: Procedure,
    history: Sequence[Tested],
    p: np.ndarray,
    alpha: float = 0.05,  # noqa: PT028
) -> tuple[Tested, ...]:
    """Test the hypotheses of one batch, in the order given; see ``next_levels``."""
    p = np.asarray(p, dtype=float)
    levels = next_levels(procedure, history, p.size, alpha)
    return tuple(Tested(float(a), float(b), bool(a <= b)) for a, b in zip(p, levels, strict=True))


test_batch.__test__ = False  # type: ignore[attr-defined]  # pytest would take it for a test


def lord_weights(j: np.ndarray) -> np.ndarray:
    """Weight of the j-th test after a discovery, j from 1; the sum over all j is at most 1."""
    root = np.sqrt(np.log(j))
    return 0.07720838 * np.log(np.maximum(j, 2)) / (j * np.exp(root))


def saffron_weights(j: np.ndarray) -> np.ndarray:
    """As ``lord_weights``, falling as j^-1.6."""
    return 0.4374901658 / j**1.6


def _levels(
    counts: np.ndarray,
    is_rejected: np.ndarray,
    n: int,
    alpha: float,
    start: float,
    weights: Callable[[np.ndarray], np.ndarray],
) -> np.ndarray:
    """What the capital pays for each of the next ``n`` tests.

    Weights fall with the number of past tests that count, from the beginning and from every
    discovery on. ``start`` is the capital to begin with; the first discovery brings
    ``alpha - start``, each other one ``alpha``. Tests of the batch before a hypothesis count in
    full, which gives the least that any outcome of theirs could lead to.
    """
    counted = np.concatenate([[0], np.cumsum(counts)])
    since = np.concatenate([[0], np.nonzero(is_rejected)[0] + 1])
    brings = np.concatenate([[start, alpha - start], np.full(since.size, alpha)])[: since.size]
    j = counted[-1] - counted[since][:, None] + np.arange(1, n + 1)
    return brings @ weights(j.astype(float))
