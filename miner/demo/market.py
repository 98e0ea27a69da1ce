"""Hands on the demo's invented market as arrays: companies, their bands, alerts and events."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from miner.demo.cast import ALERT_KINDS, BANDS, PLANTINGS, SECTORS, AlertKind, Planting
from miner.demo.stamps import quarter_phase, weekdays
from miner.demo.world_parts import (
    FloatArray,
    IntArray,
    Intensity,
    company_names,
    distinct,
    follow_ups,
    name_weights,
    planted_alert_sessions,
    planted_hits,
    planting_slots,
    season_level,
    shock_level,
)

LOOKBACK = 5
HORIZON = 5

_N_COMPANIES = 1200
N_EVENTS = 6500
_EVENT_EXPOSURE = 0.9
_WITHDRAWAL_SHARE = 0.12


@dataclass(frozen=True)
class Companies:
    """Who is listed when and where: sessions are half-open, ``band_et`` indexes `BANDS`.

    Parameters
    ----------
    names : str [companies]
    sector : int [companies], index into `SECTORS`
    start, stop : int [companies], listed sessions
    band_et : int8 [companies, sessions], kept up outside the listed life
    weight : float [companies], busyness shared by alerts and events
    """

    names: NDArray[np.str_]
    sector: IntArray
    start: IntArray
    stop: IntArray
    band_et: NDArray[np.int8]
    weight: FloatArray


@dataclass(frozen=True)
class Market:
    """Alerts and events as (company, kind, session) points; alerts may repeat one another.

    ``alert_kind`` indexes `ALERT_KINDS`, ``event_kind`` is 0 for the target, 1 for a withdrawal.
    """

    day: NDArray[np.datetime64]
    companies: Companies
    alert_entity: IntArray
    alert_kind: IntArray
    alert_session: IntArray
    event_entity: IntArray
    event_kind: IntArray
    event_session: IntArray


def first_session(kind: AlertKind, day: NDArray[np.datetime64]) -> int:
    """Return the first session on which the alert type is published."""
    return int(np.searchsorted(day, np.datetime64(kind.from_date))) if kind.from_date else 0


def is_published(
    kind: AlertKind,
    market_day: NDArray[np.datetime64],
    companies: Companies,
    entity: IntArray,
    session: IntArray,
) -> NDArray[np.bool_]:
    """Return whether the type is published for each listed company-session [points]."""
    is_open = session >= first_session(kind, market_day)
    if kind.is_large_only:
        is_open &= companies.band_et[entity, session] > 0
    return is_open


def invent_companies(rng: np.random.Generator, day: NDArray[np.datetime64]) -> Companies:
    """Draw the companies: sectors, listings and delistings, size bands with some migration."""
    n, n_sessions = _N_COMPANIES, day.size
    start = np.zeros(n, dtype=np.int64)
    stop = np.full(n, n_sessions)
    fate = rng.random(n)
    is_late, is_gone = fate < 0.15, fate > 0.85
    start[is_late] = rng.integers(20, int(0.6 * n_sessions), int(is_late.sum()))
    stop[is_gone] = rng.integers(int(0.4 * n_sessions), n_sessions - 20, int(is_gone.sum()))

    # Bands change at half-years only; a company moves at most twice, one band at a time.
    month = day.astype("datetime64[M]").astype(np.int64)
    half_year = 1 + np.flatnonzero(np.diff(month // 6))
    band = rng.choice(len(BANDS), n, p=(0.36, 0.36, 0.28))
    band_et = np.repeat(band.astype(np.int8)[:, None], n_sessions, axis=1)
    for share in (0.25, 0.08):
        moving = np.flatnonzero(rng.random(n) < share)
        step = rng.choice((-1, 1), moving.size)
        at = rng.choice(half_year, moving.size)
        is_after = np.arange(n_sessions) >= at[:, None]
        band_et[moving] = np.clip(band_et[moving] + step[:, None] * is_after, 0, len(BANDS) - 1)
    return Companies(
        names=company_names(rng, n),
        sector=rng.integers(0, len(SECTORS), n),
        start=start,
        stop=stop,
        band_et=band_et,
        weight=name_weights(rng, n, 0.6),
    )


def invent_market(rng: np.random.Generator) -> Market:
    """Draw the market of the hunt: its companies, then what happens to them."""
    day = weekdays()
    companies = invent_companies(rng, day)
    return draw_market(rng, day, companies, PLANTINGS, list(enumerate(ALERT_KINDS)), N_EVENTS)


def draw_market(
    rng: np.random.Generator,
    day: NDArray[np.datetime64],
    companies: Companies,
    plantings: Sequence[Planting],
    kinds: Sequence[tuple[int, AlertKind]],
    n_events: float,
) -> Market:
    """Draw what happens to given companies: drivers, what is planted, events, alerts.

    Parameters
    ----------
    kinds : number in `ALERT_KINDS` and the kind as it is drawn; a number may come twice
    n_events : to expect, without those that are planted
    """
    level = (
        season_level(quarter_phase(day), 0.8)
        * shock_level(rng, 1, day.size, 0.8)
        * shock_level(rng, len(SECTORS), day.size, 0.7, every=90)
    )
    planted_alerts, planted_events = _plant(rng, day, companies, plantings)

    entity, session = _intensity(companies, level, _EVENT_EXPOSURE).draw(rng, n_events)
    event = distinct(
        np.concatenate((entity, planted_events[0])) * day.size
        + np.concatenate((session, planted_events[1]))
    )
    target_entity, target_session = event // day.size, event % day.size

    points = [planted_alerts]
    for k, kind in kinds:
        entity, session = _background(rng, kind, day, companies, level)
        if kind.echo_rate:
            source, echo = follow_ups(rng, target_session - 1, kind.echo_rate)
            entity = np.concatenate((entity, target_entity[source]))
            session = np.concatenate((session, echo))
        is_kept = session < companies.stop[entity]
        entity, session = entity[is_kept], session[is_kept]
        is_kept = is_published(kind, day, companies, entity, session)
        entity, session = entity[is_kept], session[is_kept]
        points.append((entity, np.full(entity.size, k), session))
    alert_entity, alert_kind, alert_session = map(np.concatenate, zip(*points, strict=True))

    is_withdrawn = rng.random(event.size) < _WITHDRAWAL_SHARE
    entity = target_entity[is_withdrawn]
    session = target_session[is_withdrawn] + rng.integers(10, 60, entity.size)
    is_kept = session < companies.stop[entity]
    entity, session = entity[is_kept], session[is_kept]
    return Market(
        day=day,
        companies=companies,
        alert_entity=alert_entity,
        alert_kind=alert_kind,
        alert_session=alert_session,
        event_entity=np.concatenate((target_entity, entity)),
        event_kind=np.repeat((0, 1), (event.size, entity.size)),
        event_session=np.concatenate((target_session, session)),
    )


def _intensity(companies: Companies, level: FloatArray, exposure: float) -> Intensity:
    powered = level**exposure
    return Intensity(
        weight=companies.weight,
        level=powered / powered.mean(),
        group=companies.sector,
        start=companies.start,
        stop=companies.stop,
    )


def _background(
    rng: np.random.Generator,
    kind: AlertKind,
    day: NDArray[np.datetime64],
    companies: Companies,
    level: FloatArray,
) -> tuple[IntArray, IntArray]:
    """Alerts of one type that know nothing of the events but the drivers, with their repeats."""
    n_first = kind.n_alerts / (1.0 + kind.follow_up_mean)
    # What is not published is thrown away later; draw as many more.
    published = (day.size - first_session(kind, day)) / day.size
    if kind.is_large_only:
        published *= float((companies.band_et > 0).mean())
    entity, session = _intensity(companies, level, kind.exposure).draw(rng, n_first / published)
    source, repeat = follow_ups(rng, session, kind.follow_up_mean)
    return np.concatenate((entity, entity[source])), np.concatenate((session, repeat))


def _plant(
    rng: np.random.Generator,
    day: NDArray[np.datetime64],
    companies: Companies,
    plantings: Sequence[Planting],
) -> tuple[tuple[IntArray, IntArray, IntArray], tuple[IntArray, IntArray]]:
    """Alerts (company, kind, session) of every planting, and the events (company, session)."""
    number = {kind.name: k for k, kind in enumerate(ALERT_KINDS)}
    slots = planting_slots(rng, companies.start, companies.stop, LOOKBACK, HORIZON)
    band = companies.band_et[slots.entity, slots.session]
    alerts, events = [], []
    for planting in plantings:
        size = len(planting.types)
        kinds = np.array([number[name] for name in planting.types])
        is_wanted = np.isin(band, [BANDS.index(name) for name in planting.bands])
        first, last = (share * day.size for share in planting.place)
        is_wanted &= (slots.session >= first) & (slots.session < last)
        for k in kinds:
            # The whole look-back has to be published, not just the slot.
            is_wanted &= is_published(
                ALERT_KINDS[k], day, companies, slots.entity, slots.session - LOOKBACK + 1
            )
        entity, session = slots.take(rng, planting.n_sets, is_wanted)
        at = planted_alert_sessions(rng, session, size, LOOKBACK)
        alerts.append((np.repeat(entity, size), np.tile(kinds, entity.size), at.ravel()))
        first, last = (share * day.size for share in planting.life)
        is_hit = planted_hits(rng, entity.size, planting.precision)
        is_hit &= (session >= first) & (session < last)
        after = session + rng.integers(1, HORIZON + 1, session.size)
        events.append((entity[is_hit], after[is_hit]))
    alert_entity, alert_kind, alert_session = map(np.concatenate, zip(*alerts, strict=True))
    event_entity, event_session = map(np.concatenate, zip(*events, strict=True))
    return (alert_entity, alert_kind, alert_session), (event_entity, event_session)
