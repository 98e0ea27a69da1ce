"""From everything significant to few rules: explaining away, then sharpening, as one story.

Choices where the wording leaves room:
- z and p are compared after rounding to 9 significant digits, so that ties are ties;
- when no trigger of the smaller set has a chance strictly between 0 and 1, nothing can be
  learnt about its rate, and the larger set is not sharper (p = 1);
- a superset that was never proposed counts among the pairs tested, with p = 1;
- what is set aside for a rule's pairs surrounds the superset's triggers that were still left;
- a rule that sharpens two rules keeps the first mark;
- a combination that stopped passing, came back and stopped again is explained by the last stop.
"""

from collections.abc import Iterable, Mapping, Sequence, Set
from dataclasses import dataclass, replace
from math import pi, sqrt

import numpy as np

from .distributions import poisson_binomial_tail, solve_tilt, tilt
from .margins import margins_of_unit
from .mining import candidates, family
from .multiple import adjust_p, benjamini_hochberg
from .world import Cell, Combination, Unit, World, discovery, followed, open_cells, text, units

Key = tuple[Unit, Combination]


@dataclass(frozen=True)
class Standing:
    """Where a combination stands on some triggers: counts, expectation, z and p."""

    triggers: int
    hits: int
    expected: float
    z: float
    p: float


NOT_TESTED = Standing(0, 0, 0.0, 0.0, 1.0)


@dataclass(frozen=True)
class Rule:
    """A rule, the numbers of the step that made it, and the rule it sharpens, if any.

    p of a sharpening rule is that of being sharper; q is p adjusted at that step.
    """

    order: int
    unit: Unit
    combination: Combination
    step: Standing
    q: float
    sharpens: int | None = None


@dataclass(frozen=True)
class Explanation:
    """The outcome: rules in order, first standings, and who explains whom (by rule order)."""

    rules: list[Rule]
    family_size: int
    first: dict[Key, Standing]
    first_q: dict[Key, float]
    explained: dict[Key, int]


def rounded(x: float) -> float:
    """x to 9 significant digits."""
    return float(f"{x:.8e}")


def precedence(key: Key, z: float) -> tuple[float, int, str, str, str]:
    """Sorts the largest z first; ties by size, then text, target and stratum."""
    (target, stratum), combination = key
    return -rounded(z), len(combination), text(combination), target, stratum


def standing(cells: Iterable[Cell], q: Mapping[Cell, float], target: str, world: World) -> Standing:
    """Hits of the triggers at these cells against their Poisson-binomial law."""
    cells = list(cells)
    hits = sum(followed(world, target, cell) for cell in cells)
    expected = sum(q[cell] for cell in cells)
    sd = sqrt(sum(q[cell] * (1 - q[cell]) for cell in cells))
    z = (hits - expected) / sd if sd > 0 else 0.0
    p = poisson_binomial_tail([q[cell] for cell in cells], hits)
    return Standing(len(cells), hits, expected, z, p)


def near(cell: Cell, centres: Iterable[Cell], distance: int) -> bool:
    """Is the cell within the distance of one of the centres, on the same entity?"""
    return any(e == cell[0] and abs(t - cell[1]) <= distance for e, t in centres)


def away_from(centres: Iterable[Cell], cells: Iterable[Cell], distance: int) -> tuple[Cell, ...]:
    """The cells that are near none of the centres."""
    return tuple(cell for cell in cells if not near(cell, centres, distance))


def cells_followed(world: World, target: str, cells: Iterable[Cell]) -> set[Cell]:
    """Those of the cells that are followed by the target."""
    return {cell for cell in cells if followed(world, target, cell)}


def sharper_p(
    smaller: Sequence[Cell],
    larger: Sequence[Cell],
    q: Mapping[Cell, float],
    hit_cells: Set[Cell],
    horizon: int,
) -> float:
    """P(hits of the larger set's triggers or more) if they do only as well as the smaller's own.

    The smaller set's odds ratio over the margins is estimated where no trigger of the larger is
    near, and its uncertainty is averaged over (Gauss-Hermite, 21 points).
    """
    apart = [c for c in smaller if not near(c, larger, horizon) and 0 < q[c] < 1]
    if not apart:
        return 1.0
    chances, n = [q[cell] for cell in apart], len(apart)
    hits = sum(cell in hit_cells for cell in apart)
    theta = solve_tilt(chances, 0.5 if hits == 0 else n - 0.5 if hits == n else hits)
    information = sum(tilt(c, theta) * (1 - tilt(c, theta)) for c in chances)
    hits_of_larger = sum(cell in hit_cells for cell in larger)
    p = 0.0
    for point, weight in zip(*np.polynomial.hermite.hermgauss(21), strict=True):
        somewhere = theta + sqrt(2 / information) * point
        tail = poisson_binomial_tail([tilt(q[c], somewhere) for c in larger], hits_of_larger)
        p += weight / sqrt(pi) * tail
    return min(1.0, float(p))


def explain_away(world: World, fdr: float, adjust: str = "bh") -> Explanation:
    """Report the pair, not its hundreds of relatives."""
    segment = discovery(world)
    families = {unit: family(world, unit) for unit in units(world)}
    family_size = sum(len(members) for members in families.values())
    proposed = [(unit, combination) for unit in families for combination in candidates(world, unit)]
    left = {(unit, combination): families[unit][combination] for unit, combination in proposed}
    cells_left = {unit: open_cells(world, unit, segment) for unit in families}
    q = {unit: margins_of_unit(world, unit, segment) for unit in families}
    original_q = dict(q)

    rules: list[Rule] = []
    taken: dict[tuple[Key, int], int] = {}
    first: dict[Key, Standing] = {}
    first_q: dict[Key, float] = {}
    passed: list[set[Key]] = []  # before each step
    while True:
        now = {
            key: standing(cells, q[key[0]], key[0][0], world)
            if len(cells) >= world.min_triggers
            else NOT_TESTED
            for key, cells in left.items()
        }
        q_values = adjust_p([stand.p for stand in now.values()], family_size, adjust)
        now_q = dict(zip(now, q_values, strict=True))
        passing = {key for key in now if now_q[key] <= fdr}
        passed.append(passing)
        if not rules:
            first, first_q = now, now_q
        if not passing:
            break

        chosen = min(passing, key=lambda key: precedence(key, now[key].z))
        while True:
            unit, combination = chosen
            hit_cells = cells_followed(world, unit[0], cells_left[unit])
            simpler = {
                (u, c)
                for u, c in passing
                if u == unit
                and set(c) < set(combination)
                and sharper_p(left[u, c], left[chosen], q[u], hit_cells, world.horizon) > fdr
            }
            if not simpler:
                break
            chosen = min(simpler, key=lambda key: precedence(key, now[key].z))

        unit, combination = chosen
        order = len(rules) + 1
        rules.append(Rule(order, unit, combination, now[chosen], now_q[chosen]))
        centres = left[chosen]
        cells_left[unit] = away_from(centres, cells_left[unit], world.horizon)
        q[unit] = margins_of_unit(world, unit, segment, cells_left[unit])
        for key in proposed:
            if key[0] == unit:
                kept = away_from(centres, left[key], world.horizon)
                taken[key, order] = len(left[key]) - len(kept)
                left[key] = kept

    main_rules = list(rules)
    rules = sharpen(world, fdr, families, set(proposed), original_q, main_rules)

    explained = {}
    for key in passed[0] - {(rule.unit, rule.combination) for rule in rules}:
        counts = [taken.get((key, rule.order), 0) for rule in main_rules]
        if max(counts) > 0:
            explained[key] = 1 + counts.index(max(counts))
        else:  # the step after which it never passed again
            explained[key] = 1 + max(i for i, passing in enumerate(passed) if key in passing)
    return Explanation(rules, family_size, first, first_q, explained)


def sharpen(
    world: World,
    fdr: float,
    families: Mapping[Unit, Mapping[Combination, Sequence[Cell]]],
    proposed: set[Key],
    q: Mapping[Unit, Mapping[Cell, float]],
    main_rules: Sequence[Rule],
) -> list[Rule]:
    """The rules, and after them each superset that is sharper than one of them.

    Margins and triggers are those from before anything was explained away.
    """
    rules = list(main_rules)
    centres: dict[int, list[Cell]] = {rule.order: [] for rule in main_rules}
    waiting = [
        (rule, larger)
        for rule in main_rules
        for larger in families[rule.unit]
        if set(rule.combination) < set(larger)
    ]

    def left(rule: Rule, combination: Combination) -> tuple[Cell, ...]:
        return away_from(centres[rule.order], families[rule.unit][combination], world.horizon)

    while True:
        tested = [pair for pair in waiting if len(left(*pair)) >= world.min_triggers]
        p_values = []
        for rule, larger in tested:
            p = 1.0
            if (rule.unit, larger) in proposed:
                cells = left(rule, rule.combination), left(rule, larger)
                hit_cells = cells_followed(world, rule.unit[0], cells[0] + cells[1])
                p = sharper_p(*cells, q[rule.unit], hit_cells, world.horizon)
            p_values.append(p)
        q_values = benjamini_hochberg(p_values)
        if not any(value <= fdr for value in q_values):
            return rules

        urgency = []
        for (rule, larger), p in zip(tested, p_values, strict=True):
            whole = standing(families[rule.unit][larger], q[rule.unit], rule.unit[0], world)
            urgency.append((rounded(p), precedence((rule.unit, larger), whole.z), rule.order))
        best = urgency.index(min(urgency))

        rule, larger = tested[best]
        already = [r for r in rules if (r.unit, r.combination) == (rule.unit, larger)]
        if not already:
            step = standing(left(rule, larger), q[rule.unit], rule.unit[0], world)
            step = replace(step, p=p_values[best])
            order = len(rules) + 1
            rules.append(Rule(order, rule.unit, larger, step, q_values[best], rule.order))
        elif already[0].sharpens is None:
            rules[already[0].order - 1] = replace(already[0], sharpens=rule.order)
        waiting.remove((rule, larger))
        centres[rule.order] += left(rule, larger)
