"""What the later part of the calendar says of each rule, computed for rules only.

Choices where the wording leaves room: a rule without holdout triggers has p = 1; where the
alternative asks for more hits than the cells that can go either way allow, all of them are hits.
"""

from collections.abc import Sequence
from dataclasses import dataclass

from .distributions import poisson_binomial_tail, solve_tilt, tilt
from .explaining import Explanation, Rule, cells_followed, sharper_p, standing
from .intervals import precision_interval
from .margins import margins_of_unit
from .multiple import holm
from .world import Cell, World, base_rate, eligible_triggers, followed, holdout


@dataclass(frozen=True)
class Judgement:
    """A rule's holdout; sharper_p is None unless the rule sharpens another."""

    triggers: int
    hits: int
    precision: float
    low: float
    high: float
    too_few_clusters: bool
    base_rate: float
    expected: float
    p: float
    p_holm: float
    sharper_p: float | None
    power: float
    verdict: str


def holdout_power(chances: Sequence[float], level: float, discovery_precision: float) -> float:
    """P(the test at this level passes) halfway between the expected and the discovery precision."""
    n = len(chances)
    if n == 0:
        return 0.0
    halfway = (sum(chances) / n + discovery_precision) / 2
    if halfway <= sum(chances) / n:
        return 0.0
    needed = next((x for x in range(n + 1) if poisson_binomial_tail(chances, x) <= level), n + 1)
    free = [q for q in chances if 0 < q < 1]
    n_sure = sum(q == 1 for q in chances)
    if n * halfway - n_sure >= len(free):
        return float(needed <= n_sure + len(free))
    theta = solve_tilt(free, n * halfway - n_sure)
    return poisson_binomial_tail([tilt(q, theta) for q in chances], needed)


def judge_rules(world: World, explanation: Explanation, alpha: float) -> dict[int, Judgement]:
    """Holdout statistics and verdict by rule order."""
    segment, rules = holdout(world), explanation.rules
    q = {unit: margins_of_unit(world, unit, segment) for unit in {rule.unit for rule in rules}}

    def cells_of(rule: Rule) -> tuple[Cell, ...]:
        return eligible_triggers(world, rule.unit, segment, rule.combination)

    stands = [standing(cells_of(r), q[r.unit], r.unit[0], world) for r in rules]
    p_holm = holm([s.p for s in stands])
    n_left = sum(p > alpha for p in p_holm)  # rules not confirmed
    judged = {}
    for rule, stand, p in zip(rules, stands, p_holm, strict=True):
        cells = cells_of(rule)
        found = explanation.first[rule.unit, rule.combination]
        chances = [q[rule.unit][cell] for cell in cells]
        hits = [int(followed(world, rule.unit[0], cell)) for cell in cells]
        power = holdout_power(chances, alpha / max(1, n_left), found.hits / found.triggers)
        sharper = None
        if rule.sharpens is not None:
            smaller = cells_of(rules[rule.sharpens - 1])
            hit_cells = cells_followed(world, rule.unit[0], smaller + cells)
            sharper = sharper_p(smaller, cells, q[rule.unit], hit_cells, world.horizon)
        verdict = "confirmed" if p <= alpha else "refuted" if power >= 0.8 else "underpowered"
        judged[rule.order] = Judgement(
            stand.triggers,
            stand.hits,
            stand.hits / stand.triggers if cells else float("nan"),
            *precision_interval(cells, hits, world.horizon),
            base_rate(world, rule.unit, segment, rule.combination),
            stand.expected,
            stand.p,
            p,
            sharper,
            power,
            verdict,
        )
    return judged
