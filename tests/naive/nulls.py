"""The other nulls: exchanges of sessions between events, own timing, and the plain shuffle.

Choices where the wording leaves room: a plain shuffle draws with replacement, moves every alert
of the segment wherever the entity has an open session at all, and a draw in which the
combination never triggers has no precision and so does not reach the observed one.
"""

from collections.abc import Iterable, Sequence
from dataclasses import replace
from itertools import combinations

import numpy as np

from .world import (
    Cell,
    Combination,
    Segment,
    Unit,
    World,
    covered_for_any,
    eligible_cells,
    eligible_triggers,
    followed,
    is_open,
    peer_at,
)

# --- own timing -----------------------------------------------------------------------------


def own_timing_pmf(circles: Iterable[tuple[Sequence[int], Sequence[int]]]) -> list[float]:
    """P(total hits = 0, 1, ...) when each circle is turned on its own, all turns alike.

    A circle is (positions of the triggers, the 0/1 values of Z round the circle).
    """
    total = [1.0]
    for positions, z in circles:
        n = len(z)
        pmf = [0.0] * (len(positions) + 1)
        for shift in range(n):
            pmf[sum(z[(i + shift) % n] for i in positions)] += 1 / n
        longer = [0.0] * (len(total) + len(pmf) - 1)
        for i, p in enumerate(total):
            for j, q in enumerate(pmf):
                longer[i + j] += p * q
        total = longer
    return total


def own_timing(world: World, unit: Unit, segment: Segment, combination: Combination) -> float:
    """P(hits at least as many as seen) when each entity's triggers turn in its own life."""
    cells = eligible_cells(world, unit, segment, combination)
    fired = set(eligible_triggers(world, unit, segment, combination))
    hits = sum(followed(world, unit[0], cell) for cell in fired)
    circles = []
    for entity in world.known:
        life = [cell for cell in cells if cell[0] == entity]
        positions = [i for i, cell in enumerate(life) if cell in fired]
        if positions:
            circles.append((positions, [int(followed(world, unit[0], cell)) for cell in life]))
    return 1.0 if hits == 0 else sum(own_timing_pmf(circles)[hits:])


# --- exchanges ------------------------------------------------------------------------------


def slot_group(world: World, unit: Unit, segment: Segment, entity: str, s: int) -> str | None:
    """Peer group at the last open cell from which an event at s is in reach; None if none."""
    for t in range(s - 1, s - world.horizon - 1, -1):
        if is_open(world, unit, segment, (entity, t)):
            return peer_at(world, entity, t)
    return None


def events_in_reach(world: World, unit: Unit, segment: Segment) -> list[Cell]:
    """The unit's distinct (entity, session) events that some open cell could have foreseen."""
    return [
        (entity, s)
        for entity, target, s in sorted(world.events)
        if target == unit[0]
        and entity in world.known
        and slot_group(world, unit, segment, entity, s) is not None
    ]


def can_exchange(
    world: World, unit: Unit, segment: Segment, events: Sequence[Cell], i: int, j: int
) -> bool:
    """May events i and j swap their sessions: same group in all four places, none doubled?"""
    (e_i, s_i), (e_j, s_j) = events[i], events[j]
    groups = {
        slot_group(world, unit, segment, e, s)
        for e, s in ((e_i, s_i), (e_j, s_j), (e_i, s_j), (e_j, s_i))
    }
    if len(groups) > 1 or None in groups:
        return False
    others = {event for k, event in enumerate(events) if k not in (i, j)}
    return (e_i, s_j) not in others and (e_j, s_i) not in others


def exchange(events: Sequence[Cell], i: int, j: int) -> list[Cell]:
    """The events with the sessions of i and j swapped."""
    swapped = list(events)
    swapped[i], swapped[j] = (events[i][0], events[j][1]), (events[j][0], events[i][1])
    return swapped


def exchange_sweep(
    world: World, unit: Unit, segment: Segment, events: list[Cell], rng: np.random.Generator
) -> list[Cell]:
    """Every event in turn proposes a partner, uniform among the events of its group."""
    for i in range(len(events)):
        group = slot_group(world, unit, segment, *events[i])
        pool = [
            j for j, event in enumerate(events) if slot_group(world, unit, segment, *event) == group
        ]
        j = pool[rng.integers(len(pool))]
        if j != i and can_exchange(world, unit, segment, events, i, j):
            events = exchange(events, i, j)
    return events


def exchange_orbit(world: World, unit: Unit, segment: Segment) -> set[frozenset[Cell]]:
    """Every set of events that exchanges can lead to; a long chain visits all equally often."""
    start = frozenset(events_in_reach(world, unit, segment))
    seen, todo = {start}, [start]
    while todo:
        events = sorted(todo.pop())
        for i, j in combinations(range(len(events)), 2):
            if can_exchange(world, unit, segment, events, i, j):
                new = frozenset(exchange(events, i, j))
                if new not in seen:
                    seen.add(new)
                    todo.append(new)
    return seen


# --- plain shuffle --------------------------------------------------------------------------


def shuffle_alerts(world: World, segment: Segment, rng: np.random.Generator) -> World:
    """The world with every alert of the segment redrawn over its entity's covered sessions."""
    first, last = segment
    moved = set()
    for entity, kind, t in sorted(world.alerts):
        if not first <= t <= last:
            continue
        life = [s for s in range(first, last + 1) if covered_for_any(world, entity, s)]
        moved.add((entity, kind, life[rng.integers(len(life))] if life else t))
    return replace(world, alerts=frozenset(moved))


def precision(world: World, unit: Unit, segment: Segment, combination: Combination) -> float:
    """Hits over triggers; NaN without triggers."""
    cells = eligible_triggers(world, unit, segment, combination)
    if not cells:
        return float("nan")
    return sum(followed(world, unit[0], cell) for cell in cells) / len(cells)


def shuffle_p(
    world: World,
    unit: Unit,
    segment: Segment,
    combination: Combination,
    n_draws: int,
    rng: np.random.Generator,
) -> float:
    """(1 + draws whose precision reaches the observed one) / (1 + draws)."""
    observed = precision(world, unit, segment, combination)
    reached = sum(
        precision(shuffle_alerts(world, segment, rng), unit, segment, combination) >= observed
        for _ in range(n_draws)
    )
    return (1 + reached) / (1 + n_draws)
