"""What is told of one rule beyond the tables: its parts, strata, latest triggers, and so on."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np

from miner.evidence.arrivals import Arrivals, arrivals
from miner.evidence.hits_null import HitsNull, hits_null
from miner.evidence.lead_times import lead_times, months_judged, share_caught
from miner.evidence.profiles import EventRates, Profile, profile
from miner.evidence.tables import in_stratum, part_of
from miner.intervals import precision_intervals
from miner.judged import Judged
from miner.kernels import hits as hit_kernels
from miner.kernels import profiles as kernels
from miner.nulls.margins import tally
from miner.panel import Panel
from miner.search import Search
from miner.triggers import Combo, TriggerTable
from miner.units import Case

LATEST = 20


def parts_of(combo: Combo) -> list[Combo]:
    """Every proper part of a combination, by size, then types."""
    return [part for size in range(1, len(combo)) for part in combinations(combo, size)]


@dataclass(frozen=True)
class Part:
    """A combination in discovery: triggers, hits, expected hits, 95 % interval of precision."""

    combo: Combo
    triggers: int
    hits: int
    expected: float
    low: float
    high: float


@dataclass(frozen=True)
class Stratum:
    """A combination in one stratum. In discovery as hunted in that stratum; in the holdout the
    rule's own triggers with that label, None where the rule's stratum leaves them out."""

    name: str
    triggers: int
    hits: int
    expected: float
    holdout: tuple[int, int, float] | None


@dataclass(frozen=True)
class Latest:
    """One of the latest triggers: ``wait`` sessions to the event, 0 without one in the horizon;
    ``is_open`` while that could still come."""

    entity: int
    session: int
    wait: int
    is_open: bool


@dataclass(frozen=True)
class RuleFacts:
    """All that is told of a rule."""

    discovery: HitsNull
    holdout: HitsNull
    profile_discovery: Profile
    profile_holdout: Profile
    leads: np.ndarray
    triggers: int
    months: float
    events: int
    caught: float
    arrivals: Arrivals
    parts: tuple[Part, ...]
    strata: tuple[Stratum, ...]
    latest: tuple[Latest, ...]


def parts_in_discovery(
    found: Search, place: int, combo: Combo, table: TriggerTable
) -> tuple[Part, ...]:
    """The rule's parts, and last itself, in its unit. ``table``: triggers over all entities."""
    f = found.found[place]
    panel = f.case.unit.segment.panel
    own = in_stratum(table, panel, f.case.unit.code)
    rows = np.array([own.combos.index(part) for part in (*parts_of(combo), combo)])
    is_hit = hit_kernels.look_up(own.entity, own.session, f.case.window_ew)
    n, hits, expected, _ = (part[rows] for part in tally(own, f.margins, f.case.window_ew))
    interval = precision_intervals(own, rows, is_hit, f.case.unit.horizon, panel.n_sessions)
    return tuple(
        Part(own.combos[row], int(n[i]), int(hits[i]), float(expected[i]), float(low), float(high))
        for i, (row, low, high) in enumerate(zip(rows, interval.low, interval.high, strict=True))
    )


def by_stratum(
    found: Search, place: int, combo: Combo, table: TriggerTable, judged: tuple[Judged, int]
) -> tuple[Stratum, ...]:
    """The rule's combination in every stratum hunted for its target, without "all"."""
    target = found.found[place].case.target
    late, row = judged
    late_part = part_of(late.case.unit.triggers, row)
    entity, session = late.case.unit.triggers.of(row)
    labels = late.case.unit.segment.panel.strata
    strata = []
    for i, f in enumerate(found.found):
        unit = f.case.unit
        if f.case.target != target or unit.code is None or labels is None:
            continue
        whole = parts_in_discovery(found, i, combo, table)[-1]
        held = None
        if late.case.unit.code in (None, unit.code):
            is_here = labels.code_et[entity, session] == unit.code
            held = (
                int(is_here.sum()),
                int(late.case.is_hit[late_part][is_here].sum()),
                float(late.rates[late_part][is_here].sum()),
            )
        strata.append(Stratum(unit.stratum, whole.triggers, whole.hits, whole.expected, held))
    return tuple(strata)


def latest_triggers(
    panel: Panel, entity: np.ndarray, session: np.ndarray, target: str, horizon: int
) -> tuple[Latest, ...]:
    """The last 20 of the triggers (int32, sorted by entity, then session), latest first."""
    wait = kernels.sessions_to_event(entity, session, *panel.events[target])
    wait = np.where(wait <= horizon, np.maximum(wait, 0), 0)
    order = np.lexsort((entity, -session))[:LATEST]
    is_open = (wait == 0) & (session + horizon >= panel.n_sessions)
    return tuple(
        Latest(int(entity[i]), int(session[i]), int(wait[i]), bool(is_open[i])) for i in order
    )


def rule_facts(
    found: Search,
    place: int,
    combo: Combo,
    early: TriggerTable,
    judged: tuple[Judged, int],
    whole: Case,
    every: TriggerTable,
    rates: tuple[EventRates, EventRates],
    dates: np.ndarray,
) -> RuleFacts:
    """Gather what is told of one rule.

    Parameters
    ----------
    place : the rule's case in ``found``
    early : triggers of the rule and its parts in discovery, over all entities
    judged : the rule on the holdout, and its row there
    whole : the rule's target and stratum over the whole study
    every : the stratum's triggers over the whole study, those still open among them
    rates : of the events, in discovery and in the holdout
    """
    f = found.found[place]
    table = f.case.unit.triggers
    part = part_of(table, table.combos.index(combo))
    late, row = judged
    late_table = late.case.unit.triggers
    late_part = part_of(late_table, row)
    horizon = whole.unit.horizon
    whole_row = whole.unit.triggers.combos.index(combo)
    panel = whole.unit.segment.panel
    whole_part = part_of(whole.unit.triggers, whole_row)
    return RuleFacts(
        hits_null(f.rates_of(table.combos.index(combo)), int(f.case.is_hit[part].sum())),
        hits_null(late.rates[late_part], int(late.case.is_hit[late_part].sum())),
        profile(rates[0], table.entity[part], table.session[part], horizon),
        profile(rates[1], *late_table.of(row), horizon),
        lead_times(whole, whole_row),
        int(whole.unit.triggers.count_c[whole_row]),
        months_judged(whole, dates),
        int(whole.events[0].size),
        share_caught(whole, whole_row),
        arrivals(
            panel.alert_ekw,
            *whole.unit.triggers.of(whole_row),
            whole.is_hit[whole_part],
            combo,
            whole.unit.lookback,
        ),
        parts_in_discovery(found, place, combo, early),
        by_stratum(found, place, combo, early, judged),
        latest_triggers(
            panel, *every.of(every.combos.index(combo)), whole.target, whole.unit.horizon
        ),
    )
