"""The holdout: rules judged once on the later part, and their verdicts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from miner.adjust import holm
from miner.chosen import ChosenRule
from miner.columns import CONFIRMED, REFUTED, UNDERPOWERED
from miner.judged import Judged, judge_rules
from miner.kernels import tails
from miner.sharper import sharper_p
from miner.time_split import HoldoutSlice

ENOUGH_POWER = 0.8


@dataclass(frozen=True)
class Outcome:
    """What the holdout says of one rule.

    Attributes
    ----------
    precision, low, high : of the holdout's triggers, with the 95 % interval; NaN without triggers
    p, p_holm : chance of as many hits under the null; adjusted over the rules
    power : chance that the holdout would have confirmed a precision halfway between expected and
        that of discovery
    p_sharper : of hitting more than the rule it sharpens leads to expect, or None
    """

    triggers: int
    hits: int
    precision: float
    low: float
    high: float
    is_few: bool
    base_rate: float
    expected: float
    p: float
    p_holm: float
    power: float
    p_sharper: float | None
    verdict: str


def judge_holdout(
    segment: HoldoutSlice,
    rules: Sequence[ChosenRule],
    *,
    alpha: float,
    lookback: int,
    horizon: int,
    rest: int,
    n_workers: int = 1,
) -> list[Outcome]:
    """Judge the rules on the holdout, Holm at ``alpha`` over all of them, in their order."""
    judged = judge_rules(
        segment, rules, lookback=lookback, horizon=horizon, rest=rest, n_workers=n_workers
    )
    p = np.array([unit.p[i] for unit, i in judged])
    p_holm = holm(p)
    is_confirmed = p_holm <= alpha
    level = alpha / max(1, len(rules) - int(is_confirmed.sum()))
    outcomes = []
    for rule, (unit, i), passed, adjusted in zip(rules, judged, is_confirmed, p_holm, strict=True):
        n = int(unit.triggers[i])
        power = _power(unit, i, rule.precision, level)
        verdict = CONFIRMED if passed else REFUTED if power >= ENOUGH_POWER else UNDERPOWERED
        outcomes.append(
            Outcome(
                n,
                int(unit.hits[i]),
                unit.hits[i] / n if n else float("nan"),
                float(unit.interval.low[i]),
                float(unit.interval.high[i]),
                bool(unit.interval.is_few[i]),
                float(unit.base_rate[i]),
                float(unit.expected[i]),
                float(unit.p[i]),
                float(adjusted),
                power,
                None if rule.sharpens is None else _sharper(unit, i, unit.place(rule.sharpens)),
                verdict,
            )
        )
    return outcomes


def _power(unit: Judged, row: int, precision: float, level: float) -> float:
    """Chance of passing at ``level``, were precision halfway from expected to ``precision``."""
    part = slice(unit.case.unit.triggers.offset_c[row], unit.case.unit.triggers.offset_c[row + 1])
    rates = unit.rates[part]
    return power_at(rates, 0.5 * (rates.mean() + precision) if rates.size else 0.0, level)


def power_at(rates: np.ndarray, precision: float, level: float) -> float:
    """Chance of a tail probability of at most ``level`` under ``rates``, were their mean
    ``precision`` (one odds ratio for all); 0 where that is no more than their mean already."""
    inside = rates[(rates > 0) & (rates < 1)]
    n_sure = int((rates >= 1).sum())
    total = precision * rates.size - n_sure
    if inside.size == 0 or total <= inside.sum():
        return 0.0
    least = least_passing(rates, level)
    if least > rates.size:
        return 0.0
    log_odds, _ = tails.tilt_to(inside, min(total, inside.size - 1e-9), 0.0)
    return float(tails.upper_tail(tails.tilt(rates, log_odds), least))


def least_passing(rates: np.ndarray, level: float) -> int:
    """Fewest hits whose chance under ``rates`` is at most ``level``; one too many if none is."""
    low, high = 0, rates.size + 1  # P(X >= low) > level >= P(X >= high)
    while high - low > 1:
        middle = (low + high) // 2
        if tails.upper_tail(rates, middle) <= level:
            high = middle
        else:
            low = middle
    return high


def _sharper(unit: Judged, larger: int, smaller: int) -> float:
    everything = np.ones(unit.rates.size, dtype=bool)
    return sharper_p(unit.case, unit.margins, everything, larger, smaller)
