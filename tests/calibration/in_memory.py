"""Hands on an invented world as the panel, study and cases a hunt would have read from files."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from miner.kernels import bits
from miner.panel import Labels, Panel, as_peers, distinct_events, pack_alerts
from miner.search import cases_of
from miner.settings import Study, study_from_dict
from miner.time_split import discovery_slice
from miner.units import Case
from tests.worlds import TARGET, WorldArrays


def panel_of(world: WorldArrays) -> Panel:
    """The panel that the world's files would give."""
    n_entities, n_types = world.is_published.shape
    n_sessions = world.n_sessions
    session = np.arange(n_sessions)
    is_listed_et = (session >= world.listed_from[:, None]) & (session < world.listed_to[:, None])
    columns, class_k = np.unique(
        np.vstack([world.is_published, world.published_from]), axis=1, return_inverse=True
    )
    cover = np.stack(
        [
            is_listed_et & (columns[:-1, q] > 0)[:, None] & (session >= columns[-1, q])
            for q in range(columns.shape[1])
        ],
        axis=1,
    )
    cover_eqw = bits.pack_flags(cover.reshape(-1, n_sessions)).reshape(
        n_entities, columns.shape[1], -1
    )
    peers = None
    if world.sectors_known:
        sector_et = np.repeat(world.sector.astype(np.int16)[:, None], n_sessions, axis=1)
        peers = Labels(world.sector_names, sector_et)
    return Panel(
        world.entity_names,
        world.type_names,
        n_sessions,
        pack_alerts(
            world.alert_entity,
            world.alert_type,
            world.alert_session,
            n_entities,
            n_types,
            n_sessions,
        ),
        {TARGET: distinct_events(world.event_entity, world.event_session)},
        cover_eqw,
        class_k.reshape(-1).astype(np.int64),
        None,
        as_peers(peers, n_entities, n_sessions),
    )


def study_of(world: WorldArrays, **sections: dict[str, Any]) -> Study:
    """Settings for the world, with keys of sections replaced; no file is ever read."""
    settings: dict[str, dict[str, Any]] = {
        "alerts": {"source": "alerts.csv"},
        "events": {"source": "events.csv"},
        "windows": {"lookback": world.lookback, "horizon": world.horizon},
    }
    for name, keys in sections.items():
        settings.setdefault(name, {}).update(keys)
    return study_from_dict(settings, Path("."))


def case_of(world: WorldArrays, study: Study | None = None) -> Case:
    """The one case of a world without strata: its whole calendar as discovery, its family."""
    segment = discovery_slice(panel_of(world), world.n_sessions - 1)
    (case,) = cases_of(segment, [TARGET], study or study_of(world))
    return case
