"""Explaining away: the few rules that account for all that passed, and the sharper ones inside."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from miner import workers
from miner.adjust import benjamini_hochberg
from miner.columns import JOINER
from miner.discovery import Adjuster, Found
from miner.kernels import bits
from miner.kernels import hits as kernels
from miner.nulls.margins import cannot_pass, fit, judge_hits, tally
from miner.open_cells import OpenCells
from miner.sharper import sharper_p
from miner.triggers import Combo

TRIGGERS_A_BLOCK = 1_000_000


@dataclass(frozen=True)
class Rule:
    """A combination that became a rule, with the numbers of the step at which it did.

    Attributes
    ----------
    case, row : index of the case, and of the combination in its family
    triggers, hits, expected, excess, p, adjusted : at its step, on what earlier rules left;
        ``excess`` is (hits - expected) / sd; for a sharpening rule ``p`` and ``adjusted`` are of
        the test of being sharper
    instead_of : the larger combination it was taken in place of, or None
    sharpens : place in the list of rules of the rule it sharpens, or None
    p_sharper : p-value of being sharper than that one, or None
    """

    case: int
    row: int
    triggers: int
    hits: int
    expected: float
    excess: float
    p: float
    adjusted: float
    instead_of: Combo | None = None
    sharpens: int | None = None
    p_sharper: float | None = None


@dataclass(frozen=True)
class Explanation:
    """Rules in the order found, and for what passed at first, the rule that explains it."""

    rules: tuple[Rule, ...]
    explained_by: dict[tuple[int, int], int]
    """(case, row) -> place of the rule"""


class _State:
    """What earlier rules of a case have left: cells, triggers, and the null refitted on them."""

    def __init__(
        self, found: Found, min_triggers: int, level: float | None, n_workers: int
    ) -> None:
        self.found = found
        self.min_triggers = min_triggers
        self.level = level
        self.n_workers = n_workers
        self.rows = found.rows
        self.is_left = np.ones(found.case.unit.triggers.entity.size, dtype=bool)
        self.open_ew = bits.pack_flags(found.case.unit.is_open_et)
        self.margins, self.p = found.margins, found.p
        self.n = found.case.unit.triggers.count_c
        self.hits, self.expected = found.hits, found.expected
        self.excess = _excess(found.hits, found.expected, found.variance)

    def take(self, row: int) -> None:
        """Set aside the neighbourhood of a rule's remaining triggers, refit, judge the rest."""
        case = self.found.case
        unit, table = case.unit, case.unit.triggers
        panel = unit.segment.panel
        entity, session = self.triggers(row)
        kernels.close_around(self.open_ew, entity, session, unit.horizon, panel.n_sessions)
        self._drop_closed()
        cells = OpenCells(bits.unpack(self.open_ew, panel.n_sessions), panel.peers)
        self.margins = fit(cells, case.window_ew, self.margins, self.n_workers, panel.law)
        self.n, self.hits, self.expected, variance = tally(
            table, self.margins, case.window_ew, self.is_left, self.n_workers
        )
        self.excess = _excess(self.hits, self.expected, variance)
        hits = self.hits[self.rows]
        skip = self.n[self.rows] < self.min_triggers
        if self.level is not None:
            skip |= cannot_pass(hits, self.expected[self.rows], variance[self.rows], self.level)
        self.p = np.ones(self.found.size)
        self.p[self.rows] = judge_hits(
            self.rows, table, self.margins, np.where(skip, 0, hits), self.is_left, self.n_workers
        )

    def _drop_closed(self) -> None:
        """Triggers on cells that are open no more do not count any longer."""
        table = self.found.case.unit.triggers

        def drop(block: tuple[int, int]) -> None:
            part = slice(*block)
            kernels.keep_open(
                table.entity[part], table.session[part], self.open_ew, self.is_left[part]
            )

        workers.in_order(drop, workers.blocks(self.is_left.size, TRIGGERS_A_BLOCK), self.n_workers)

    def triggers(self, row: int) -> tuple[np.ndarray, np.ndarray]:
        """Remaining triggers of one combination."""
        offset_c = self.found.case.unit.triggers.offset_c
        is_left = self.is_left[offset_c[row] : offset_c[row + 1]]
        entity, session = self.found.case.unit.triggers.of(row)
        return entity[is_left], session[is_left]


def _excess(hits: np.ndarray, expected: np.ndarray, variance: np.ndarray) -> np.ndarray:
    spread = np.sqrt(variance)
    return np.divide(hits - expected, spread, out=np.zeros(hits.size), where=spread > 0)


def explain_away(
    found: Sequence[Found],
    adjuster: Adjuster,
    *,
    fdr: float,
    min_triggers: int,
    n_workers: int = 1,
) -> Explanation:
    """Take rules one by one until nothing passes, then look for sharper supersets of them."""
    # drawn adjusted p-values may lie a little below the closed form's, so no short cut there
    level = None if adjuster.adjust == "westfall-young" else fdr
    states = [_State(f, min_triggers, level, n_workers) for f in found]
    adjusted = adjuster.adjusted([state.p for state in states])
    passed_before = {
        (i, int(row)) for i, adj in enumerate(adjusted) for row in np.flatnonzero(adj <= fdr)
    }
    at_first = sorted(passed_before)
    taken: dict[tuple[int, int], dict[int, int]] = {key: {} for key in at_first}
    fell_at: dict[tuple[int, int], int] = {}
    rules: list[Rule] = []
    passing = passed_before
    while passing:
        i, row, instead_of = _pick(states, passing, fdr)
        state = states[i]
        rules.append(
            Rule(
                i,
                row,
                int(state.n[row]),
                int(state.hits[row]),
                float(state.expected[row]),
                float(state.excess[row]),
                float(state.p[row]),
                float(adjusted[i][row]),
                instead_of,
            )
        )
        place = len(rules) - 1
        n_before = state.n
        state.take(row)
        for key in at_first:
            if key[0] == i:
                taken[key][place] = int(n_before[key[1]] - state.n[key[1]])
        adjusted = adjuster.adjusted([s.p for s in states])
        now = {(j, int(r)) for j, adj in enumerate(adjusted) for r in np.flatnonzero(adj <= fdr)}
        fell_at.update(dict.fromkeys(passing - now, place))
        # a rule's own triggers are all set aside, so it cannot come back and the loop ends
        passing = now
    are_rules = {(rule.case, rule.row) for rule in rules}
    explained_by = {}
    for key in at_first:
        if key not in are_rules:
            shares = taken[key]
            most = max(shares.values(), default=0)
            explained_by[key] = (
                min(place for place, n in shares.items() if n == most) if most else fell_at[key]
            )
    rules = _sharpen(found, rules, fdr, min_triggers)
    for rule in rules:
        explained_by.pop((rule.case, rule.row), None)
    return Explanation(tuple(rules), explained_by)


def _pick(
    states: Sequence[_State], passing: set[tuple[int, int]], fdr: float
) -> tuple[int, int, Combo | None]:
    """The passing combination with the largest excess, or a simpler one in its place."""

    def rank(key: tuple[int, int]) -> tuple[float, int, str, tuple[str, str]]:
        state = states[key[0]]
        case = state.found.case
        combo = case.unit.triggers.combos[key[1]]
        names = JOINER.join(case.unit.segment.panel.type_names[k] for k in combo)
        return -_tied(state.excess[key[1]]), len(combo), names, case.name

    i, row = first = min(passing, key=rank)
    state = states[i]
    combos = state.found.case.unit.triggers.combos
    while True:
        parts = [
            key
            for key in passing
            if key[0] == i
            and set(combos[key[1]]) < set(combos[row])
            and sharper_p(state.found.case, state.margins, state.is_left, row, key[1]) > fdr
        ]
        if not parts:
            break
        i, row = min(parts, key=rank)
    return i, row, combos[first[1]] if row != first[1] else None


def _sharpen(
    found: Sequence[Found], rules: list[Rule], fdr: float, min_triggers: int
) -> list[Rule]:
    """Add supersets that hit clearly more than the rule they contain, one at a time.

    Whole triggers and the first fit are used: the loop has set aside every trigger of a rule.
    """
    rules = list(rules)
    left: dict[int, np.ndarray] = {}  # rule -> triggers of its case not yet set aside
    p_of: dict[tuple[int, int], float] = {}  # (rule, row of superset) -> p
    done: set[tuple[int, int]] = set()

    def test(base: int) -> None:
        rule = rules[base]
        f = found[rule.case]
        table = f.case.unit.triggers
        small = set(table.combos[rule.row])
        n_left = kernels.count_flags(table.offset_c, left[base])
        for row, combo in enumerate(table.combos):
            if small < set(combo):
                p_of.pop((base, row), None)
                if n_left[row] >= min_triggers and (base, row) not in done:
                    p_of[base, row] = (
                        sharper_p(f.case, f.margins, left[base], row, rule.row)
                        if f.is_proposed[row]
                        else 1.0
                    )

    for base, rule in enumerate(rules):
        left[base] = np.ones(found[rule.case].case.unit.triggers.entity.size, dtype=bool)
        test(base)
    while p_of:
        keys = sorted(p_of)
        p = np.array([p_of[key] for key in keys])
        adjusted = benjamini_hochberg(p, p.size)
        rounded = np.array([_tied(value) for value in p])
        ties = np.flatnonzero(rounded == rounded.min())
        best = min(
            ties, key=lambda a: (-_excess_of(found, rules, keys[a]), _text(found, rules, keys[a]))
        )
        if adjusted[best] > fdr:
            break
        base, row = keys[best]
        f = found[rules[base].case]
        table = f.case.unit.triggers
        part = slice(table.offset_c[row], table.offset_c[row + 1])
        is_left = left[base][part]
        known = {(rule.case, rule.row): place for place, rule in enumerate(rules)}
        place = known.get((rules[base].case, row))
        if place is not None:
            if rules[place].sharpens is None:
                rules[place] = replace(rules[place], sharpens=base, p_sharper=float(p[best]))
        else:
            rates, n_hits = f.rates_of(row)[is_left], int(f.case.is_hit[part][is_left].sum())
            expected, spread = float(rates.sum()), float(np.sqrt((rates * (1 - rates)).sum()))
            rules.append(
                Rule(
                    rules[base].case,
                    row,
                    int(is_left.sum()),
                    n_hits,
                    expected,
                    (n_hits - expected) / spread if spread > 0 else 0.0,
                    float(p[best]),
                    float(adjusted[best]),
                    None,
                    base,
                    float(p[best]),
                )
            )
        done.add((base, row))
        left[base] = left[base] & ~_near(f, left[base], row, rules[base].row)
        p_of.pop((base, row), None)
        test(base)
    return rules


def _tied(value: float) -> float:
    """Nine digits: what differs only beyond them differs by rounding, and is a tie."""
    return float(f"{value:.9g}")


def _near(found: Found, is_left: np.ndarray, row: int, base_row: int) -> np.ndarray:
    """Triggers of the rule and its supersets within the horizon of those of ``row``."""
    table = found.case.unit.triggers
    part = slice(table.offset_c[row], table.offset_c[row + 1])
    own = is_left[part]
    entity, session = table.entity[part][own], table.session[part][own]
    small = set(table.combos[base_row])
    is_near = np.zeros(is_left.size, dtype=bool)
    for other, combo in enumerate(table.combos):
        if small <= set(combo):
            there = slice(table.offset_c[other], table.offset_c[other + 1])
            is_near[there] = kernels.near_any(
                table.entity[there], table.session[there], entity, session, found.case.unit.horizon
            )
    return is_near


def _excess_of(found: Sequence[Found], rules: Sequence[Rule], key: tuple[int, int]) -> float:
    """Excess of a pair's superset over all its triggers."""
    f = found[rules[key[0]].case]
    row = key[1]
    return _tied(_excess(f.hits[[row]], f.expected[[row]], f.variance[[row]])[0])


def _text(found: Sequence[Found], rules: Sequence[Rule], key: tuple[int, int]) -> tuple[int, str]:
    case = found[rules[key[0]].case].case
    combo = case.unit.triggers.combos[key[1]]
    return len(combo), JOINER.join(case.unit.segment.panel.type_names[k] for k in combo)
