"""Scans a log of alerts with a rule book: what has triggered, and what is one alert short.

Triggers are found by the hunt's own kernel, on a panel of the last sessions only. How far back it
has to reach: a trigger on session t needs the look-back before t, and, since a trigger rests, the
entity's last trigger of that combination; that one hangs on the one before it, and so on. The chain
is cut wherever a combination becomes complete with no completion in the ``rest - 1`` sessions
before it, since that one is a trigger whatever came earlier. So the scan reads the look-back and a
few rests, asks whether every chain it needs is cut in there, and reaches back twice as far while
one is not, at most to the start of the calendar, where the hunt itself begins. The answer is
therefore exactly the hunt's. Alerts of later sessions than ``as_of`` are dropped before anything
else is done.
"""

from __future__ import annotations

import csv
import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from miner.assemble import code_map, labels_of, spans_of, used_names
from miner.errors import SettingsError, TableError, explain
from miner.panel import Panel, pack_alerts, pack_coverage
from miner.read_tables import Log, SpanTable, read_coverage, read_groups, read_log
from miner.rule_book.records import STATUSES, BookRule, RuleBook
from miner.rule_cases import combo_of
from miner.scan_view import LONG_AGO, View
from miner.session_calendar import SessionCalendar, build_calendar
from miner.settings import Study, is_url, study_from_dict

SCANNED = tuple(status for status in STATUSES if status != "retired")
RESTS = 3  # of the longest rest, to begin with
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)


@dataclass(frozen=True)
class Alert:
    """The latest alert of a type in a look-back, its stamp local with the offset from UTC."""

    type: str
    stamp: str


@dataclass(frozen=True)
class ScanHit:
    """A trigger whose horizon is not over.

    Attributes
    ----------
    session : date of the trigger
    alerts : the latest of each type in the look-back
    sessions_left : of the horizon, after the scan's own session
    is_new : it triggered on the scan's own session
    past_triggers, past_hits, past_open : the rule's earlier triggers on the entity, those followed
        by the event, and those whose outcome the book does not know; None without a history
    """

    rule: BookRule
    entity: str
    session: str
    alerts: tuple[Alert, ...]
    sessions_left: int
    is_new: bool
    past_triggers: int | None
    past_hits: int | None
    past_open: int | None


@dataclass(frozen=True)
class OneShort:
    """A combination that one more alert would complete.

    ``sessions_left``: sessions after the scan's own in which the missing alert would still do so;
    0: it would have to come on the scan's own session.
    """

    rule: BookRule
    entity: str
    missing: str
    alerts: tuple[Alert, ...]
    sessions_left: int


@dataclass(frozen=True)
class Scan:
    """What a scan found: newest triggers first, then one short by what can be expected.

    ``first_session`` is the earliest session that was read.
    """

    as_of: str
    first_session: str
    n_rules: int
    n_alerts: int
    hits: tuple[ScanHit, ...]
    one_short: tuple[OneShort, ...]
    warnings: tuple[str, ...]


def scan(
    book: RuleBook,
    alerts: str | Path | dict[str, Any],
    *,
    book_folder: str | Path = ".",
    as_of: dt.date | None = None,
    statuses: Sequence[str] = SCANNED,
) -> Scan:
    """Find the triggers of a book's rules that are still inside their horizon.

    Parameters
    ----------
    alerts : path, glob or database URL of the log; or the keys of [alerts] in a study's settings,
        such as ``{"source": ..., "query": ...}``. The book's column names hold unless given
    book_folder : folder of the book's file, which its paths are relative to
    as_of : the last date that counts (its session, or the last one before); by default the session
        of the log's last alert
    statuses : rules in other statuses are passed over

    Raises
    ------
    InputError : the log, the groups or the coverage cannot be read
    """
    book_folder = Path(book_folder)
    rules = book.rules_with(statuses)
    study = _study(book, alerts, book_folder, as_of)
    # a morning without alerts is no fault, but it does not say which morning it is
    log = read_log(study, "alerts", may_have_no_rows=as_of is not None)
    first_us, last_us = (int(log.stamp_us.min()), int(log.stamp_us.max())) if len(log) else (0, 0)
    calendar = build_calendar(study, first_us, last_us)
    reader = _Reader(study, log, calendar, rules)
    return reader.scan(_history(book, book_folder))


def _study(
    book: RuleBook, alerts: str | Path | dict[str, Any], folder: Path, as_of: dt.date | None
) -> Study:
    section = dict(alerts) if isinstance(alerts, dict) else {"source": str(alerts)}
    if not is_url(str(section["source"])):
        section["source"] = str(Path.cwd() / section["source"])
    sections = book.within(folder)
    sections["alerts"] = {**book.alerts, **section}
    sections["events"] = {"source": "no events are read"}
    if as_of is not None:
        start = str(sections["sessions"].get("start", as_of))
        if str(as_of) <= start:
            raise SettingsError(
                explain(
                    "scan", "as of", f"be after the study's start {start}", str(as_of),
                    "Ask for a later date.",
                )
            )  # fmt: skip
        sections["sessions"]["end"] = as_of
    return study_from_dict(sections, folder)


class _Reader:
    """The log on the scan's calendar, and panels of its last sessions."""

    def __init__(
        self, study: Study, log: Log, calendar: SessionCalendar, rules: Sequence[BookRule]
    ) -> None:
        self.study, self.log, self.calendar, self.rules = study, log, calendar, rules
        self.last = len(calendar) - 1
        self.zone = ZoneInfo(calendar.timezone)
        self.types = tuple(sorted({name for rule in rules for name in rule.combination}))
        self.groups, self.coverage = read_groups(study), read_coverage(study)
        session = calendar.session_of(log.stamp_us, log.is_bare_date)
        spans = [table for table in (self.groups, self.coverage) if table is not None]
        tables: Sequence[Log | SpanTable] = spans or [log]
        known = {name for table in tables for name in used_names(table)}
        is_known = np.array([name in known for name in log.entity_names] or [False])
        kind = code_map(log.type_names, self.types)[log.type_code]
        is_inside = (session >= 0) & (session <= self.last)
        self.n_inside = int(is_inside.sum())
        self.n_unknown = int((is_inside & ~is_known[log.entity_code]).sum())
        self.n_later = int((session > self.last).sum())
        kept = np.flatnonzero(is_inside & is_known[log.entity_code] & (kind >= 0))
        kept = kept[np.lexsort((log.stamp_us[kept], log.entity_code[kept]))]
        self.entity, self.kind, self.session = log.entity_code[kept], kind[kept], session[kept]
        self.row = kept
        codes, start = np.unique(self.entity, return_index=True)
        stop = np.append(start, kept.size)[1:]
        self.part_of = {
            log.entity_names[code]: bounds
            for code, *bounds in zip(codes.tolist(), start.tolist(), stop.tolist(), strict=True)
        }
        self.first_alert = int(session[is_inside].min()) if is_inside.any() else self.last

    def scan(self, history: dict[tuple[str, str], list[tuple[str, str]]] | None) -> Scan:
        reach = max((max(rule.horizon, rule.rest) for rule in self.rules), default=1)
        lookback = max((rule.lookback for rule in self.rules), default=1)
        rest = max((rule.rest for rule in self.rules), default=0)
        start_report = max(0, self.last - reach)
        needed = max(0, start_report - lookback)
        back = lookback + RESTS * rest
        while True:
            first = max(0, start_report - back)
            view = self._view(first)
            if first == 0 or view.is_settled(start_report - first):
                break
            back *= 2
        hits = self._hits(view, history)
        short = self._one_short(view)
        warnings = self._warnings(needed)
        return Scan(
            str(self.calendar.dates[self.last]),
            str(self.calendar.dates[first]),
            len(self.rules),
            self.n_inside,
            tuple(hits),
            tuple(short),
            tuple(warnings),
        )

    def _view(self, first: int) -> View:
        """The panel of the sessions from ``first`` on, of the entities with alerts in them."""
        whole = self.calendar
        before = None if first == 0 else first - 1
        calendar = replace(
            whole,
            dates=whole.dates[first:],
            closes_us=whole.closes_us[first:],
            opens_after_us=whole.opens_after_us if before is None else int(whole.closes_us[before]),
            previous_date=whole.previous_date if before is None else whole.dates[before],
        )
        mine = self.session >= first
        codes, entity = np.unique(self.entity[mine], return_inverse=True)
        names = tuple(self.log.entity_names[code] for code in codes)
        n_sessions = len(calendar)
        alert_ekw = pack_alerts(
            entity,
            self.kind[mine],
            self.session[mine] - first,
            len(names),
            len(self.types),
            n_sessions,
        )
        spans = spans_of(self.coverage, "type", names, calendar) if self.coverage else None
        panel = Panel(
            names,
            self.types,
            n_sessions,
            alert_ekw,
            {},
            *pack_coverage(spans, len(names), self.types, n_sessions),
            *labels_of(self.study, self.groups, names, calendar),
        )
        everywhere = pack_coverage(None, len(names), self.types, n_sessions)
        return View(panel, replace(panel, cover_eqw=everywhere[0], class_k=everywhere[1]),
                    self.rules, first, mine)  # fmt: skip

    def _alerts(self, name: str, kinds: Sequence[int], first: int, last: int) -> tuple[Alert, ...]:
        """The latest alert of each type on an entity in the sessions ``first .. last``."""
        start, stop = self.part_of.get(name, (0, 0))
        part = slice(start, stop)  # of one entity, by stamp
        mine = (self.session[part] >= first) & (self.session[part] <= last)
        latest = dict(
            zip(self.kind[part][mine].tolist(), self.row[part][mine].tolist(), strict=True)
        )
        return tuple(
            Alert(self.types[k], self._stamp(latest[k])) for k in sorted(kinds) if k in latest
        )

    def _stamp(self, row: int) -> str:
        zone = ZoneInfo(self.calendar.timezone)
        at = dt.datetime.fromtimestamp(0, dt.UTC) + dt.timedelta(
            microseconds=int(self.log.stamp_us[row])
        )
        local = at.astimezone(zone)
        return local.date().isoformat() if self.log.is_bare_date[row] else local.isoformat()

    def _hits(
        self, view: View, history: dict[tuple[str, str], list[tuple[str, str]]] | None
    ) -> list[ScanHit]:
        hits = []
        for rule in self.rules:
            kinds = combo_of(view.panel, rule.combination)
            entity, session = view.triggers(rule)
            dates = self.calendar.dates[session + view.first].astype(str)
            for e, t, date in zip(
                entity.tolist(), (session + view.first).tolist(), dates, strict=True
            ):
                left = t + rule.horizon - self.last
                if left <= 0:
                    continue
                name = view.panel.entity_names[e]
                seen = dates[(entity == e) & (session + view.first < t)].tolist()
                settled = str(self.calendar.dates[max(0, self.last - rule.horizon)])
                past = _past(history, rule.id, name, str(date), seen, settled)
                alerts = self._alerts(name, kinds, t - rule.lookback + 1, t)
                hits.append(ScanHit(rule, name, str(date), alerts, left, t == self.last, *past))
        return sorted(
            hits, key=lambda hit: (-hit.sessions_left + hit.rule.horizon, *_by_promise(hit))
        )

    def _latest(self, view: View, stop: int) -> np.ndarray:
        """Session of the view of each entity's latest alert of each type before ``stop``.

        int64 [entities, types], long ago where there is none.
        """
        shape = view.panel.n_entities, len(self.types)
        latest_ek = np.full(shape, LONG_AGO, dtype=np.int64)
        codes = np.unique(self.entity[view.is_mine])
        mine = view.is_mine & (self.session < stop + view.first)
        entity = np.searchsorted(codes, self.entity[mine])
        session = self.session[mine].astype(np.int64) - view.first
        np.maximum.at(latest_ek, (entity, self.kind[mine]), session)
        return latest_ek

    def _one_short(self, view: View) -> list[OneShort]:
        panel, now = view.panel, view.panel.n_sessions - 1
        last_ek, before_ek = (self._latest(view, stop) for stop in (now + 1, now))
        covered_eq = (panel.cover_eqw[:, :, now >> 6] >> np.uint64(now & 63)) & np.uint64(1) != 0
        everyone = np.arange(panel.n_entities)
        found = []
        for rule in self.rules:
            kinds = np.array(combo_of(panel, rule.combination))
            if kinds.size < 2:  # a single alert is always one short
                continue
            expires_ek = last_ek[:, kinds] + rule.lookback - 1
            is_on_ek = expires_ek >= now
            is_short = is_on_ek.sum(axis=1) == kinds.size - 1
            was_on_e = (before_ek[:, kinds] + rule.lookback - 1 >= now - 1).all(axis=1)
            is_short &= covered_eq[:, panel.class_k[kinds]].all(axis=1)
            is_short &= view.in_stratum(rule, everyone, np.full(everyone.size, now))
            left_e = np.where(is_on_ek, expires_ek, 1 << 30).min(axis=1) - now
            rested_from_e = view.last_trigger(rule) + rule.rest
            is_short &= now + left_e >= rested_from_e
            # complete a session ago and again on this one is no new completion
            is_short &= ~was_on_e | (left_e > 0)
            for e in np.flatnonzero(is_short).tolist():
                missing = self.types[int(kinds[~is_on_ek[e]][0])]
                on = kinds[is_on_ek[e]].tolist()
                name = panel.entity_names[e]
                alerts = self._alerts(name, on, self.last - rule.lookback + 1, self.last)
                found.append(OneShort(rule, name, missing, alerts, int(left_e[e])))
        return sorted(found, key=_by_promise)

    def _warnings(self, needed: int) -> list[str]:
        found = []
        dates = self.calendar.dates
        if self.first_alert > needed:
            found.append(
                f"The log begins on {dates[self.first_alert]}, the look-backs of triggers still "
                f"open on {dates[needed]}: combinations begun before the log are missed."
            )
        if self.n_later:
            found.append(f"{self.n_later:,} alerts of later sessions were not looked at.")
        if self.n_unknown:
            found.append(
                f"{self.n_unknown:,} alerts of entities the groups and coverage do not know."
            )
        return found


def _history(book: RuleBook, folder: Path) -> dict[tuple[str, str], list[tuple[str, str]]] | None:
    """Session and outcome of the earlier triggers by rule and entity; None without a history."""
    if book.history is None:
        return None
    path = folder / book.history.source
    found: dict[tuple[str, str], list[tuple[str, str]]] = {}
    try:
        with path.open(encoding="utf-8", newline="") as file:
            for row in csv.DictReader(file):
                found.setdefault((row["rule"], row["entity"]), []).append(
                    (row["session"], row["outcome"])
                )
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError, csv.Error, KeyError) as error:
        raise TableError(
            explain(
                str(path), "history", "be readable", str(error),
                "Make the rule book again, or remove its [history].",
            )
        ) from error  # fmt: skip
    return found


def _past(
    history: dict[tuple[str, str], list[tuple[str, str]]] | None,
    rule: str,
    entity: str,
    date: str,
    seen: list[str],
    settled: str,
) -> tuple[int, int, int] | tuple[None, None, None]:
    """Triggers before a date, those that hit, those of unknown outcome.

    What came of triggers after ``settled`` was not known on the scan's session, whatever the book
    knows of it by now.
    """
    if history is None:
        return None, None, None
    outcomes = dict.fromkeys(seen, "open")
    outcomes |= {
        day: outcome if day <= settled else "open"
        for day, outcome in history.get((rule, entity), [])
        if day < date
    }
    said = list(outcomes.values())
    return len(said), said.count("hit"), said.count("open")


def _by_promise(item: ScanHit | OneShort) -> tuple[float, int, str, str]:
    return -(item.rule.precision or 0.0), -item.sessions_left, item.entity, item.rule.id
