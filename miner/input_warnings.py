"""What looks wrong in the tables: each finding one sentence that says what to look at."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from miner.assemble import Inputs
from miner.leaks import leaks
from miner.nulls.margins import fit_margins
from miner.nulls.unsettled import unsettled
from miner.panel import Labels
from miner.table_warnings import named
from miner.units import Case

JUMP = 2.5  # a type's monthly count, before against after
MONTHS_EACH_SIDE = 6
MANY_MIDNIGHTS = 0.2
FEW_EVENTS_DISCOVERY = 30
FEW_EVENTS_HOLDOUT = 10
SMALL_PEER_GROUP = 5
RARE_PEER_GROUP = 10
LITTLE_CHANCE = 0.5


def find_warnings(
    inputs: Inputs, early: list[Case], late: list[Case], dates: np.ndarray
) -> Iterator[str]:
    """Every warning about the inputs; ``early`` and ``late`` are discovery and holdout."""
    yield from _stamps(inputs)
    yield from inputs.table_warnings
    yield from (f"prices: {warning}" for warning in inputs.price_warnings)
    yield from _rows(inputs)
    yield from jumps(inputs.panel.type_names, inputs.alerts.type, inputs.alerts.session, dates)
    yield from _events(inputs, early, late)
    for case in early:
        yield from _peers(case, dates)
    windows = inputs.study.windows
    yield from leaks(
        inputs.panel, _labels(inputs), lookback=windows.lookback, horizon=windows.horizon
    )


def _labels(inputs: Inputs) -> dict[str, Labels]:
    """The groups' labels in use, by column."""
    groups, panel = inputs.study.groups, inputs.panel
    labels: dict[str, Labels] = {}
    if groups is not None and groups.peers is not None:
        labels[groups.peers] = panel.peers
    if groups is not None and groups.strata is not None and panel.strata is not None:
        labels[groups.strata] = panel.strata
    return labels


def _stamps(inputs: Inputs) -> Iterator[str]:
    for name, (midnight, n) in inputs.midnight.items():
        if n and midnight == n:
            yield (
                f"{name}: every stamp is midnight or a bare date, so each counts in that date's "
                "session; those that came after the close look a session earlier than they were. "
                "Give times if you can."
            )
        elif midnight > MANY_MIDNIGHTS * n:
            yield (
                f"{name}: {midnight:,} of {n:,} stamps are midnight or bare dates and count in "
                "that date's session, even if they came after the close."
            )


def _rows(inputs: Inputs) -> Iterator[str]:
    for name, count in inputs.counts.items():
        for reason in ("unreadable", "outside calendar", "unknown entity"):
            if count.get(reason):
                yield f"{name}: {count[reason]:,} of {count['rows']:,} rows set aside ({reason})."
        if count.get("repeats"):
            yield (
                f"{name}: {count['repeats']:,} rows repeat another of the same entity, type and "
                "session; each such group counts once."
            )


def jumps(
    names: tuple[str, ...], type_: np.ndarray, session: np.ndarray, dates: np.ndarray
) -> Iterator[str]:
    """Types whose monthly count steps up or down as if their definition had changed.

    A step: over six whole months on either side of a month's start, every count on one side
    exceeds every count on the other, and the means differ by a factor of 2.5 or more. The largest
    step of a type is told.
    """
    month_t = dates.astype("datetime64[M]").astype(int)
    month_t = month_t - month_t[0]
    n_months = int(month_t[-1]) + 1
    first_day = dates.astype("datetime64[M]")[0]
    count_km = np.zeros((len(names), n_months), dtype=np.int64)
    np.add.at(count_km, (type_, month_t[session]), 1)
    m = MONTHS_EACH_SIDE
    for k, name in enumerate(names):
        best, at = JUMP, -1
        # the first and last month may be partial
        for start in range(m + 1, n_months - m):
            before, after = count_km[k, start - m : start], count_km[k, start : start + m]
            if before.max() < after.min() or after.max() < before.min():
                low, high = sorted((before.mean(), after.mean()))
                # a handful of alerts a month steps by chance
                if high >= 10 and high / max(low, 0.5) >= best:
                    best, at = high / max(low, 0.5), start
        if at >= 0:
            before, after = count_km[k, at - m : at].mean(), count_km[k, at : at + m].mean()
            yield (
                f"alerts: type {name!r} goes from about {before:,.0f} to {after:,.0f} a month at "
                f"{first_day + at}; was its definition or coverage changed?"
            )


def _events(inputs: Inputs, early: list[Case], late: list[Case]) -> Iterator[str]:
    seen: dict[str, int] = {}
    for a, b in zip(early, late, strict=True):
        where = f"target {a.target!r}, stratum {a.unit.stratum!r}"
        if a.events[0].size < FEW_EVENTS_DISCOVERY:
            n = a.events[0].size
            yield f"{where}: only {n} event{'s' * (n != 1)} in discovery; little can be found."
        if b.events[0].size < FEW_EVENTS_HOLDOUT:
            n = b.events[0].size
            yield (
                f"{where}: only {n} event{'s' * (n != 1)} in the holdout; little can be confirmed."
            )
        seen[a.target] = seen.get(a.target, 0) + a.events[0].size
    panel = inputs.panel
    if not panel.cover_eqw.any():
        yield "coverage: no entity is covered on any session of the calendar."
    for target, (entity, session) in panel.events.items():
        n_out = int((~_in_coverage(inputs, entity, session)).sum())
        if n_out:
            yield (
                f"target {target!r}: {n_out:,} of {entity.size:,} events fall where their entity "
                "is covered on none of the sessions of the horizon before; they cannot be hit."
            )


def _in_coverage(inputs: Inputs, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
    """Whether the entity is covered for any type on a session before the event, in the horizon."""
    cover_ew = np.bitwise_or.reduce(inputs.panel.cover_eqw, axis=1)
    is_in = np.zeros(entity.size, dtype=bool)
    for back in range(1, inputs.study.windows.horizon + 1):
        t = session - back
        word = cover_ew[entity, np.maximum(t, 0) >> 6]
        is_in |= (t >= 0) & ((word >> (np.maximum(t, 0) & 63).astype(np.uint64)) & 1).astype(bool)
    return is_in


def _peers(case: Case, dates: np.ndarray) -> Iterator[str]:
    unit = case.unit
    entity, session = case.events
    if entity.size == 0:
        return
    where = f"target {case.target!r}, stratum {unit.stratum!r}"
    peers = unit.segment.panel.peers
    slot = unit.slot_et[entity, session]
    small = []
    n_small = 0
    for g, name in enumerate(peers.names):
        is_member_e = ((peers.code_et == g) & unit.is_open_et).any(axis=1)
        n_events = int((slot == g).sum())
        if n_events and (is_member_e.sum() < SMALL_PEER_GROUP or n_events < RARE_PEER_GROUP):
            small.append(name or "(no label)")
            n_small += n_events
    if small:
        yield (
            f"{where}: peer groups with under {SMALL_PEER_GROUP} entities or {RARE_PEER_GROUP} "
            f"events leave little to chance: {named(small)} ({n_small:,} of {entity.size:,} "
            "events). Coarser peers would leave more."
        )
    margins = fit_margins(unit.is_open_et, case.is_window_et, peers, law=unit.segment.panel.law)
    stuck = unsettled(margins, unit.is_open_et, case.is_window_et)
    if stuck is not None:
        if stuck.entity is not None:
            who = f"entity {unit.segment.panel.entity_names[stuck.entity]!r}"
        else:
            who = f"{dates[stuck.session]} in peer group {peers.names[stuck.group or 0]!r}"
        yield (
            f"{where}: the margins null did not settle: for {who} it expects {stuck.fitted:.6g} "
            f"sessions in an event window where there are {stuck.observed:,}, and its p-values are "
            "as rough as that. Coarser peers, or leaving it out, would let it settle."
        )
    cell_e, cell_t = np.nonzero(unit.is_open_et & case.is_window_et)
    left = 1.0 - float(margins.rates(cell_e, cell_t).mean()) if cell_e.size else 1.0
    if left < LITTLE_CHANCE:
        yield (
            f"{where}: knowing only how often each entity and each peer date has an event window "
            f"already gives the actual windows a chance of {1 - left:.0%} on average; the null "
            "leaves little open for any combination to explain."
        )
