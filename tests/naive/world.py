"""A tiny study as plain sets and spans, and the definitions every count rests on.

Hands on: which combination is on where, its triggers, the cells that are open or eligible in a
unit and a segment, and whether a cell is followed by an event.

Choices where the wording leaves room:
- a span whose label is empty and whose start is the latest leaves the cell without a label;
- two spans of one entity with the same start that overlap and differ are refused;
- a coverage row opens its cells whether or not its type has ever sent an alert.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache

Cell = tuple[str, int]  # (entity, session)
Combination = tuple[str, ...]  # sorted alert types
Unit = tuple[str, str]  # (target, stratum)
Segment = tuple[int, int]  # first and last session, both in
Span = tuple[str, int | None, int | None, str]  # entity, first, last, label; None is open


@dataclass(frozen=True, eq=False)
class World:
    """A study: sessions are 0 .. n_sessions - 1, all ranges include both ends.

    Coverage rows are (entity, type or "" for all, first, last); strata and peers are spans.
    Two worlds are equal only when they are the same object, which lets definitions be cached.
    """

    n_sessions: int
    alerts: frozenset[tuple[str, str, int]]  # entity, type, session
    events: frozenset[tuple[str, str, int]]  # entity, target, session
    known: tuple[str, ...]
    targets: tuple[str, ...]
    lookback: int
    horizon: int
    rest: int
    max_size: int
    min_triggers: int
    min_hits: int
    discovery_end: int
    holdout_start: int
    coverage: tuple[tuple[str, str, int | None, int | None], ...] | None = None
    strata: tuple[Span, ...] | None = None
    peers: tuple[Span, ...] | None = None
    pooled: bool = False
    law: str = "odds"  # how an entity's and a date's share combine in the margins: or "hazard"


def discovery(world: World) -> Segment:
    """The earlier segment."""
    return 0, world.discovery_end


def holdout(world: World) -> Segment:
    """The later segment."""
    return world.holdout_start, world.n_sessions - 1


def text(combination: Iterable[str]) -> str:
    """A combination as it is written: sorted, joined by ' + '."""
    return " + ".join(sorted(combination))


def alert_types(world: World) -> list[str]:
    """Types with an alert on a known entity, sorted."""
    return sorted({kind for entity, kind, _ in world.alerts if entity in world.known})


def in_span(first: int | None, last: int | None, t: int) -> bool:
    """Is session t in the span? None is an open end."""
    return (first is None or first <= t) and (last is None or t <= last)


@cache
def covered(world: World, entity: str, kind: str, t: int) -> bool:
    """Could an alert of this type have been sent about the entity on session t?"""
    if world.coverage is None:
        return entity in world.known
    return any(
        e == entity and k in ("", kind) and in_span(first, last, t)
        for e, k, first, last in world.coverage
    )


@cache
def covered_for_any(world: World, entity: str, t: int) -> bool:
    """Is the entity covered on session t for at least one type?"""
    if world.coverage is None:
        return entity in world.known
    return any(e == entity and in_span(first, last, t) for e, _, first, last in world.coverage)


def label_at(spans: tuple[Span, ...], entity: str, t: int) -> str:
    """The label of the span with the latest start among those that hold t; "" if none does."""
    holding = [
        (-(10**9) if first is None else first, label)
        for e, first, last, label in spans
        if e == entity and in_span(first, last, t)
    ]
    if not holding:
        return ""
    latest = max(first for first, _ in holding)
    labels = {label for first, label in holding if first == latest}
    if len(labels) > 1:
        raise ValueError(f"two spans of {entity} start together and differ: {sorted(labels)}")
    return labels.pop()


@cache
def stratum_at(world: World, entity: str, t: int) -> str:
    """The entity's stratum on session t; "" where it has none."""
    return "" if world.strata is None else label_at(world.strata, entity, t)


@cache
def peer_at(world: World, entity: str, t: int) -> str:
    """The entity's peer group on session t: peers, else strata, else one group for all."""
    if world.peers is not None:
        return label_at(world.peers, entity, t)
    return stratum_at(world, entity, t)


def units(world: World) -> list[Unit]:
    """Every (target, stratum) pair that is hunted; stratum "all" without strata or pooled."""
    strata = [] if world.strata is None else sorted({s[3] for s in world.strata} - {""})
    if world.strata is None or world.pooled:
        strata.append("all")
    return [(target, stratum) for target in world.targets for stratum in strata]


@cache
def seen(world: World, entity: str, kind: str, t: int) -> bool:
    """Has the type an alert on the entity in the lookback that ends at t?"""
    return any((entity, kind, s) in world.alerts for s in range(t - world.lookback + 1, t + 1))


def is_on(world: World, entity: str, combination: Combination, t: int) -> bool:
    """Is every type of the combination seen in the lookback that ends at t?"""
    return all(seen(world, entity, kind, t) for kind in combination)


@cache
def triggers(world: World, entity: str, combination: Combination) -> tuple[int, ...]:
    """Sessions where the combination becomes complete, at least `rest` after the one before.

    An edge inside the rest is lost, not postponed, and does not start a rest of its own.
    """
    found: list[int] = []
    was_on = False
    for t in range(world.n_sessions):
        now_on = is_on(world, entity, combination, t)
        rested = not found or t - found[-1] >= world.rest
        if now_on and not was_on and rested:
            found.append(t)
        was_on = now_on
    return tuple(found)


def in_unit_and_segment(world: World, unit: Unit, segment: Segment, cell: Cell) -> bool:
    """Lookback inside the study, horizon inside the segment, entity in the stratum."""
    entity, t = cell
    first, last = segment
    inside = max(first, world.lookback - 1) <= t <= last - world.horizon
    return inside and unit[1] in ("all", stratum_at(world, entity, t))


def is_open(world: World, unit: Unit, segment: Segment, cell: Cell) -> bool:
    """Does the cell count for the unit's margins: covered for at least one type?"""
    return in_unit_and_segment(world, unit, segment, cell) and covered_for_any(world, *cell)


def is_eligible(
    world: World, unit: Unit, segment: Segment, combination: Combination, cell: Cell
) -> bool:
    """Does the cell count for the combination: covered for every type of it?"""
    entity, t = cell
    return in_unit_and_segment(world, unit, segment, cell) and all(
        covered(world, entity, kind, t) for kind in combination
    )


def all_cells(world: World) -> list[Cell]:
    """Every known entity on every session, entity by entity."""
    return [(entity, t) for entity in world.known for t in range(world.n_sessions)]


@cache
def open_cells(world: World, unit: Unit, segment: Segment) -> tuple[Cell, ...]:
    """The open cells of a unit in a segment."""
    return tuple(cell for cell in all_cells(world) if is_open(world, unit, segment, cell))


@cache
def eligible_cells(
    world: World, unit: Unit, segment: Segment, combination: Combination
) -> tuple[Cell, ...]:
    """The eligible cells of a combination in a unit and a segment."""
    return tuple(
        (entity, t)
        for entity, t in open_cells(world, unit, segment)
        if all(covered(world, entity, kind, t) for kind in combination)
    )


@cache
def eligible_triggers(
    world: World, unit: Unit, segment: Segment, combination: Combination
) -> tuple[Cell, ...]:
    """Triggers of the whole timeline that fall on eligible cells."""
    return tuple(
        (entity, t)
        for entity in world.known
        for t in triggers(world, entity, combination)
        if is_eligible(world, unit, segment, combination, (entity, t))
    )


@cache
def followed(world: World, target: str, cell: Cell) -> bool:
    """Z: does the entity have a target event in the horizon after t (t itself not in it)?"""
    entity, t = cell
    return any((entity, target, s) in world.events for s in range(t + 1, t + world.horizon + 1))


def base_rate(world: World, unit: Unit, segment: Segment, combination: Combination) -> float:
    """Share of the combination's eligible cells that are followed; NaN without any."""
    cells = eligible_cells(world, unit, segment, combination)
    if not cells:
        return float("nan")
    return sum(followed(world, unit[0], cell) for cell in cells) / len(cells)
