"""Invented worlds for calibration and recovery: arrays from a seed, and the same as study files.

Every driver's strength runs from 0 (off) to 1 (strong) and acts on alerts and events alike, which
is what makes a combination look better than it is; only the reactive alerts merely follow events.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
from numpy.typing import NDArray

from miner.demo.world_parts import (
    IntArray,
    Intensity,
    PlantingSlots,
    distinct,
    follow_ups,
    name_weights,
    planted_alert_sessions,
    planted_hits,
    planting_slots,
    season_level,
    shock_level,
)

TARGET = "upset"
BANDS = ("small", "mid", "large")
FIRST_DAY = np.datetime64("2020-01-01")

_SEASON_SESSIONS = 63
_SPELL_EVERY, _SPELL_LENGTH = 250, 30
_REACTION_REACH = 5

Points = tuple[IntArray, IntArray]


@dataclass(frozen=True)
class Plant:
    """Alert types (indices) put in together ``n_triggers`` times, a share followed by the target.

    Outside ``life`` (shares of the calendar) and outside ``stratum`` (a name in `BANDS`) there is
    no effect; with a stratum, ``n_triggers`` are inside it and others, as dense, outside.
    """

    combination: tuple[int, ...]
    precision: float
    n_triggers: int
    life: tuple[float, float] = (0.0, 1.0)
    stratum: str | None = None


@dataclass(frozen=True)
class WorldArrays:
    """A world as distinct (entity, type, session) alerts and (entity, session) events, sorted.

    Parameters
    ----------
    sector, band : int32 [entities]
    listed_from, listed_to : int32 [entities], half-open
    is_published : bool [entities, types], whether the type exists for the entity at all
    published_from : int32 [types], the first session of each type
    """

    seed: int
    n_sessions: int
    lookback: int
    horizon: int
    entity_names: tuple[str, ...]
    type_names: tuple[str, ...]
    sector_names: tuple[str, ...]
    sectors_known: bool
    sector: NDArray[np.int32]
    band: NDArray[np.int32]
    listed_from: NDArray[np.int32]
    listed_to: NDArray[np.int32]
    is_published: NDArray[np.bool_]
    published_from: NDArray[np.int32]
    alert_entity: NDArray[np.int32]
    alert_type: NDArray[np.int32]
    alert_session: NDArray[np.int32]
    event_entity: NDArray[np.int32]
    event_session: NDArray[np.int32]
    planted: tuple[Plant, ...]


def make_world(
    seed: int,
    *,
    n_entities: int = 300,
    n_sessions: int = 600,
    n_types: int = 12,
    base_rate: float = 0.05,
    alerts_per_type: int = 2000,
    lookback: int = 5,
    horizon: int = 5,
    season: float = 0.0,
    market_shocks: float = 0.0,
    sector_shocks: float = 0.0,
    n_sectors: int = 6,
    sectors_known: bool = True,
    busy_names: float = 0.0,
    listing: float = 0.0,
    type_coverage: float = 0.0,
    clustered_alerts: float = 0.0,
    clustered_events: float = 0.0,
    reactive_alerts: float = 0.0,
    busy_spell: float = 0.0,
    planted: Sequence[Plant] = (),
) -> WorldArrays:
    """Draw a world.

    ``base_rate`` is the share of listed entity-sessions whose horizon holds an event, before what
    is planted; ``listing`` and ``type_coverage`` are shares of entities that list late or leave
    early and of types that are published for half of the entities or from a quarter of the
    calendar on. What is not published is left out of ``alerts_per_type``, repeats of one type on
    one session count once, so numbers fall a little short. Reactive are the last quarter of types.
    A busy spell drives one entity's alerts and events together, and reactive alerts under clustered
    events come before the next ones: no null that holds margins removes either.
    """
    rng = np.random.default_rng(seed)
    sector = rng.integers(0, n_sectors, n_entities)
    band = rng.integers(0, len(BANDS), n_entities)
    start, stop = _listings(rng, n_entities, n_sessions, listing)
    is_published, published_from = _publication(rng, n_entities, n_types, n_sessions, type_coverage)
    level = (
        season_level((np.arange(n_sessions) % _SEASON_SESSIONS) / _SEASON_SESSIONS, season)
        * shock_level(rng, 1, n_sessions, market_shocks)
        * shock_level(rng, n_sectors, n_sessions, sector_shocks)
    )
    source = _Source(
        Intensity(name_weights(rng, n_entities, busy_names), level, sector, start, stop),
        _spell_starts(rng, start, stop, n_sessions),
        0.5 * busy_spell,
    )

    events = _events(rng, source, base_rate, horizon, clustered_events)
    slots = planting_slots(rng, start, stop, lookback, horizon)
    plants = [
        _plant(rng, plant, slots, band, is_published, published_from, lookback, horizon, n_sessions)
        for plant in planted
    ]
    event_entity = np.concatenate((events[0], *(part[1][0] for part in plants)))
    event_session = np.concatenate((events[1], *(part[1][1] for part in plants)))
    event_key = distinct(event_entity * n_sessions + event_session)
    event_entity, event_session = event_key // n_sessions, event_key % n_sessions

    entity, session = source.draw(rng, alerts_per_type * n_types, 2.0 * clustered_alerts)
    kind = rng.integers(0, n_types, entity.size)
    _react(rng, 0.6 * reactive_alerts, n_types, event_entity, event_session, entity, kind, session)
    is_kept = (session >= np.maximum(start[entity], published_from[kind])) & (
        session < stop[entity]
    )
    is_kept &= is_published[entity, kind]
    key = (entity * n_types + kind) * n_sessions + session
    alert_key = distinct(
        np.concatenate(
            (key[is_kept], *((e * n_types + k) * n_sessions + t for (e, k, t), _ in plants))
        )
    )
    entity_type = alert_key // n_sessions

    width = len(str(n_entities - 1))
    return WorldArrays(
        seed=seed,
        n_sessions=n_sessions,
        lookback=lookback,
        horizon=horizon,
        entity_names=tuple(f"e{e:0{width}d}" for e in range(n_entities)),
        type_names=tuple(f"k{k:02d}" for k in range(n_types)),
        sector_names=tuple(f"s{g:02d}" for g in range(n_sectors)),
        sectors_known=sectors_known,
        sector=sector.astype(np.int32),
        band=band.astype(np.int32),
        listed_from=start.astype(np.int32),
        listed_to=stop.astype(np.int32),
        is_published=is_published,
        published_from=published_from.astype(np.int32),
        alert_entity=(entity_type // n_types).astype(np.int32),
        alert_type=(entity_type % n_types).astype(np.int32),
        alert_session=(alert_key % n_sessions).astype(np.int32),
        event_entity=event_entity.astype(np.int32),
        event_session=event_session.astype(np.int32),
        planted=tuple(planted),
    )


@dataclass(frozen=True)
class _Source:
    """What alerts and events are both drawn from: the intensity and each entity's busy spells."""

    intensity: Intensity
    spell_start: IntArray
    spell_share: float

    def draw(self, rng: np.random.Generator, n_expected: float, follow_up_mean: float) -> Points:
        """Entities and sessions; those after the end of a life are dropped."""
        entity, session = self.intensity.draw(rng, n_expected / (1.0 + follow_up_mean))
        if self.spell_share > 0:
            moved = np.flatnonzero(rng.random(entity.size) < self.spell_share)
            spell = rng.integers(0, self.spell_start.shape[1], moved.size)
            begin = self.spell_start[entity[moved], spell]
            session[moved] = begin + rng.integers(0, _SPELL_LENGTH, moved.size)
        if follow_up_mean > 0:
            leader, later = follow_ups(rng, session, follow_up_mean)
            entity = np.concatenate((entity, entity[leader]))
            session = np.concatenate((session, later))
        is_kept = session < self.intensity.stop[entity]
        return entity[is_kept], session[is_kept]


def _listings(
    rng: np.random.Generator, n_entities: int, n_sessions: int, share: float
) -> tuple[IntArray, IntArray]:
    """Half of the share lists in the first half of the calendar, half leaves in the second."""
    start = np.zeros(n_entities, dtype=np.int64)
    stop = np.full(n_entities, n_sessions)
    fate = rng.random(n_entities)
    is_late = fate < share / 2
    is_gone = (fate >= share / 2) & (fate < share)
    start[is_late] = rng.integers(1, n_sessions // 2, int(is_late.sum()))
    stop[is_gone] = rng.integers(n_sessions // 2, n_sessions, int(is_gone.sum()))
    return start, stop


def _publication(
    rng: np.random.Generator, n_entities: int, n_types: int, n_sessions: int, share: float
) -> tuple[NDArray[np.bool_], IntArray]:
    fate = rng.random(n_types)
    is_half = fate < share / 2
    is_new = (fate >= share / 2) & (fate < share)
    is_published = (rng.random((n_entities, n_types)) < 0.5) | ~is_half
    return is_published, np.where(is_new, n_sessions // 4, 0)


def _spell_starts(
    rng: np.random.Generator, start: IntArray, stop: IntArray, n_sessions: int
) -> IntArray:
    """First sessions [entities, spells] of each entity's busy spells, inside its life."""
    n_spells = max(1, n_sessions // _SPELL_EVERY)
    last = np.maximum(stop - _SPELL_LENGTH, start + 1)
    return rng.integers(start[:, None], last[:, None], (start.size, n_spells))


def _window_share(points: Points, source: _Source, horizon: int) -> float:
    """Share of listed entity-sessions ``t`` with a point in ``t + 1 .. t + horizon``."""
    intensity = source.intensity
    n_sessions = intensity.level.shape[1]
    key = distinct(points[0] * n_sessions + points[1])
    entity, session = key // n_sessions, key % n_sessions
    reach = np.minimum(horizon, session - intensity.start[entity])
    is_same = entity[1:] == entity[:-1]
    gap = session[1:] - session[:-1]
    reach[1:] = np.where(is_same, np.minimum(reach[1:], gap), reach[1:])
    return float(reach.sum() / (intensity.stop - intensity.start).sum())


def _events(
    rng: np.random.Generator, source: _Source, base_rate: float, horizon: int, clustering: float
) -> Points:
    """Background events; their number is set by two trial draws, since windows overlap."""
    n_cells = float((source.intensity.stop - source.intensity.start).sum())
    n_expected = -np.log1p(-base_rate) * n_cells / horizon
    for _ in range(2):
        share = _window_share(source.draw(rng, n_expected, clustering), source, horizon)
        if share > 0:
            n_expected *= np.log1p(-base_rate) / np.log1p(-share)
    return source.draw(rng, n_expected, clustering)


def _react(
    rng: np.random.Generator,
    share: float,
    n_types: int,
    event_entity: IntArray,
    event_session: IntArray,
    entity: IntArray,
    kind: IntArray,
    session: IntArray,
) -> None:
    """Move, in place, a share of the reactive types' alerts to just after events."""
    is_reactive = kind >= n_types - max(1, n_types // 4)
    moved = np.flatnonzero(is_reactive & (rng.random(kind.size) < share))
    if event_entity.size:
        cause = rng.integers(0, event_entity.size, moved.size)
        entity[moved] = event_entity[cause]
        session[moved] = event_session[cause] + rng.integers(0, _REACTION_REACH, moved.size)


def _plant(
    rng: np.random.Generator,
    plant: Plant,
    slots: PlantingSlots,
    band: IntArray,
    is_published: NDArray[np.bool_],
    published_from: IntArray,
    lookback: int,
    horizon: int,
    n_sessions: int,
) -> tuple[tuple[IntArray, IntArray, IntArray], Points]:
    """Alerts (entity, type, session) and events (entity, session) of one plant."""
    kinds = np.array(plant.combination)
    size = kinds.size
    is_wanted = is_published[slots.entity][:, kinds].all(axis=1)
    is_wanted &= slots.session - lookback + 1 >= published_from[kinds].max()
    is_inside = np.ones(slots.entity.size, dtype=np.bool_)
    if plant.stratum is not None:
        is_inside = band[slots.entity] == BANDS.index(plant.stratum)
    n_outside = round(
        plant.n_triggers * (is_wanted & ~is_inside).sum() / max(1, (is_wanted & is_inside).sum())
    )
    entity, session = slots.take(rng, plant.n_triggers, is_wanted & is_inside)
    idle_entity, idle_session = slots.take(rng, n_outside, is_wanted & ~is_inside)
    is_hit = planted_hits(rng, plant.n_triggers, plant.precision)
    first, last = (share * n_sessions for share in plant.life)
    is_hit &= (session >= first) & (session < last)
    after = session + rng.integers(1, horizon + 1, session.size)
    events = entity[is_hit], after[is_hit]

    entity = np.concatenate((entity, idle_entity))
    session = np.concatenate((session, idle_session))
    at = planted_alert_sessions(rng, session, size, lookback)
    return (np.repeat(entity, size), np.tile(kinds, entity.size), at.ravel()), events


def write_world(
    world: WorldArrays,
    folder: Path,
    *,
    strata: bool = False,
    settings: Mapping[str, Mapping[str, Any]] | None = None,
) -> Path:
    """Write the world as a study on the "daily" calendar and return its settings file.

    ``strata`` adds the size bands; ``settings`` adds keys to the sections of the file, or
    replaces them. Alerts and events are parquet, groups and coverage csv.
    """
    folder.mkdir(parents=True, exist_ok=True)
    names = np.array(world.entity_names)
    for name, entity, session, kind in (
        (
            "alerts",
            world.alert_entity,
            world.alert_session,
            _pick(np.array(world.type_names), world.alert_type),
        ),
        (
            "events",
            world.event_entity,
            world.event_session,
            _pick(np.array([TARGET]), np.zeros(world.event_entity.size, dtype=np.int32)),
        ),
    ):
        stamp = (FIRST_DAY + session).astype("datetime64[ms]") + np.timedelta64(12, "h")
        table = pa.table({"entity": _pick(names, entity), "time": stamp, "type": kind})
        pa.parquet.write_table(table, folder / f"{name}.parquet")

    sections: dict[str, dict[str, Any]] = {
        "study": {"name": f"world {world.seed}"},
        "alerts": {"source": "alerts.parquet"},
        "events": {"source": "events.parquet", "targets": [TARGET]},
        "coverage": {"source": "coverage.csv"},
        "sessions": {
            "calendar": "daily",
            "start": str(FIRST_DAY),
            "end": str(FIRST_DAY + world.n_sessions - 1),
        },
        "windows": {"lookback": world.lookback, "horizon": world.horizon},
    }
    groups: dict[str, Any] = {"entity": names}
    if strata:
        groups["size_band"] = np.array(BANDS)[world.band]
        sections["groups"] = {"source": "groups.csv", "strata": "size_band", "pooled": True}
    if world.sectors_known:
        groups["sector"] = np.array(world.sector_names)[world.sector]
        sections.setdefault("groups", {"source": "groups.csv"})["peers"] = "sector"
    if "groups" in sections:
        pa.csv.write_csv(pa.table(groups), folder / "groups.csv")
    pa.csv.write_csv(_coverage(world), folder / "coverage.csv")

    for section, keys in (settings or {}).items():
        sections.setdefault(section, {}).update(keys)
    lines = [
        line
        for section, keys in sections.items()
        # A JSON string, number, boolean or list of them is one in TOML as well.
        for line in (f"[{section}]", *(f"{k} = {json.dumps(v)}" for k, v in keys.items()), "")
    ]
    study = folder / "study.toml"
    study.write_text("\n".join(lines), encoding="utf-8")
    return study


def _pick(names: NDArray[np.str_], code: NDArray[Any]) -> pa.Array:
    return pa.array(names, pa.string()).take(pa.array(code))


def _coverage(world: WorldArrays) -> pa.Table:
    """One row per entity, or per entity and type where types are not published alike."""
    is_alike = bool(world.is_published.all()) and not world.published_from.any()
    if is_alike:
        entity = np.arange(len(world.entity_names))
        kinds = pa.nulls(entity.size, pa.string())
        start, stop = world.listed_from, world.listed_to
    else:
        entity, kind = np.nonzero(world.is_published)
        start = np.maximum(world.listed_from[entity], world.published_from[kind])
        stop = world.listed_to[entity]
        is_kept = start < stop
        entity, kind, start, stop = entity[is_kept], kind[is_kept], start[is_kept], stop[is_kept]
        kinds = _pick(np.array(world.type_names), kind)
    first = np.datetime_as_string(FIRST_DAY + start)
    last = np.datetime_as_string(FIRST_DAY + stop - 1)
    return pa.table(
        {
            "entity": _pick(np.array(world.entity_names), entity),
            "type": kinds,
            "start": pa.array(first, pa.string(), mask=start == 0),
            "end": pa.array(last, pa.string(), mask=stop == world.n_sessions),
        }
    )
