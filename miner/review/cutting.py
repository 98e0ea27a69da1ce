"""A study's inputs as they stood at the end of a session: nothing later can be seen in them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from miner.assemble import CodedLog, Inputs
from miner.panel import Labels, Panel


def cut_inputs(inputs: Inputs, stop: int) -> Inputs:
    """The inputs without sessions from ``stop`` on.

    Without groups and coverage, entities are known by their alerts and events: those that only
    come later go as well. So do alert types and targets that were not there yet, and what
    fingerprints, counts and moves say of whole tables.
    """
    alerts, events = _before(inputs.alerts, stop), _before(inputs.events, stop)
    panel = inputs.panel.until(stop)
    if inputs.study.groups is None and inputs.study.coverage is None:
        seen = np.zeros(panel.n_entities, dtype=bool)
        seen[alerts.entity] = True
        seen[events.entity] = True
        place = np.cumsum(seen, dtype=np.int32) - 1
        panel = _entities(panel, np.flatnonzero(seen), place)
        alerts = replace(alerts, entity=place[alerts.entity])
        events = replace(events, entity=place[events.entity])
    kinds, code = np.unique(alerts.type, return_inverse=True)
    panel = _types(panel, kinds)
    alerts = replace(alerts, type=code.astype(np.int32))
    calendar = replace(
        inputs.calendar,
        dates=inputs.calendar.dates[:stop],
        closes_us=inputs.calendar.closes_us[:stop],
    )
    return replace(
        inputs,
        calendar=calendar,
        panel=panel,
        targets=tuple(target for target in inputs.targets if panel.events[target][0].size),
        alerts=alerts,
        events=events,
        counts={
            name: {"used": log.entity.size}
            for name, log in (("alerts", alerts), ("events", events))
        },
        midnight={},
        fingerprints={},
        moves=None,
        price_warnings=(),
    )


def _before(log: CodedLog, stop: int) -> CodedLog:
    kept = log.session < stop
    return CodedLog(log.entity[kept], log.type[kept], log.session[kept], 0, 0)


def _entities(panel: Panel, kept: np.ndarray, place: np.ndarray) -> Panel:
    def rows(labels: Labels) -> Labels:
        return Labels(labels.names, labels.code_et[kept])

    return replace(
        panel,
        entity_names=tuple(panel.entity_names[e] for e in kept),
        alert_ekw=panel.alert_ekw[kept],
        events={
            target: (place[entity], session) for target, (entity, session) in panel.events.items()
        },
        cover_eqw=panel.cover_eqw[kept],
        strata=None if panel.strata is None else rows(panel.strata),
        peers=rows(panel.peers),
    )


def _types(panel: Panel, kept: np.ndarray) -> Panel:
    """Only these types; a class of coverage that none of them needs opens no cell."""
    if not kept.size:
        return panel
    classes, class_k = np.unique(panel.class_k[kept], return_inverse=True)
    return replace(
        panel,
        type_names=tuple(panel.type_names[k] for k in kept),
        alert_ekw=np.ascontiguousarray(panel.alert_ekw[:, kept]),
        cover_eqw=np.ascontiguousarray(panel.cover_eqw[:, classes]),
        class_k=class_k.astype(np.int64),
    )
