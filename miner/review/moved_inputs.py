"""Inputs that moved: change points in weekly counts, new and vanished types, other hours and
companions, coverage, and entities that joined or left.

Only the change points are tests, with a stated false alarm rate. The others are told when they are
larger than a fifth and than what chance does to counts of this size.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from miner.assemble import Inputs
from miner.kernels import bits
from miner.review.quarters import Quarter, quarters_of
from miner.review.records import EntityChange, MovedInputs, TypeChange, TypeQuarter, TypeWeeks
from miner.review.type_quarters import (
    PER_HOUR,
    Alerts,
    Tally,
    distinct_alerts,
    place_of_sessions,
    quantile_hour,
    tally,
)
from miner.seeds import stream
from miner.sequential.change import change_points

LARGE = 0.2  # a share, or a relative change, that is worth a word
NOISE = 3.0  # standard errors
FEW = 30  # alerts under which hours and companions are not compared
YEAR = 4  # quarters that the last one is compared with
WEEK = 7
WEEKS_A_QUARTER = 13


def moved_inputs(inputs: Inputs, quarter: Quarter) -> MovedInputs:
    """What changed in inputs cut at a quarter's end, and the numbers of the quarters before."""
    settings = inputs.study.review
    quarters = quarters_of(inputs.calendar.dates)[-settings.input_quarters :]
    alerts = distinct_alerts(inputs)
    counted = tally(inputs, alerts, quarters)
    levels, n_tested, weeks, weekly = _levels(inputs, alerts, quarter)
    changes = [*levels, *_others(inputs, counted, quarters)]
    order = {name: i for i, name in enumerate(inputs.panel.type_names)}
    return MovedInputs(
        tuple(q.name for q in quarters),
        tuple(_table(inputs.panel.type_names, counted, quarters)),
        tuple(sorted(changes, key=lambda change: (order[change.type], change.kind))),
        tuple(_entities(inputs, quarters)),
        settings.alpha,
        n_tested,
        weeks,
        weekly,
    )


def _levels(
    inputs: Inputs, alerts: Alerts, quarter: Quarter
) -> tuple[list[TypeChange], int, tuple[str, ...], tuple[TypeWeeks, ...]]:
    """Types whose weekly counts changed level for good, how many were tested, and the counts."""
    panel, dates = inputs.panel, inputs.calendar.dates
    n_weeks = WEEKS_A_QUARTER * inputs.study.review.input_quarters
    week_t = -((dates[-1] - dates).astype(np.int64) // WEEK) + n_weeks - 1
    is_in = week_t >= 0
    if not panel.type_names or week_t[0] > 0:  # the first weeks of the calendar may be partial
        week_t = week_t - max(int(week_t[0]), 0)
    n_weeks = int(week_t[-1]) + 1
    cover_ew = np.bitwise_or.reduce(panel.cover_eqw, axis=1)
    covered_t = bits.unpack(cover_ew, panel.n_sessions).sum(axis=0)
    exposure_w = np.bincount(week_t[is_in], weights=covered_t[is_in], minlength=n_weeks)
    _, kind, session = alerts
    kept = is_in[session]
    count_kw = np.bincount(
        kind[kept] * n_weeks + week_t[session[kept]], minlength=len(panel.type_names) * n_weeks
    ).reshape(len(panel.type_names), n_weeks)
    usable = exposure_w > 0
    count_kw, exposure_w = count_kw[:, usable], exposure_w[usable]
    week_starts = [dates[week_t == w][0] for w in np.flatnonzero(usable)]
    found = change_points(
        count_kw,
        exposure_w,
        stream(inputs.study.testing.seed, "review", quarter.name),
        alpha=inputs.study.review.alpha,
    )
    changes = []
    for k in np.flatnonzero(found.is_changed_k).tolist():
        since, ratio = str(week_starts[int(found.week_k[k])]), float(found.ratio_k[k])
        is_ratio = np.isfinite(ratio)
        how = f"came {ratio:.2g} times as often" if is_ratio else "began to come"
        changes.append(
            TypeChange(
                panel.type_names[k],
                "level",
                since,
                float(found.p_k[k]),
                float(found.adjusted_k[k]),
                ratio if is_ratio else None,
                f"{panel.type_names[k]} {how} from {since} on "
                f"(p {found.adjusted_k[k]:.2g}, over all types)",
            )
        )
    weekly = tuple(
        TypeWeeks(name, tuple(counts))
        for name, counts in zip(panel.type_names, count_kw.tolist(), strict=True)
    )
    return changes, int(found.is_tested_k.sum()), tuple(map(str, week_starts)), weekly


def _others(inputs: Inputs, counted: Tally, quarters: Sequence[Quarter]) -> Iterator[TypeChange]:
    """What the last quarter shows that the year before it did not, beyond the level."""
    dates, names, last = inputs.calendar.dates, inputs.panel.type_names, quarters[-1]
    start = str(dates[last.first])
    before = slice(max(0, len(quarters) - 1 - YEAR), len(quarters) - 1)
    for k, name in enumerate(names):
        first = int(counted.first_k[k])
        now, then = counted.alerts[k, -1], counted.alerts[k, before]
        if first >= last.first and last.first > 0:
            since = str(dates[first])
            yield TypeChange(name, "new", since, None, None, None, f"{name} first came on {since}")
            continue
        if not now and then.size and then.mean() >= 5:
            yield TypeChange(
                name, "vanished", start, None, None, 0.0,
                f"{name} did not come at all from {start} on, {then.mean():.0f} a quarter before",
            )  # fmt: skip
            continue
        covered, was = counted.covered[k, -1], counted.covered[k, before]
        if was.size and was.mean() > 0 and abs(covered / was.mean() - 1) > LARGE:
            ratio = float(covered / was.mean())
            yield TypeChange(
                name, "coverage", start, None, None, ratio,
                f"{name} is covered for {covered:.0f} entities, {was.mean():.0f} before",
            )  # fmt: skip
        shift = hour_shift(counted.slots[k, -1], counted.slots[k, before].sum(axis=0))
        if shift is not None and shift > LARGE + hour_noise(
            int(counted.slots[k, -1].sum()), int(counted.slots[k, before].sum())
        ):
            hour, was_hour = (
                quantile_hour(count, 0.5)
                for count in (counted.slots[k, -1], counted.slots[k, before].sum(axis=0))
            )
            yield TypeChange(
                name, "hour", start, None, None, None,
                f"{name} comes at other hours: {shift:.0%} of its alerts moved, median "
                f"{clock(hour)} instead of {clock(was_hour)}",
            )  # fmt: skip
        yield from _companions(name, k, names, counted, before, start)


def _companions(
    name: str, k: int, names: Sequence[str], counted: Tally, before: slice, start: str
) -> Iterator[TypeChange]:
    """The companion whose share of a type's alerts changed most, where it changed much."""
    if counted.together is None:
        return
    now = counted.together[-1][k]
    then = np.sum(counted.together[before], axis=0, initial=0)
    then = then[k] if np.ndim(then) else np.zeros_like(now)
    n_now, n_then = int(now[k]), int(then[k])
    if min(n_now, n_then) < FEW or len(names) < 2:
        return
    share, was = now / n_now, then / n_then
    change = share - was
    change[k] = 0.0
    pooled = (now + then) / (n_now + n_then)
    noise = NOISE * np.sqrt(pooled * (1 - pooled) * (1 / n_now + 1 / n_then))
    j = int(np.argmax(np.abs(change)))
    if abs(change[j]) > LARGE + noise[j]:
        yield TypeChange(
            name, "companions", start, None, None, None,
            f"{share[j]:.0%} of the alerts of {name} come with {names[j]} in the same session, "
            f"{was[j]:.0%} before",
        )  # fmt: skip


def hour_shift(now_s: np.ndarray, then_s: np.ndarray) -> float | None:
    """Share of alerts that would have to move to another hour for two days to look alike.

    Parameters
    ----------
    now_s, then_s : int64 [96], counts by quarter of an hour
    """
    if min(now_s.sum(), then_s.sum()) < FEW:
        return None
    hours = [count.reshape(-1, PER_HOUR).sum(axis=1) / count.sum() for count in (now_s, then_s)]
    return float(np.abs(hours[0] - hours[1]).sum() / 2)


def hour_noise(n_now: int, n_then: int) -> float:
    """At least what ``hour_shift`` comes to on average where nothing moved.

    The mean of |difference| of an hour's share s is at most sqrt(s (1/n + 1/m)), and the sum of
    sqrt(s) over 24 hours at most sqrt(24).
    """
    return 0.5 * float(np.sqrt(24 * (1 / n_now + 1 / n_then)))


def clock(hour: float) -> str:
    """An hour as a clock shows it."""
    minutes = round(60 * hour)
    return f"{minutes // 60:02d}:{minutes % 60:02d}"


def _table(
    names: Sequence[str], counted: Tally, quarters: Sequence[Quarter]
) -> Iterator[TypeQuarter]:
    for k, name in enumerate(names):
        for i, quarter in enumerate(quarters):
            slots = counted.slots[k, i]
            before = counted.slots[k, max(0, i - YEAR) : i].sum(axis=0)
            has_hours = slots.sum() > 0
            companion, share, was = _top_companion(names, counted, k, i)
            alerts, covered = int(counted.alerts[k, i]), float(counted.covered[k, i])
            reachable = int(counted.reachable[k, i])
            yield TypeQuarter(
                name,
                quarter.name,
                alerts,
                covered,
                int(counted.entities[k, i]) / reachable if reachable else None,
                alerts / covered if covered else None,
                quantile_hour(slots, 0.5) if has_hours else None,
                (quantile_hour(slots, 0.25), quantile_hour(slots, 0.75)) if has_hours else None,
                hour_shift(slots, before),
                companion,
                share,
                was,
            )


def _top_companion(
    names: Sequence[str], counted: Tally, k: int, i: int
) -> tuple[str | None, float | None, float | None]:
    """The type most often together with one, its share, and its share in the year before."""
    if counted.together is None:
        return None, None, None
    now = counted.together[i][k].copy()
    n = int(now[k])
    now[k] = 0
    if not n or not now.any():
        return None, None, None
    j = int(np.argmax(now))
    earlier = counted.together[max(0, i - YEAR) : i]
    n_then = sum(int(part[k, k]) for part in earlier)
    was = sum(int(part[k, j]) for part in earlier) / n_then if n_then else None
    return names[j], int(now[j]) / n, was


def _entities(inputs: Inputs, quarters: Sequence[Quarter]) -> Iterator[EntityChange]:
    """Entities that joined or left in the last quarter: by coverage where there is a table, else
    by their alerts and events."""
    panel, dates, last = inputs.panel, inputs.calendar.dates, quarters[-1]
    if last.first == 0:
        return
    alerts_e = np.bincount(
        inputs.alerts.entity[inputs.alerts.session >= last.first], minlength=panel.n_entities
    )
    if inputs.study.coverage is not None:
        cover_ew = np.bitwise_or.reduce(panel.cover_eqw, axis=1)
        is_covered_et = bits.unpack(cover_ew, panel.n_sessions)
        was_e, is_e = is_covered_et[:, last.first - 1], is_covered_et[:, last.last]
        change_t = np.diff(is_covered_et[:, last.first - 1 : last.last + 1], axis=1)
        first_e = change_t.argmax(axis=1) + last.first
        for e in np.flatnonzero(was_e != is_e).tolist():
            turned = np.flatnonzero(change_t[e])[-1] + last.first if was_e[e] else first_e[e]
            yield EntityChange(
                panel.entity_names[e],
                "left" if was_e[e] else "joined",
                str(dates[int(turned)]),
                "coverage",
                int(alerts_e[e]),
            )
        return
    yield from _by_log(inputs, quarters, alerts_e)


def _by_log(
    inputs: Inputs, quarters: Sequence[Quarter], alerts_e: np.ndarray
) -> Iterator[EntityChange]:
    """Joined: first seen in the last quarter. Left: not seen in it, but in each of those before."""
    panel, dates, last = inputs.panel, inputs.calendar.dates, quarters[-1]
    entity = np.concatenate([inputs.alerts.entity, inputs.events.entity])
    session = np.concatenate([inputs.alerts.session, inputs.events.session])
    first_e = np.full(panel.n_entities, panel.n_sessions)
    last_e = np.full(panel.n_entities, -1)
    np.minimum.at(first_e, entity, session)
    np.maximum.at(last_e, entity, session)
    earlier = quarters[max(0, len(quarters) - 1 - YEAR) : -1]
    is_seen_eq = np.zeros((panel.n_entities, len(quarters)), dtype=bool)
    place = place_of_sessions(quarters, panel.n_sessions)[session]
    is_seen_eq[entity[place >= 0], place[place >= 0]] = True
    was_there = is_seen_eq[:, -1 - len(earlier) : -1].all(axis=1) & bool(earlier)
    for e in np.flatnonzero((first_e >= last.first) & (first_e < panel.n_sessions)).tolist():
        yield EntityChange(
            panel.entity_names[e], "joined", str(dates[first_e[e]]), "log", int(alerts_e[e])
        )
    for e in np.flatnonzero(was_there & ~is_seen_eq[:, -1]).tolist():
        yield EntityChange(panel.entity_names[e], "left", str(dates[last_e[e]]), "log", 0)
