"""Units of a hunt: one stratum of one segment, and a target's events in it (observed or drawn)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from miner.columns import POOLED
from miner.kernels import bits, hits, windows
from miner.open_cells import OpenCells
from miner.panel import Events, Panel
from miner.time_split import Segment
from miner.triggers import Combo, TriggerTable, no_triggers


def stratum_codes(panel: Panel, pooled: bool) -> dict[str, int | None]:
    """Strata hunted in, by name: the labels', and all entities together if ``pooled`` or alone."""
    if panel.strata is None:
        return {POOLED: None}
    codes: dict[str, int | None] = {name: code for code, name in enumerate(panel.strata.names)}
    if pooled:
        codes[POOLED] = None
    return codes


@dataclass(frozen=True)
class Unit:
    """One stratum of a segment, without any event: shared by all targets and drawn worlds.

    Attributes
    ----------
    is_open_et : bool [entities, sessions], cells of the stratum that may be judged and are
        covered for at least one type
    triggers : the combinations at hand with their eligible triggers
    """

    stratum: str
    code: int | None
    segment: Segment
    lookback: int
    horizon: int
    rest: int
    is_open_et: np.ndarray
    triggers: TriggerTable

    @cached_property
    def cells(self) -> OpenCells:
        """The open cells in their peer groups."""
        return OpenCells(self.is_open_et, self.segment.panel.peers)

    @cached_property
    def slot_et(self) -> np.ndarray:
        """int16 [entities, sessions]: peer group an event would be felt in, -1 where in none."""
        return windows.slots(self.is_open_et, self.segment.panel.peers.code_et, self.horizon)

    def classes_of(self, combo: Combo) -> tuple[int, ...]:
        """Coverage classes that a combination needs."""
        return tuple(sorted({int(self.segment.panel.class_k[k]) for k in combo}))

    def is_eligible_et(self, classes: tuple[int, ...]) -> np.ndarray:
        """bool [entities, sessions]: open cells covered in every one of the classes."""
        panel = self.segment.panel
        cover_ew = np.bitwise_and.reduce(panel.cover_eqw[:, list(classes)], axis=1)
        return bits.unpack(cover_ew, panel.n_sessions) & self.is_open_et


def make_unit(
    segment: Segment,
    stratum: str,
    code: int | None,
    triggers: TriggerTable,
    *,
    lookback: int,
    horizon: int,
    rest: int,
) -> Unit:
    """The unit of one stratum (``code`` in ``panel.strata``; None: all entities together)."""
    panel = segment.panel
    cover_ew = np.bitwise_or.reduce(panel.cover_eqw, axis=1)
    is_open_et = bits.unpack(cover_ew, panel.n_sessions)
    is_open_et[:, : max(segment.first, lookback - 1)] = False
    is_open_et[:, max(0, segment.last - horizon + 1) :] = False
    if code is not None and panel.strata is not None:
        is_open_et &= panel.strata.code_et == code
    return Unit(stratum, code, segment, lookback, horizon, rest, is_open_et, triggers)


@dataclass(frozen=True)
class Case:
    """A unit with one target's events, observed or drawn.

    Attributes
    ----------
    events : int32 (entity, session), sorted, distinct, each in reach of an open cell
    window_ew : uint64 [entities, words], bit t: an event of the entity within the horizon after t
    """

    target: str
    unit: Unit
    events: Events
    window_ew: np.ndarray

    @property
    def name(self) -> tuple[str, str]:
        """Target and stratum."""
        return self.target, self.unit.stratum

    @cached_property
    def is_window_et(self) -> np.ndarray:
        """``window_ew`` as bool [entities, sessions]."""
        return bits.unpack(self.window_ew, self.unit.segment.panel.n_sessions)

    @cached_property
    def is_hit(self) -> np.ndarray:
        """Bool, one a trigger of ``unit.triggers``: an event within the horizon after."""
        table = self.unit.triggers
        return hits.look_up(table.entity, table.session, self.window_ew)

    @cached_property
    def hits_c(self) -> np.ndarray:
        """Hits of each combination: int64 [combinations]."""
        return hits.count_flags(self.unit.triggers.offset_c, self.is_hit)


def make_case(target: str, unit: Unit, events: Events) -> Case:
    """Put events into a unit; those out of its reach are left out."""
    entity, session = events
    is_in_reach = unit.slot_et[entity, session] >= 0
    entity, session = entity[is_in_reach], session[is_in_reach]
    panel = unit.segment.panel
    window_ew = windows.mark_windows(
        entity, session, panel.n_entities, panel.n_sessions, unit.horizon
    )
    return Case(target, unit, (entity, session), window_ew)


def bare_cases(
    segment: Segment,
    targets: Sequence[str],
    codes: dict[str, int | None],
    *,
    lookback: int,
    horizon: int,
    rest: int,
) -> list[Case]:
    """Every target in every stratum, without any combination."""
    units = [
        make_unit(segment, name, code, no_triggers(), lookback=lookback, horizon=horizon, rest=rest)
        for name, code in codes.items()
    ]
    return [
        make_case(target, unit, segment.panel.events[target])
        for target in targets
        for unit in units
    ]


def base_rates(case: Case) -> np.ndarray:
    """Share of each combination's own eligible cells that are in an event window.

    float64 [combinations], NaN where nothing is eligible.
    """
    unit = case.unit
    panel = unit.segment.panel
    sets = [unit.classes_of(combo) for combo in unit.triggers.combos]
    distinct = sorted(set(sets))
    if not distinct:
        return np.empty(0)
    class_sq = np.full((len(distinct), max(map(len, distinct))), -1, dtype=np.int64)
    for i, classes in enumerate(distinct):
        class_sq[i, : len(classes)] = classes
    cells, in_window = bits.count_cells(
        panel.cover_eqw,
        class_sq,
        bits.pack_flags(unit.is_open_et),
        case.window_ew,
    )
    rate = np.full(len(distinct), np.nan)
    np.divide(in_window, cells, out=rate, where=cells > 0)
    place = {classes: i for i, classes in enumerate(distinct)}
    return rate[[place[classes] for classes in sets]]
