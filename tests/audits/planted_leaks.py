"""Hands on panels with a leak put into them, and labels that are clean although they change."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from miner.kernels import bits
from miner.panel import Labels, Panel
from tests.worlds import TARGET

HORIZON = 5
Labelled = tuple[Panel, dict[str, Labels]]


def with_alerts(panel: Panel, name: str, entity: np.ndarray, session: np.ndarray) -> Panel:
    """The panel with the alerts of one more type, covered as the first type is."""
    alert_ew = np.zeros((panel.n_entities, panel.alert_ekw.shape[2]), dtype=np.uint64)
    bits.pack(entity.astype(np.int64), session.astype(np.int64), alert_ew)
    return replace(
        panel,
        type_names=(*panel.type_names, name),
        alert_ekw=np.concatenate([panel.alert_ekw, alert_ew[:, None]], axis=1),
        class_k=np.append(panel.class_k, panel.class_k[0]),
    )


def caused(panel: Panel, rng: np.random.Generator, lag: int, share: float) -> Panel:
    """One more type: noise, and on a share of the events an alert ``lag`` sessions before."""
    entity, session = panel.events[TARGET]
    chosen = (rng.random(entity.size) < share) & (session >= lag)
    n_noise = 1000
    return with_alerts(
        panel,
        "planted",
        np.append(entity[chosen], rng.integers(0, panel.n_entities, n_noise)),
        np.append(session[chosen] - lag, rng.integers(0, panel.n_sessions, n_noise)),
    )


def before_events(panel: Panel, rng: np.random.Generator, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Cells one to five sessions before an event, on at most ``n`` entities, one on each."""
    entity, session = panel.events[TARGET]
    chosen = np.unique(entity, return_index=True)[1]
    chosen = rng.permutation(chosen[session[chosen] > 40])[:n]
    return entity[chosen], session[chosen] - rng.integers(1, HORIZON + 1, chosen.size)


def covered_late(panel: Panel, rng: np.random.Generator, n: int) -> Panel:
    """Coverage of ``n`` entities begins shortly before an event."""
    cover = panel.cover_eqw.copy()
    for e, t in zip(*before_events(panel, rng, n), strict=True):
        for q in range(cover.shape[1]):
            is_on = bits.unpack(np.ascontiguousarray(cover[e : e + 1, q]), panel.n_sessions)
            is_on[0, :t] = False
            cover[e, q] = bits.pack_flags(is_on)[0]
    return replace(panel, cover_eqw=cover)


def labels_changing(panel: Panel, entity: np.ndarray, session: np.ndarray) -> Labels:
    """Two labels, by halves of the names; at each cell given its entity gets the other one."""
    code_et = np.zeros((panel.n_entities, panel.n_sessions), dtype=np.int16)
    code_et[::2] = 1
    for e, t in zip(entity, session, strict=True):
        code_et[e, t:] = 1 - code_et[e, t:]
    return Labels(("large", "small"), code_et)


def moved_at_random(panel: Panel, rng: np.random.Generator, n: int) -> Labels:
    """Labels that change at ``n`` random cells."""
    return labels_changing(
        panel, rng.integers(0, panel.n_entities, n), rng.integers(1, panel.n_sessions, n)
    )


def lately(panel: Panel) -> Labels:
    """The label "had an event in the last thirty sessions": known at the time, and changing."""
    code_et = np.zeros((panel.n_entities, panel.n_sessions), dtype=np.int16)
    for e, s in zip(*panel.events[TARGET], strict=True):
        code_et[e, s + 1 : s + 31] = 1
    return Labels(("calm", "lately"), code_et)


def by_outcome(panel: Panel, rng: np.random.Generator, share: float) -> Labels:
    """The label "a target, in the end", given to a share of those that become one."""
    has_event_e = np.zeros(panel.n_entities, dtype=bool)
    has_event_e[panel.events[TARGET][0]] = True
    code_e = (has_event_e & (rng.random(has_event_e.size) < share)).astype(np.int16)
    return Labels(("other", "target"), np.repeat(code_e[:, None], panel.n_sessions, axis=1))


def clean(panel: Panel, rng: np.random.Generator) -> Labelled:
    """Nothing planted; labels that change at random and after events."""
    return panel, {"band": moved_at_random(panel, rng, 100), "lately": lately(panel)}


PLANTS: dict[str, Callable[[Panel, np.random.Generator], Labelled]] = {
    "alert on the event's session, 10 % of events": lambda p, r: (caused(p, r, 0, 0.1), {}),
    "alert on the event's session, 30 %": lambda p, r: (caused(p, r, 0, 0.3), {}),
    "alert one session before, 60 %": lambda p, r: (caused(p, r, 1, 0.6), {}),
    "coverage of 20 names begins 1 to 5 sessions before": lambda p, r: (
        covered_late(p, r, 20),
        {},
    ),
    "coverage of 60 names": lambda p, r: (covered_late(p, r, 60), {}),
    "labels of 20 names change 1 to 5 sessions before": lambda p, r: (
        p,
        {"band": labels_changing(p, *before_events(p, r, 20))},
    ),
    "labels of 60 names": lambda p, r: (p, {"band": labels_changing(p, *before_events(p, r, 60))}),
    "a label for 95 % of those that ever have one": lambda p, r: (
        p,
        {"band": by_outcome(p, r, 0.95)},
    ),
}
