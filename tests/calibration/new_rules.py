"""Hands on streams of new rules, some of them true, as an online procedure meets them."""

from __future__ import annotations

import numpy as np
from scipy.stats import binom

from miner.sequential.online import PROCEDURES, Tested, test_batch

QUARTERS = 20
A_QUARTER = 3  # families of rules that a hunt brings, on average
TRIGGERS = 60  # of the widest rule of a family
EXPECTED, TRUE = 0.1, 0.3  # chance of a hit: by chance alone, and of a rule that is true
SHARE_TRUE = 0.3


def stream_of_rules(random: np.random.Generator, kind: str) -> dict[str, tuple[float, int, int]]:
    """Share of false discoveries, true rules found and true rules, by procedure.

    ``kind``: "nothing true" and "nested": a family is a rule and three narrower ones, each holding
    about two thirds of the triggers of the one before, in one batch; "own triggers": four rules
    with triggers of their own; "kept": nested, but one rule a quarter, on the same triggers still.
    """
    due: list[list[tuple[float, bool]]] = [[] for _ in range(QUARTERS + 3)]
    for quarter in range(QUARTERS):
        for _ in range(random.poisson(A_QUARTER)):
            is_true = kind != "nothing true" and random.random() < SHARE_TRUE
            for step, p in enumerate(_family(random, is_true, kind != "own triggers")):
                due[quarter + (step if kind == "kept" else 0)].append((p, is_true))
    out = {}
    for procedure in PROCEDURES:
        history: list[Tested] = []
        truth: list[bool] = []
        for batch in due[:QUARTERS]:
            history += test_batch(procedure, history, np.array([p for p, _ in batch]))
            truth += [is_true for _, is_true in batch]
        is_found = np.array([t.is_rejected for t in history], dtype=bool)
        is_true_i = np.array(truth, dtype=bool)
        false = float((is_found & ~is_true_i).sum() / max(is_found.sum(), 1))
        out[procedure] = (false, int((is_found & is_true_i).sum()), int(is_true_i.sum()))
    return out


def _family(random: np.random.Generator, is_true: bool, is_nested: bool) -> list[float]:
    """p-values of a rule and of three narrower ones."""
    chance = TRUE if is_true else EXPECTED
    is_hit = random.random(TRIGGERS) < chance
    found = []
    for _ in range(4):
        found.append(float(binom.sf(is_hit.sum() - 1, is_hit.size, EXPECTED)))
        n = int(np.ceil(is_hit.size * 2 / 3))
        is_hit = is_hit[:n] if is_nested else random.random(n) < chance
    return found
