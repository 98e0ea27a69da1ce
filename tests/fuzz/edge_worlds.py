"""Hands on tiny worlds at the edges of every definition, and their tables on calendars with holes.

`edge_world` draws worlds in which events and alerts sit on the first and last sessions, windows are
as long as the history allows, types copy one another, entities are always or never in an event
window, and the rest is shorter or longer than the horizon. `on_holidays` moves the dates of a
study on disk to a calendar with holes, and its stamps to other times of the same sessions.
"""

import csv
import datetime as dt
import re
import warnings
from dataclasses import replace
from pathlib import Path
from zoneinfo import ZoneInfo

import exchange_calendars
import numpy as np
from naive import World
from tiny_worlds import FIRST_DAY, TYPES, entity_names, random_coverage, random_groups

MARGIN = 60  # sessions before the study that a table may speak of
DAY = dt.timedelta(days=1)


def _split(rng: np.random.Generator, n_sessions: int, needed: int, reach: int) -> tuple[int, int]:
    """Last session of discovery and first of the holdout; at times as short as is allowed."""
    embargo = reach + int(rng.integers(0, 3))
    longest = n_sessions - needed - embargo - 1  # last session discovery may have
    kind = rng.integers(6)
    last = needed - 1 if kind == 0 else longest if kind == 1 else int(0.6 * n_sessions)
    last = min(max(last, needed - 1), longest)
    return last, last + embargo + 1


def edge_world(seed: int) -> World:
    """A world of 1 to 9 entities and up to 90 sessions, everything in it drawn near an edge."""
    rng = np.random.default_rng([seed, 1])
    n_entities = int(rng.choice([1, 2, 5, 7, 9]))
    entities = entity_names(n_entities)
    lookback, horizon = (int(rng.choice([1, 2, 3, 5, 8])) for _ in range(2))
    needed = lookback + horizon
    n_sessions = max(int(rng.integers(40, 91)), 3 * needed + 6)
    discovery_end, holdout_start = _split(rng, n_sessions, needed, needed)
    targets = ("jump", "upset") if rng.random() < 0.25 else ("upset",)

    alerts: set[tuple[str, str, int]] = set()
    events: set[tuple[str, str, int]] = set()
    alert_rate, event_rate = (
        float(rng.choice([0.03, 0.08, 0.2])),
        float(rng.choice([0.01, 0.04, 0.12])),
    )
    edges = [0, lookback - 1, discovery_end - horizon, discovery_end, discovery_end + 1]
    edges += [holdout_start - 1, holdout_start, n_sessions - 1 - horizon, n_sessions - 1, 1]
    for entity in entities:
        kind = rng.integers(8)
        for t in range(n_sessions):
            for k in TYPES:
                if rng.random() < alert_rate:
                    alerts.add((entity, k, t))
            for x in targets:
                chance = 0.7 if kind == 0 else 0.0 if kind == 1 else event_rate
                if rng.random() < chance:
                    events.add((entity, x, t))
        for t in edges:
            if rng.random() < 0.3:
                alerts.add((entity, str(rng.choice(TYPES)), t))
            if rng.random() < 0.3:
                events.add((entity, str(rng.choice(targets)), t))
        if rng.random() < 0.2:  # an alert on every session
            alerts |= {(entity, "memo", t) for t in range(n_sessions)}
    link = float(rng.uniform(0.2, 1.0))
    for entity in entities:  # planted, so that something passes
        t = int(rng.integers(0, 8))
        while t < n_sessions:
            alerts |= {(entity, "delay", t), (entity, "gap", t)}
            if rng.random() < link:
                events.add((entity, "upset", t + int(rng.integers(1, horizon + 1))))
            t += horizon + int(rng.integers(2, 12))
    if rng.random() < 0.3:  # a type that copies another: everything of the two ties
        alerts -= {(e, k, t) for e, k, t in alerts if k == "halt"}
        alerts |= {(e, "halt", t) for e, k, t in alerts if k == "gap"}
    events |= {(entities[0], x, n_sessions - 1) for x in targets}  # each type appears in the log
    events = {event for event in events if 0 <= event[2] < n_sessions}
    alerts = {alert for alert in alerts if 0 <= alert[2] < n_sessions}

    has_coverage, groups = bool(rng.random() < 0.5), str(rng.choice(["none", "strata", "peers"]))
    coverage = random_coverage(rng, entities, n_sessions) if has_coverage else None
    rows = random_groups(rng, entities, n_sessions) if groups != "none" else []
    labels = tuple((e, first, last, band) for e, first, last, band, _ in rows)
    if not has_coverage and not rows:  # known are then those that appear
        entities = sorted({row[0] for row in alerts | events})
    return World(
        n_sessions=n_sessions,
        alerts=frozenset(alerts),
        events=frozenset(events),
        known=tuple(sorted(entities)),
        targets=targets,
        lookback=lookback,
        horizon=horizon,
        rest=int(rng.choice([0, 1, horizon, horizon, horizon + 3])),
        max_size=int(rng.choice([1, 2, 3, 4])),
        min_triggers=int(rng.choice([1, 2, 4])),
        min_hits=int(rng.choice([1, 2])),
        discovery_end=discovery_end,
        holdout_start=holdout_start,
        coverage=None if coverage is None else tuple(coverage),
        strata=labels if groups == "strata" else None,
        peers=labels if groups == "peers" else None,
        pooled=bool(rng.random() < 0.5) and groups == "strata",
        law=str(rng.choice(["odds", "odds", "hazard"])),
    )


def with_law(world: World, law: str) -> World:
    """The world, its margins combining by another law."""
    return replace(world, law=law)


def _dates_csv(rng: np.random.Generator, n: int) -> list[tuple[dt.date, dt.datetime, str]]:
    """Dates with holes of up to a fortnight, each with a close (UTC) and how the csv gives it."""
    out, day = [], FIRST_DAY - dt.timedelta(days=3 * n)
    while len(out) < n:
        early = rng.random() < 0.1
        close = dt.datetime.combine(day, dt.time(13 if early else 16), dt.UTC)
        out.append((day, close, "13:00" if early else ""))
        day += DAY * (1 if rng.random() < 0.7 else int(rng.integers(2, 15)))
    return out


def _exchange(code: str, n: int) -> tuple[list[tuple[dt.date, dt.datetime, str]], ZoneInfo]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what pandas tells the library
        calendar = exchange_calendars.get_calendar(code, start="2014-06-02", end="2016-06-30")
    closes = calendar.closes.array[:n]
    rows = [
        (day.date(), close.to_pydatetime(), "")
        for day, close in zip(calendar.sessions[:n], closes, strict=True)
    ]
    return rows, ZoneInfo(str(calendar.tz))


def on_holidays(folder: Path, n_sessions: int, seed: int) -> None:
    """Rewrite a study's tables and settings for a calendar with holes; session by session the same.

    Stamps move to any time after the close before and up to the session's own close, weekends
    and holidays included; starts and ends of spans to a date without a session beside theirs.
    """
    rng = np.random.default_rng([seed, 2])
    kind = str(rng.choice(["dates", "XNYS", "XTKS"]))
    n = n_sessions + 2 * MARGIN
    if kind == "dates":
        sessions, zone = _dates_csv(rng, n), ZoneInfo("UTC")
        lines = [["date", "close"], *([day.isoformat(), close] for day, _, close in sessions)]
        with (folder / "dates.csv").open("w", newline="", encoding="utf-8") as file:
            csv.writer(file).writerows(lines)
    else:
        sessions, zone = _exchange(kind, n)

    def place(text: str) -> int:
        return (dt.date.fromisoformat(text[:10]) - FIRST_DAY).days + MARGIN

    def stamp(text: str) -> str:
        i = place(text)
        start, close = sessions[i - 1][1], sessions[i][1]
        seconds = int((close - start).total_seconds())
        after = seconds if rng.random() < 0.2 else int(rng.integers(1, seconds + 1))
        at = start + dt.timedelta(seconds=after)
        how = rng.integers(3)
        if how == 0:
            return at.astimezone(ZoneInfo("Asia/Kolkata")).isoformat()
        return at.astimezone(zone).replace(tzinfo=None).isoformat(sep=" " if how == 1 else "T")

    def bound(text: str, is_start: bool) -> str:
        """The session's date, or one in the hole before a start or after an end."""
        if not text:
            return ""
        i = place(text)
        day = sessions[i][0]
        other = sessions[i - 1][0] if is_start else sessions[i + 1][0]
        hole = abs((day - other).days) - 1
        step = int(rng.integers(0, hole + 1)) * DAY
        return (day - step if is_start else day + step).isoformat()

    for name in ("alerts", "events", "groups", "coverage"):
        path = folder / f"{name}.csv"
        if not path.exists():
            continue
        with path.open(newline="", encoding="utf-8") as file:
            rows = list(csv.DictReader(file))
        for row in rows:
            if "time" in row:
                row["time"] = stamp(row["time"])
            else:
                row["start"], row["end"] = bound(row["start"], True), bound(row["end"], False)
        if rows:
            with path.open("w", newline="", encoding="utf-8") as file:
                writer = csv.DictWriter(file, list(rows[0]))
                writer.writeheader()
                writer.writerows(rows)
    path = folder / "study.toml"
    text = path.read_text(encoding="utf-8")
    text = re.sub(
        r'"(\d{4}-\d\d-\d\d)"', lambda found: f'"{sessions[place(found[1])][0].isoformat()}"', text
    )
    if kind == "dates":
        text = text.replace('"daily"', '"dates.csv"')
    else:
        text = re.sub(
            r'calendar = "daily"\nclose = .*\ntimezone = .*\n', f'calendar = "{kind}"\n', text
        )
    path.write_text(text, encoding="utf-8")
