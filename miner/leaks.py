"""What in the tables seems to know the events: alerts that coincide with them, and coverage or
groups that were stamped in their knowledge. Each finding is one sentence with its counts.

Every test compares a count with its Poisson-binomial law under a null that holds how often each
entity and each date has what is counted, so that seasons, shocks and busy names raise no alarm. An
alarm needs a small p, adjusted over everything that was tested, and an effect no signal has.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import stats

from miner.kernels import bits, windows
from miner.kernels.coincidence import chances
from miner.kernels.tails import upper_tail
from miner.nulls.margins import fit_margins
from miner.panel import Events, Labels, Panel

LEVEL = 1e-3  # chance of any false alarm of one kind, over all its tests
FEWEST = 8  # coincidences
TIMES = 3.0  # as many as expected, and as at other distances
MOST_BEFORE = 0.5  # share of the events one session after the alert that no signal has
NEAR = np.array([2, 3, 4])  # sessions on either side that a coincidence is compared with
FEWEST_MEMBERS = 5
NEARLY_ALL, NEARLY_NONE = 0.9, 0.1
MANY_OUTSIDE = 0.01


@dataclass(frozen=True)
class Coincidence:
    """Events with an alert of a type exactly ``lag`` sessions before.

    Attributes
    ----------
    count, n_events : events with the alert, and all of them
    expected : such events by chance
    p : chance of as many, adjusted over all tests
    """

    target: str
    type: str
    lag: int
    count: int
    n_events: int
    expected: float
    p: float

    @property
    def is_alarming(self) -> bool:
        """Whether it is far beyond chance."""
        return (
            self.p <= LEVEL
            and self.count >= TIMES * self.expected
            and (self.lag == 0 or self.count >= MOST_BEFORE * self.n_events)
        )


@dataclass(frozen=True)
class Foreknowledge:
    """Cells at which a table changed, and how many of them an event followed.

    ``expected`` such by chance, ``p`` the chance of as many.
    """

    count: int
    n_cells: int
    expected: float
    p: float

    def is_alarming(self, n_tests: int) -> bool:
        """Whether it is far beyond chance, of ``n_tests`` tests."""
        enough = self.count >= FEWEST and self.count >= TIMES * self.expected
        return enough and self.p * n_tests <= LEVEL


def leaks(panel: Panel, labels: dict[str, Labels], *, lookback: int, horizon: int) -> Iterator[str]:
    """Every alarm, in words.

    Parameters
    ----------
    labels : the groups' labels by what they are used for (strata, peers)
    """
    yield from _coincidences(panel)
    yield from _alerts_outside(panel)
    starts = coverage_starts(panel)
    changes = {name: label_changes(panel, of) for name, of in labels.items()}
    n_tests = len(panel.events) * (1 + len(changes))
    for target, events in panel.events.items():
        for where, cells in (("coverage begins", starts), *changes.items()):
            if cells[0].size < FEWEST or events[0].size < FEWEST:
                continue
            found = foreknowledge(panel, events, cells, lookback=lookback, horizon=horizon)
            if found.is_alarming(n_tests):
                yield _told(target, where, found, horizon)
        for name, of in labels.items():
            yield from separations(panel, target, name, of, len(panel.events) * len(labels))


# --- alerts that are the event --------------------------------------------------------------


def coincidences(panel: Panel) -> Iterator[Coincidence]:
    """Every target, alert type and lag of no or one session with enough coincidences to judge."""
    n_tests = 2 * len(panel.events) * len(panel.type_names)
    for k, kind in enumerate(panel.type_names):
        cover_ew = np.ascontiguousarray(panel.cover_eqw[:, panel.class_k[k]])
        alert_ew = panel.alert_ekw[:, k] & cover_ew
        for target, (entity, session) in panel.events.items():
            for lag in (0, 1):
                count = _count(panel, alert_ew, entity, session - lag)
                elsewhere = max(
                    np.mean([_count(panel, alert_ew, entity, session - lag + far) for far in side])
                    for side in (NEAR, -NEAR)
                )
                if count < FEWEST or count < TIMES * elsewhere:
                    continue
                chance = chances(
                    alert_ew,
                    cover_ew,
                    panel.peers.code_et,
                    len(panel.peers.names),
                    entity,
                    session - lag,
                )
                expected = float(chance.sum())
                p = min(1.0, n_tests * upper_tail(chance, count))
                yield Coincidence(target, kind, lag, count, entity.size, expected, p)


def _count(panel: Panel, alert_ew: np.ndarray, entity: np.ndarray, session: np.ndarray) -> int:
    """Cells with an alert; none outside the calendar."""
    inside = (session >= 0) & (session < panel.n_sessions)
    entity, session = entity[inside], session[inside].astype(np.uint64)
    word = alert_ew[entity, session >> np.uint64(6)] >> (session & np.uint64(63))
    return int((word & np.uint64(1)).sum())


def _coincidences(panel: Panel) -> Iterator[str]:
    for c in coincidences(panel):
        if not c.is_alarming:
            continue
        when = "on the very session of" if c.lag == 0 else "exactly one session before"
        why = (
            "Such an alert reports the event"
            if c.lag == 0
            else "If the event is recorded, or defined, by it, this is no signal"
        )
        yield (
            f"target {c.target!r}: alerts of type {c.type!r} are {when} {c.count:,} of "
            f"{c.n_events:,} events, where {c.expected:,.1f} would be by chance. {why}; was the "
            "one made from the other? Leave the type out, or correct the stamps."
        )


def _alerts_outside(panel: Panel) -> Iterator[str]:
    """Alerts before or after the coverage that says they could not have been published."""
    n_out = n_all = 0
    for k in range(len(panel.type_names)):
        cover_ew = panel.cover_eqw[:, panel.class_k[k]]
        n_out += int(np.bitwise_count(panel.alert_ekw[:, k] & ~cover_ew).sum())
        n_all += int(np.bitwise_count(panel.alert_ekw[:, k]).sum())
    if n_out > MANY_OUTSIDE * n_all:
        yield (
            f"coverage: {n_out:,} of {n_all:,} alerts (entity, type, session) are on sessions on "
            "which the table says that they could not have been published; were its dates written "
            "later than the alerts?"
        )


# --- tables that know -----------------------------------------------------------------------


def coverage_starts(panel: Panel) -> Events:
    """Cells (entity, session) on which coverage of any type begins, the first session aside."""
    begins = np.zeros((panel.n_entities, panel.n_sessions), dtype=bool)
    for q in range(panel.cover_eqw.shape[1]):
        is_on = bits.unpack(np.ascontiguousarray(panel.cover_eqw[:, q]), panel.n_sessions)
        begins[:, 1:] |= is_on[:, 1:] & ~is_on[:, :-1]
    entity, session = np.nonzero(begins)
    return entity, session


def label_changes(panel: Panel, labels: Labels) -> Events:
    """Cells (entity, session) on which an entity gets another label than it had."""
    code_et = labels.code_et
    changes = np.zeros(code_et.shape, dtype=bool)
    changes[:, 1:] = code_et[:, 1:] != code_et[:, :-1]
    entity, session = np.nonzero(changes)
    return entity, session


def foreknowledge(
    panel: Panel, events: Events, cells: Events, *, lookback: int, horizon: int
) -> Foreknowledge:
    """How many of the cells an event follows within the horizon, against the margins null.

    The null is fitted over all covered cells in one group: a label under suspicion must not
    explain the events. Cells soon after an event are left out: what changes there may follow it.
    """
    is_open_et = bits.unpack(np.bitwise_or.reduce(panel.cover_eqw, axis=1), panel.n_sessions)
    is_open_et[:, : lookback - 1] = False
    is_open_et[:, max(0, panel.n_sessions - horizon) :] = False
    shape = panel.n_entities, panel.n_sessions
    is_window_et = bits.unpack(windows.mark_windows(*events, *shape, horizon), shape[1])
    entity, session = cells
    is_recent_et = np.zeros(shape, dtype=bool)
    for e, s in zip(*events, strict=True):
        is_recent_et[e, s : s + lookback + horizon + 1] = True
    kept = is_open_et[entity, session] & ~is_recent_et[entity, session]
    entity, session = entity[kept], session[kept]
    one = Labels(("",), np.zeros(shape, dtype=np.int16))
    rates = fit_margins(is_open_et, is_window_et, one, law=panel.law).rates(entity, session)
    count = int(is_window_et[entity, session].sum())
    p = upper_tail(rates, count) if count else 1.0
    return Foreknowledge(count, entity.size, float(rates.sum()), float(p))


def _told(target: str, where: str, found: Foreknowledge, horizon: int) -> str:
    what = where if where == "coverage begins" else f"an entity's label in {where} changes"
    table = "coverage" if where == "coverage begins" else "groups"
    return (
        f"{table}: on {found.count:,} of {found.n_cells:,} occasions on which {what}, a "
        f"{target!r} follows within {horizon} sessions, where {found.expected:,.1f} would by "
        "chance; was the table written when the events were known?"
    )


def separations(
    panel: Panel, target: str, name: str, labels: Labels, n_tests: int
) -> Iterator[str]:
    """The label that nearly tells the entities that ever have an event from those that never do.

    A label counts for an entity that had it before its first event, so that labels which follow
    events raise no alarm.
    """
    event_e, session = panel.events[target]
    first_e = np.full(panel.n_entities, panel.n_sessions)
    np.minimum.at(first_e, event_e, session)
    entity, start = label_changes(panel, labels)
    early = start < first_e[entity]
    has_label = np.unique(
        np.stack(
            [
                np.append(np.arange(panel.n_entities), entity[early]),
                np.append(labels.code_et[:, 0], labels.code_et[entity[early], start[early]]),
            ]
        ),
        axis=1,
    )
    entity, code = has_label[:, has_label[1] >= 0]
    has_event_e = first_e < panel.n_sessions
    n_in = np.bincount(code, minlength=len(labels.names))
    with_in = np.bincount(code[has_event_e[entity]], minlength=len(labels.names))
    n_out, with_out = panel.n_entities - n_in, has_event_e.sum() - with_in
    found = []
    for g in np.flatnonzero(np.minimum(n_in, n_out) >= FEWEST_MEMBERS):
        share_in, share_out = with_in[g] / n_in[g], with_out[g] / n_out[g]
        if max(share_in, share_out) < NEARLY_ALL or min(share_in, share_out) > NEARLY_NONE:
            continue
        table = [[with_in[g], n_in[g] - with_in[g]], [with_out[g], n_out[g] - with_out[g]]]
        p = stats.fisher_exact(table).pvalue * n_tests * len(labels.names)
        if p <= LEVEL:
            found.append((share_in < share_out, p, g))
    if found:  # one label says it: the others are its mirror
        g = min(found)[-1]
        yield (
            f"groups: {with_in[g]:,} of {n_in[g]:,} entities with the {name} label "
            f"{labels.names[g]!r} ever have a {target!r}, and {with_out[g]:,} of {n_out[g]:,} "
            "of the others; was the label given when the events were known?"
        )
