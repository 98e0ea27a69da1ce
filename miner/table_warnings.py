"""What is odd in the tables themselves: clocks, names that look alike, rows that say nothing.

Each finding is one sentence that says what to look at.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

import numpy as np

from miner.read_tables import OPEN_START, Log, SpanTable
from miner.reading.alike import alike, folded, quoted
from miner.session_calendar import SessionCalendar

MOST_NAMED = 5


def named(names: Sequence[str], between: str = ", ") -> str:
    """The first few names, and how many more there are."""
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return between.join(names[:MOST_NAMED]) + more


def _counted(n: int, one: str, many: str) -> str:
    return f"1 {one}" if n == 1 else f"{n:,} {many}"


def clocks(log: Log) -> tuple[int, int]:
    """Stamps that have a time of day without an offset, and with one."""
    return log.naive_count, len(log) - log.naive_count - int(log.is_bare_date.sum())


def naive_note(log: Log, timezone: str) -> Iterator[str]:
    """No stamp says where its clock stood: for settings that do not name the timezone either."""
    naive, aware = clocks(log)
    if naive and not aware:
        yield (
            f"{log.table}: {naive:,} stamps have a time of day and no offset; they are taken to be "
            f'in {timezone}. If that is right, write timezone = "{timezone}" in [sessions].'
        )


def mixed_clocks(log: Log, timezone: str) -> Iterator[str]:
    """Some stamps say where their clock stood and some do not."""
    naive, aware = clocks(log)
    if naive and aware:
        yield (
            f"{log.table}: {naive:,} stamps have no offset and are taken to be in {timezone}, "
            f"{aware:,} have one. Give all of them an offset."
        )


def alike_names(what: str, names: Iterable[str]) -> Iterator[str]:
    """Names that look the same to a reader and count apart."""
    groups = [" and ".join(map(quoted, group[:MOST_NAMED])) for group in alike(names)]
    if groups:
        yield (
            f"{what}: names that differ only in case, blanks or Unicode form count apart: "
            f"{named(groups, '; ')}."
        )


def unknown_entities(log: Log, known: Sequence[str]) -> Iterator[str]:
    """Entities that groups and coverage do not have."""
    unknown = _unknown([log.entity_names[i] for i in np.unique(log.entity_code)], known)
    if unknown:
        rest = "what is about it" if len(unknown) == 1 else "what is about them"
        yield (
            f"{log.table}: {_counted(len(unknown), 'entity is', 'entities are')} in no row of "
            f"groups or coverage, and {rest} is set aside: {named(unknown)}."
        )


def _unknown(names: Iterable[str], known: Sequence[str]) -> list[str]:
    """Names that are not known, those first that are but for case, blanks or Unicode form."""
    strangers = sorted({*names} - {*known})
    near = {folded(name): name for name in known}
    meant = [name for name in strangers if folded(name) in near]
    others = [name for name in strangers if folded(name) not in near]
    told = [f"{quoted(name)} (known: {quoted(near[folded(name)])})" for name in meant]
    return told + [quoted(name) for name in others]


def empty_spans(table: SpanTable, calendar: SessionCalendar) -> Iterator[str]:
    """Rows that hold no session of the calendar."""
    first = calendar.span_start(table.start_us, table.start_is_bare)
    last = calendar.span_end(table.end_us, table.end_is_bare)
    n = int((np.maximum(first, 0) > np.minimum(last, len(calendar) - 1)).sum())
    if n:
        rows = "row holds" if len(table) == n == 1 else "rows hold"
        yield f"{table.table}: {n:,} of {len(table):,} {rows} no session of the calendar."


def rival_labels(groups: SpanTable) -> Iterator[str]:
    """Entities that have two labels from the same moment on."""
    for column, code in groups.label_codes.items():
        order = np.lexsort((code, groups.start_us, groups.entity_code))
        entity, start, label = groups.entity_code[order], groups.start_us[order], code[order]
        is_rival = (
            (entity[1:] == entity[:-1]) & (start[1:] == start[:-1]) & (label[1:] != label[:-1])
        )
        at = np.flatnonzero(is_rival)
        if at.size:
            _, first = np.unique(entity[at], return_index=True)
            told = [
                f"{quoted(groups.entity_names[entity[k]])} from {_moment(int(start[k]))}"
                for k in at[first]
            ]
            entities = _counted(len(told), "entity has", "entities have")
            yield (
                f"{groups.table}: {entities} rows for {column} that start alike and differ "
                f"({named(told)}); the one that ends later, else the label sorted last, holds."
            )


def _moment(stamp_us: int) -> str:
    return "the start" if stamp_us == OPEN_START else str(np.datetime64(stamp_us, "us"))[:16] + "Z"


def coverage_types(coverage: SpanTable, type_names: Sequence[str]) -> Iterator[str]:
    """Types that only the coverage has, and types that it lets no entity have."""
    used = {coverage.label_names["type"][k] for k in np.unique(coverage.label_codes["type"])}
    strange = _unknown(used - {""}, type_names)
    if strange:
        yield (
            f"coverage: {_counted(len(strange), 'type is', 'types are')} no alert type: "
            f"{named(strange)}."
        )
    missing = [quoted(name) for name in type_names if name not in used]
    if "" not in used and missing:
        yield (
            f"alerts: {_counted(len(missing), 'type is', 'types are')} in no row of coverage, and "
            f"so in no combination: {named(missing)}."
        )
