"""From a study's tables to its calendar and panel, with what was set aside on the way."""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from miner import memory_estimate, table_warnings
from miner.columns import JOINER
from miner.errors import SettingsError, TableError, explain
from miner.panel import (
    Events,
    Labels,
    Panel,
    Spans,
    as_peers,
    distinct_events,
    label_sessions,
    pack_alerts,
    pack_coverage,
)
from miner.price_moves import Moves, find_moves, move_events, wanted_moves
from miner.prices import place_prices
from miner.read_tables import (
    Log,
    PriceTable,
    SpanTable,
    read_coverage,
    read_groups,
    read_log,
    read_prices,
)
from miner.session_calendar import SessionCalendar, build_calendar
from miner.settings import Study
from miner.workers import Progress, silent

MOST_LABELS = 32_000
MOST_NAMED = 5


@dataclass(frozen=True)
class CodedLog:
    """Rows of a log that are inside the study: int32 arrays of one length, repeats and all.

    ``n_outside`` rows lay outside the calendar, ``n_unknown`` were about entities that the
    groups and coverage tables do not know; both are set aside.
    """

    entity: np.ndarray
    type: np.ndarray
    session: np.ndarray
    n_outside: int
    n_unknown: int


@dataclass(frozen=True)
class Inputs:
    """What a study's tables hold, on its calendar.

    ``midnight``: per log, stamps at midnight, of how many.
    ``table_warnings``: what is odd in the tables; ``clock_notes``: what to know of their clocks.
    """

    study: Study
    calendar: SessionCalendar
    panel: Panel
    targets: tuple[str, ...]
    alerts: CodedLog
    events: CodedLog
    event_names: tuple[str, ...]
    counts: dict[str, dict[str, int]]
    midnight: dict[str, tuple[int, int]]
    set_aside: pd.DataFrame
    fingerprints: dict[str, str]
    moves: Moves | None = None
    price_warnings: tuple[str, ...] = ()
    table_warnings: tuple[str, ...] = ()
    clock_notes: tuple[str, ...] = ()


def assemble(study: Study, progress: Progress = silent) -> Inputs:
    """Read a study's tables and put them on its calendar.

    Raises
    ------
    TableError, CalendarError, SettingsError : the study or one of its tables cannot be used
    """
    progress("reading alerts")
    alert_log = read_log(study, "alerts")
    progress("reading events")
    event_log = read_log(study, "events")
    groups, coverage = read_groups(study), read_coverage(study)
    _check_types(alert_log.type_names)
    stamps = [log.stamp_us for log in (alert_log, event_log) if log.stamp_us.size]
    if not stamps:
        raise TableError(
            explain(
                study.name,
                "alerts and events",
                "hold at least one row",
                "none",
                "Check the source paths and the column names.",
            )
        )
    calendar = build_calendar(
        study, min(int(s.min()) for s in stamps), max(int(s.max()) for s in stamps)
    )
    n_sessions = len(calendar.dates)

    progress("placing on sessions")
    spans = [table for table in (groups, coverage) if table is not None]
    sources: Sequence[Log | SpanTable] = spans or [alert_log, event_log]
    entity_names = tuple(sorted({name for table in sources for name in used_names(table)}))
    alerts = _code(alert_log, entity_names, calendar)
    events = _code(event_log, entity_names, calendar)
    move_targets = wanted_moves(study)
    targets = _targets(study, event_log.type_names, move_targets)
    moves, price_table = None, None
    price_warnings: tuple[str, ...] = ()
    if move_targets:
        progress("finding price moves")
        price_table, moves, price_warnings = _moves(study, entity_names, calendar)
    memory_estimate.refuse(
        memory_estimate.of_panel(
            len(entity_names),
            n_sessions,
            len(alert_log.type_names),
            len(alert_log),
            1 if coverage is None else len(coverage.label_names["type"]),
        )
    )
    panel = Panel(
        entity_names,
        alert_log.type_names,
        n_sessions,
        pack_alerts(
            alerts.entity,
            alerts.type,
            alerts.session,
            len(entity_names),
            len(alert_log.type_names),
            n_sessions,
        ),
        {
            target: _events_of(events, event_log.type_names.index(target))
            for target in targets
            if target not in move_targets
        },
        *pack_coverage(
            spans_of(coverage, "type", entity_names, calendar) if coverage else None,
            len(entity_names),
            alert_log.type_names,
            n_sessions,
        ),
        *labels_of(study, groups, entity_names, calendar),
        study.testing.margins,
    )
    if moves is not None:
        found, known_at = move_events(moves)
        panel = replace(
            panel,
            events=panel.events | {target: found[target] for target in move_targets},
            known={target: known_at[target] for target in move_targets},
        )
    read = {"alerts": alert_log, "events": event_log, "groups": groups, "coverage": coverage}
    counts = {
        name: {"rows": table.rows_read, "unreadable": len(table.set_aside)}
        for name, table in read.items()
        if table is not None
    }
    for name, log, names in (
        ("alerts", alerts, alert_log.type_names),
        ("events", events, event_log.type_names),
    ):
        counts[name] |= {"outside calendar": log.n_outside, "unknown entity": log.n_unknown}
        counts[name]["used"] = log.entity.size
        counts[name]["repeats"] = log.entity.size - _n_distinct(log, len(names), n_sessions)
    if price_table is not None:
        counts["prices"] = {"rows": price_table.rows_read, "unreadable": len(price_table.set_aside)}
    tables = [*(table for table in read.values() if table is not None)]
    aside = [t.set_aside for t in (*tables, price_table) if t is not None and len(t.set_aside)]
    return Inputs(
        study,
        calendar,
        panel,
        targets,
        alerts,
        events,
        event_log.type_names,
        counts,
        {
            name: (log.midnight_count, log.stamp_us.size)
            for name, log in (("alerts", alert_log), ("events", event_log))
        },
        pd.concat(aside, ignore_index=True) if aside else alert_log.set_aside.iloc[:0],
        {
            path: digest
            for t in (*tables, price_table)
            if t is not None
            for path, digest in t.fingerprints.items()
        },
        moves,
        price_warnings,
        tuple(_odd_rows(alert_log, event_log, groups, coverage, entity_names, calendar)),
        tuple(_clock_notes(study, (alert_log, event_log), calendar)),
    )


def _odd_rows(
    alerts: Log,
    events: Log,
    groups: SpanTable | None,
    coverage: SpanTable | None,
    entity_names: tuple[str, ...],
    calendar: SessionCalendar,
) -> Iterator[str]:
    for log in (alerts, events):
        yield from table_warnings.mixed_clocks(log, calendar.timezone)
    yield from table_warnings.alike_names("entities", entity_names)
    yield from table_warnings.alike_names("alert types", alerts.type_names)
    yield from table_warnings.alike_names("event types", events.type_names)
    for log in (alerts, events):
        yield from table_warnings.unknown_entities(log, entity_names)
    for table in (groups, coverage):
        if table is not None:
            yield from table_warnings.empty_spans(table, calendar)
    if groups is not None:
        yield from table_warnings.rival_labels(groups)
    if coverage is not None:
        yield from table_warnings.coverage_types(coverage, alerts.type_names)


def _clock_notes(study: Study, logs: Sequence[Log], calendar: SessionCalendar) -> Iterator[str]:
    if "timezone" not in study.sessions.model_fields_set:
        for log in logs:
            yield from table_warnings.naive_note(log, calendar.timezone)


def used_names(table: Log | SpanTable) -> list[str]:
    """Entities that rows of the table are about."""
    return [table.entity_names[i] for i in np.unique(table.entity_code)]


def _check_types(names: tuple[str, ...]) -> None:
    """A type that reads like a combination would be taken for one."""
    wrong = [
        name for name in names if JOINER.join(("x", name, "x")).split(JOINER) != ["x", name, "x"]
    ]
    if wrong:
        rule = f'not read like a combination, whose types are joined by "{JOINER}"'
        found = ", ".join(f'"{name}"' for name in wrong[:MOST_NAMED])
        raise TableError(explain("[alerts]", "type", rule, found, "Rename it, say with a slash."))


def _n_distinct(log: CodedLog, n_types: int, n_sessions: int) -> int:
    key = (log.entity.astype(np.int64) * n_types + log.type) * n_sessions + log.session
    key.sort()
    return int(np.count_nonzero(np.diff(key))) + (key.size > 0)


def code_map(names: tuple[str, ...], known: tuple[str, ...]) -> np.ndarray:
    """Place in ``known`` of each name, -1 where it is not there."""
    place = {name: i for i, name in enumerate(known)}
    return np.array([place.get(name, -1) for name in names] or [-1], dtype=np.int32)


def _code(log: Log, entity_names: tuple[str, ...], calendar: SessionCalendar) -> CodedLog:
    entity = code_map(log.entity_names, entity_names)[log.entity_code]
    session = calendar.session_of(log.stamp_us, log.is_bare_date)
    is_inside = (session >= 0) & (session < len(calendar.dates))
    is_known = entity >= 0
    kept = is_inside & is_known
    return CodedLog(
        entity[kept],
        log.type_code[kept],
        session[kept],
        int((~is_inside).sum()),
        int((is_inside & ~is_known).sum()),
    )


def _events_of(events: CodedLog, code: int) -> Events:
    mine = events.type == code
    return distinct_events(events.entity[mine], events.session[mine])


def _moves(
    study: Study, entity_names: tuple[str, ...], calendar: SessionCalendar
) -> tuple[PriceTable, Moves, tuple[str, ...]]:
    """The prices table, the major moves in it of the entities that are known, and warnings."""
    table = read_prices(study)
    if table is None or study.prices is None:
        raise TypeError("price moves are wanted of a study with [prices] only")
    prices = place_prices(table, entity_names, calendar, study.prices)
    return table, find_moves(prices, study.prices), prices.warnings


def _targets(
    study: Study, names: tuple[str, ...], move_targets: tuple[str, ...]
) -> tuple[str, ...]:
    wanted = study.events.targets
    both = sorted({*names} & {*move_targets})
    if both:
        raise SettingsError(
            explain(
                "[prices] moves",
                ", ".join(both),
                "not be types of the event log too",
                "both",
                'Rename the events, or set moves = "off".',
            )
        )
    if wanted is None:
        return tuple(sorted({*names, *move_targets}))
    missing = [target for target in wanted if target not in (*names, *move_targets)]
    if missing:
        near = difflib.get_close_matches(missing[0], names, 1)
        raise SettingsError(
            explain(
                "[events] targets",
                ", ".join(missing),
                "be types of the event log",
                f"types {', '.join(names[:20]) or 'none'}",
                (f'Did you mean "{near[0]}"? ' if near else "")
                + "Correct the spelling, or leave targets out to hunt for every type.",
            )
        )
    return tuple(sorted(set(wanted)))


def spans_of(
    table: SpanTable, label: str, entity_names: tuple[str, ...], calendar: SessionCalendar
) -> Spans:
    """A table's spans on the calendar, with one of its labels."""
    first = calendar.span_start(table.start_us, table.start_is_bare)
    last = calendar.span_end(table.end_us, table.end_is_bare)
    entity = code_map(table.entity_names, entity_names)[table.entity_code]
    first = np.maximum(first, 0)
    last = np.minimum(last, len(calendar.dates) - 1)
    kept = (first <= last) & (entity >= 0)
    return Spans(
        entity[kept],
        first[kept],
        last[kept],
        table.label_codes[label][kept],
        table.label_names[label],
    )


def labels_of(
    study: Study, groups: SpanTable | None, entity_names: tuple[str, ...], calendar: SessionCalendar
) -> tuple[Labels | None, Labels]:
    """Strata (None without) and peers of every entity-session."""
    n_entities, n_sessions = len(entity_names), len(calendar.dates)
    labelled: dict[str, Labels] = {}
    if groups is not None and study.groups is not None:
        for column in study.groups.label_columns:
            spans = spans_of(groups, column, entity_names, calendar)
            if len(spans.names) > MOST_LABELS:
                raise TableError(
                    explain(
                        "groups",
                        column,
                        f"have at most {MOST_LABELS:,} values",
                        f"{len(spans.names):,}",
                        "Name a coarser column.",
                    )
                )
            labelled[column] = _without_empty(label_sessions(spans, n_entities, n_sessions))
        strata = labelled[study.groups.strata] if study.groups.strata else None
        peers = labelled[study.groups.peers] if study.groups.peers else None
        return strata, as_peers(peers, n_entities, n_sessions)
    return None, as_peers(None, n_entities, n_sessions)


def _without_empty(labels: Labels) -> Labels:
    """An empty label means no label."""
    if "" not in labels.names:
        return labels
    blank = labels.names.index("")
    code = np.array([-1 if i == blank else i - (i > blank) for i in range(len(labels.names))])
    code_et = np.where(labels.code_et >= 0, code[labels.code_et], -1).astype(np.int16)
    return Labels(tuple(name for name in labels.names if name), code_et)
