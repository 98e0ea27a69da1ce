"""Which rules say the same: overlap of their triggers, and the few that catch nearly everything.

Overlap is measured twice: triggers on the very same session, and triggers with one of the other
rule's within the horizon (a triple completes some sessions after the pair it contains, and still
calls the same event).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_array

from miner.evidence.lead_times import events_caught, months_judged
from miner.kernels import profiles
from miner.rule_cases import NamedRule, RuleCase, rule_cases
from miner.time_split import Segment

SHARE = 0.9


@dataclass(frozen=True)
class Redundancy:
    """The rules for one target, and how far they repeat one another.

    Attributes
    ----------
    jaccard, jaccard_near : float64 [rules, rules], shared triggers over all triggers of the two;
        ``near``: a trigger is shared when the other rule has one within the horizon
    order : the rules by number of events caught that no earlier one caught; columns ``place``,
        ``rule`` (position), ``new_events``, ``events``, ``share_of_caught``, ``share_of_events``,
        ``calls_a_month`` (distinct entity-sessions called by this rule and those before it)
    smallest : positions of the fewest rules (then of the fewest triggers) that catch at least
        ``share`` of what all catch
    is_proven : no smaller set exists; else the search was cut short and this is the best known
    """

    target: str
    rules: tuple[NamedRule, ...]
    jaccard: np.ndarray
    jaccard_near: np.ndarray
    order: pd.DataFrame
    smallest: tuple[int, ...]
    is_proven: bool
    events_caught: int
    calls_a_month: float
    share: float


def redundancy(
    segment: Segment,
    rules: Sequence[NamedRule],
    dates: np.ndarray,
    *,
    share: float = SHARE,
    n_workers: int = 1,
) -> list[Redundancy]:
    """Compare the rules of each target on a segment, the whole study or its holdout.

    Parameters
    ----------
    rules : of any targets; those of one target are compared with one another
    dates : datetime64[D] [sessions]
    share : of the events that all rules together catch, to be caught by the smallest set
    """
    cases = rule_cases(segment, rules, n_workers=n_workers)
    found = []
    for target in dict.fromkeys(rule.target for rule in rules):
        mine = [i for i, rule in enumerate(rules) if rule.target == target]
        found.append(
            _of_target(target, [rules[i] for i in mine], [cases[i] for i in mine], dates, share)
        )
    return found


def _of_target(
    target: str,
    rules: Sequence[NamedRule],
    cases: Sequence[RuleCase],
    dates: np.ndarray,
    share: float,
) -> Redundancy:
    events = sorted({pair for case in cases for pair in _pairs(*case.case.events)})
    place = {pair: i for i, pair in enumerate(events)}
    is_caught_rv = np.zeros((len(rules), len(events)), dtype=bool)
    for r, case in enumerate(cases):
        caught = events_caught(case.case, [case.row])
        pairs = list(_pairs(*case.case.events))
        is_caught_rv[r, [place[pairs[i]] for i in np.flatnonzero(caught)]] = True
    triggers = [case.triggers for case in cases]
    calls = [set(_pairs(*pair)) for pair in triggers]
    months = max(months_judged(case.case, dates) for case in cases)
    order, taken = [], set[tuple[int, int]]()
    sequence = greedy_order(is_caught_rv, np.array([len(c) for c in calls]))
    total = int(is_caught_rv.any(axis=0).sum())
    so_far = np.zeros(len(events), dtype=bool)
    for number, r in enumerate(sequence, start=1):
        new = int((is_caught_rv[r] & ~so_far).sum())
        so_far |= is_caught_rv[r]
        taken |= calls[r]
        order.append(
            {
                "place": number,
                "rule": r,
                "new_events": new,
                "events": int(so_far.sum()),
                "share_of_caught": so_far.sum() / total if total else math.nan,
                "share_of_events": so_far.mean() if events else math.nan,
                "calls_a_month": len(taken) / months,
            }
        )
    smallest, is_proven = smallest_cover(is_caught_rv, np.array([len(c) for c in calls]), share)
    return Redundancy(
        target,
        tuple(rules),
        overlap(triggers, [0] * len(rules)),
        overlap(triggers, [rule.horizon for rule in rules]),
        pd.DataFrame(order),
        smallest,
        is_proven,
        total,
        len(taken) / months,
        share,
    )


def _pairs(entity: np.ndarray, session: np.ndarray) -> zip[tuple[int, int]]:
    return zip(entity.tolist(), session.tolist(), strict=True)


def overlap(triggers: Sequence[tuple[np.ndarray, np.ndarray]], within: Sequence[int]) -> np.ndarray:
    """Jaccard index of every two rules' triggers: float64 [rules, rules], NaN where both have none.

    A trigger is shared when the other rule has one on the entity at most ``within`` sessions away
    (the larger of the two rules'). The shared ones of both sides are averaged; with ``within`` 0
    this is the plain index, |A and B| / |A or B|.
    """
    n = len(triggers)
    index = np.full((n, n), np.nan)
    for a in range(n):
        for b in range(a, n):
            reach = max(within[a], within[b])
            one, other = (
                _n_near(triggers[a], triggers[b], reach),
                _n_near(triggers[b], triggers[a], reach),
            )
            shared = (one + other) / 2
            union = triggers[a][0].size + triggers[b][0].size - shared
            if union:
                index[a, b] = index[b, a] = shared / union
    return index


def share_near(
    one: tuple[np.ndarray, np.ndarray], other: tuple[np.ndarray, np.ndarray], within: int
) -> float:
    """Share of one rule's triggers with one of the other's at most ``within`` sessions away; NaN
    without any."""
    return _n_near(one, other, within) / one[0].size if one[0].size else math.nan


def _n_near(
    one: tuple[np.ndarray, np.ndarray], other: tuple[np.ndarray, np.ndarray], reach: int
) -> int:
    """Triggers of ``one`` with one of ``other`` at most ``reach`` sessions before or after."""
    entity, session = one
    after = profiles.sessions_to_event(entity, session - 1, *other)  # from the session itself on
    is_near = (after > 0) & (after - 1 <= reach)
    if reach:
        is_near |= profiles.has_trigger_before(entity, session, *other, reach)
    return int(is_near.sum())


def greedy_order(is_caught_rv: np.ndarray, n_triggers: np.ndarray) -> list[int]:
    """The rules by events caught that none before caught; ties to fewer triggers, then as given.

    Rules that add nothing come last, in that order too.
    """
    left = list(range(is_caught_rv.shape[0]))
    so_far = np.zeros(is_caught_rv.shape[1], dtype=bool)
    order = []
    while left:
        new = [int((is_caught_rv[r] & ~so_far).sum()) for r in left]
        best = min(range(len(left)), key=lambda i: (-new[i], n_triggers[left[i]], left[i]))
        r = left.pop(best)
        so_far |= is_caught_rv[r]
        order.append(r)
    return order


def smallest_cover(
    is_caught_rv: np.ndarray, n_triggers: np.ndarray, share: float, seconds: float = 20.0
) -> tuple[tuple[int, ...], bool]:
    """Fewest rules, of those fewest triggers, that catch ``share`` of what all of them catch.

    Solved exactly as an integer program; where that takes longer than ``seconds`` the best set
    found (or the greedy one) is returned as not proven.

    Returns
    -------
    positions of the rules, sorted; whether no smaller set can do
    """
    caught = is_caught_rv[:, is_caught_rv.any(axis=0)]
    n_rules = caught.shape[0]
    wanted = math.ceil(round(share * caught.shape[1], 9))
    if not wanted:
        return (), True
    # events that the same rules catch are one event with a weight; with whole rules a pattern
    # can count in full as soon as one of its rules is in, so its own variable need not be whole
    pattern_vr, weight_v = np.unique(caught.T, axis=0, return_counts=True)
    n_patterns = weight_v.size
    tie = 1 / (1 + n_triggers.sum())  # all triggers together weigh less than one rule
    cost = np.concatenate([1 + tie * n_triggers, np.zeros(n_patterns)])
    rows, columns = np.nonzero(pattern_vr)
    link = csr_array(
        (
            np.concatenate([np.ones(rows.size), -np.ones(n_patterns)]),
            (
                np.concatenate([rows, np.arange(n_patterns)]),
                np.concatenate([columns, n_rules + np.arange(n_patterns)]),
            ),
        ),
        shape=(n_patterns, n_rules + n_patterns),
    )
    enough = csr_array(np.concatenate([np.zeros(n_rules), weight_v])[None, :])
    solved = milp(
        cost,
        constraints=[LinearConstraint(link, lb=0), LinearConstraint(enough, lb=wanted)],
        integrality=np.concatenate([np.ones(n_rules), np.zeros(n_patterns)]),
        bounds=Bounds(0, 1),
        options={"time_limit": seconds, "mip_rel_gap": 0},
    )
    if solved.x is not None:
        return tuple(np.flatnonzero(solved.x[:n_rules] > 0.5).tolist()), solved.status == 0
    order, so_far = greedy_order(caught, n_triggers), np.zeros(caught.shape[1], dtype=bool)
    chosen = []
    for r in order:
        if so_far.sum() >= wanted:
            break
        chosen.append(r)
        so_far |= caught[r]
    return tuple(sorted(chosen)), False


def redundancy_table(result: Redundancy) -> pd.DataFrame:
    """One row a rule in greedy order, with the rule it overlaps most among those before it."""
    table = result.order.copy()
    names = [" + ".join(rule.combination) for rule in result.rules]
    near = result.jaccard_near
    table.insert(2, "combination", [names[r] for r in table["rule"]])
    table.insert(3, "stratum", [result.rules[r].stratum for r in table["rule"]])
    closest, value = [], []
    before: list[int] = []
    for r in table["rule"]:
        best = max(before, key=lambda b: np.nan_to_num(near[r, b]), default=None)
        closest.append(None if best is None else f"{names[best]} ({result.rules[best].stratum})")
        value.append(math.nan if best is None else near[r, best])
        before.append(int(r))
    table["closest_before"], table["overlap"] = closest, value
    table["in_smallest"] = table["rule"].isin(result.smallest)
    return table


def redundancy_lines(result: Redundancy) -> Iterator[str]:
    """The rules of one target in greedy order for a terminal, and the smallest set that will do."""
    table = redundancy_table(result)
    yield f"{result.target}: rules by events caught that none before caught"
    header = ("", "new", "caught", "calls a month", "rule", "most like")
    rows = [
        (
            f"{row['place']}{'*' if row['in_smallest'] else ''}",
            str(row["new_events"]),
            "-" if math.isnan(row["share_of_caught"]) else f"{100 * row['share_of_caught']:.0f}%",
            f"{row['calls_a_month']:.2g}",
            f"{row['combination']} ({row['stratum']})",
            "" if row["closest_before"] is None or not row["overlap"] > 0
            else f"{row['closest_before']} {100 * row['overlap']:.0f}%",
        )
        for row in table.to_dict("records")
    ]  # fmt: skip
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    for row in (header, *rows):
        yield "  " + "  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=True)).rstrip()
    few = "fewest" if result.is_proven else "few"
    yield (
        f"* the {few} rules that catch {100 * result.share:.0f}% of the {result.events_caught:,} "
        "events that all of them catch"
    )
