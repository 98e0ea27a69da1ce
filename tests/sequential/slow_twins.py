"""Slow, obvious twins of the sequential statistics. Never imports the package."""

from __future__ import annotations

import math

from scipy.integrate import quad


def evidence(groups: list[list[tuple[bool, float]]], direction: str, reference: float) -> float:
    """The mixture over alternatives, by numerical integration over their rate at the reference.

    ``groups``: clusters in order, each a list of (outcome, null rate).
    """
    low, high = {"up": (reference, 1.0), "down": (0.0, reference), "two-sided": (0.0, 1.0)}[
        direction
    ]

    def product(q: float) -> float:
        odds_ratio = (q / (1 - q)) / (reference / (1 - reference))
        value = 1.0
        for group in groups:
            total = 0.0
            for is_hit, p in group:
                if p in (0.0, 1.0):
                    tilted, miss = p, 1.0 if p == 0.0 else 1.0 / odds_ratio
                    hit = odds_ratio if p == 0.0 else 1.0
                    total += hit if is_hit else miss
                    continue
                odds = p / (1 - p) * odds_ratio
                tilted = odds / (1 + odds)
                total += tilted / p if is_hit else (1 - tilted) / (1 - p)
            value *= total / len(group)
        return value

    def at_angle(angle: float) -> float:
        return product(math.sin(angle) ** 2)

    start, stop = math.asin(math.sqrt(low)), math.asin(math.sqrt(high))
    value, _ = quad(at_angle, start, stop, limit=400, epsabs=1e-13, epsrel=1e-11)
    return value / (stop - start)


def with_restarts(
    quarters: list[list[list[tuple[bool, float]]]], direction: str, reference: float, every: int
) -> list[float]:
    """The whole process after each quarter: capital times what each part made of it."""
    after = []
    for now in range(len(quarters)):
        total, held_back = 0.0, 1.0
        for k, start in enumerate(range(0, now + 1, every)):
            share = 2 / 3 if k == 0 else (1 / 3) / (k * (k + 1))
            groups = [g for q in quarters[start : now + 1] for g in q]
            total += share * (evidence(groups, direction, reference) if groups else 1.0)
            held_back -= share
        after.append(total + held_back)
    return after


def lord(p: list[float], alpha: float) -> list[float]:
    """Levels of LORD++, one hypothesis after the other."""

    def gamma(j: int) -> float:
        return 0.07720838 * math.log(max(j, 2)) / (j * math.exp(math.sqrt(math.log(j))))

    start, found, levels = alpha / 10, [], []
    for t in range(1, len(p) + 1):
        level = start * gamma(t)
        for n, tau in enumerate(found):
            level += (alpha - start if n == 0 else alpha) * gamma(t - tau)
        levels.append(level)
        if p[t - 1] <= level:
            found.append(t)
    return levels


def addis(p: list[float], alpha: float, candidate: float, discard: float) -> list[float]:
    """Levels of ADDIS, and of SAFFRON with ``discard`` 1, by the formulas of the papers."""

    def gamma(j: int) -> float:
        return 0.4374901658 / j**1.6

    start, found, levels = alpha / 2, [], []
    for t in range(1, len(p) + 1):
        kept = 1 + sum(x <= discard for x in p[: t - 1])
        level = start * gamma(kept - sum(x <= candidate for x in p[: t - 1]))
        for n, kappa in enumerate(found):
            kept_then = sum(x <= discard for x in p[:kappa])
            since = sum(x <= candidate for x in p[kappa : t - 1])
            level += (alpha - start if n == 0 else alpha) * gamma(kept - kept_then - since)
        levels.append(min(candidate, (discard - candidate) * level))
        if p[t - 1] <= levels[-1]:
            found.append(t)
    return levels


def clusters(keys: list[int], sessions: list[int], span: int) -> list[frozenset[int]]:
    """Sets of triggers: the earliest one left takes those of its key within the span."""
    left = set(range(len(keys)))
    made = []
    while left:
        first = min(left, key=lambda i: (sessions[i], i))
        group = {i for i in left if keys[i] == keys[first] and sessions[i] < sessions[first] + span}
        made.append(frozenset(group))
        left -= group
    return made
