"""A scan as a table for a terminal, as csv and as JSON. Formats; computes no statistic.

JSON (``format`` 1): ``as_of``, ``first_session`` (dates), ``rules``, ``alerts`` (numbers scanned),
``warnings`` (texts), ``hits`` and ``one_short`` (lists). Each of those has ``rule`` (id),
``status``, ``target``, ``stratum``, ``combination`` (list of alert types), ``entity``, ``alerts``
(list of ``type`` and ``stamp``, local with offset; a bare date stays one), ``sessions_left``,
``precision``, ``precision_low``, ``precision_high`` and ``expected`` (null where the book has
none). A hit also has ``session`` (date of the trigger), ``is_new``, ``past_triggers``,
``past_hits`` and ``past_open`` (null without a history); one short has ``missing``.

csv: the same, one row a hit or combination one short, ``kind`` "hit" or "one short" first,
lists joined by " + " (combination) and "; " (alerts, as "type at stamp").
"""

from __future__ import annotations

import csv
import io
import json
import textwrap
from collections.abc import Iterator
from typing import Any

from miner.columns import JOINER
from miner.rule_book.records import BookRule
from miner.rule_book.words import CAUTIONS
from miner.scan import OneShort, Scan, ScanHit

FORMAT = 1
WIDTH = 100
MOST_SHORT = 20
CSV_COLUMNS = [
    "kind", "rule", "status", "target", "stratum", "combination", "entity", "session", "is_new",
    "missing", "alerts", "sessions_left", "precision", "precision_low", "precision_high",
    "expected", "past_triggers", "past_hits", "past_open",
]  # fmt: skip


def scan_json(result: Scan) -> str:
    """The scan as JSON text, as the module describes it; it ends with a line's end."""
    record = {
        "format": FORMAT,
        "as_of": result.as_of,
        "first_session": result.first_session,
        "rules": result.n_rules,
        "alerts": result.n_alerts,
        "warnings": list(result.warnings),
        "hits": [_hit(hit) for hit in result.hits],
        "one_short": [_short(short) for short in result.one_short],
    }
    return json.dumps(record, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def scan_csv(result: Scan) -> str:
    """The scan as csv text, as the module describes it."""
    text = io.StringIO()
    writer = csv.DictWriter(text, CSV_COLUMNS, restval="", lineterminator="\n")
    writer.writeheader()
    rows = [{"kind": "hit", **_hit(hit)} for hit in result.hits]
    rows += [{"kind": "one short", **_short(short)} for short in result.one_short]
    for row in rows:
        row["combination"] = JOINER.join(row["combination"])
        row["alerts"] = "; ".join(f"{a['type']} at {a['stamp']}" for a in row["alerts"])
        writer.writerow({key: "" if value is None else value for key, value in row.items()})
    return text.getvalue()


def scan_lines(result: Scan) -> Iterator[str]:
    """The scan for a terminal: what triggered, newest first, and what is one alert short."""
    yield f"As of {result.as_of}: {result.n_alerts:,} alerts, {result.n_rules} rules"
    for warning in result.warnings:
        yield from textwrap.wrap(f"! {warning}", WIDTH, subsequent_indent="  ")
    yield ""
    if not result.hits:
        yield "Nothing has triggered that is still inside its horizon."
    else:
        yield "Triggered (* on this session):"
        yield from _aligned(
            ("", "session", "left", "entity", "expected", "before", "combination -> target"),
            [_hit_row(hit) for hit in result.hits],
        )
    yield ""
    if result.one_short:
        yield f"One alert short ({len(result.one_short):,}):"
        shown = result.one_short[:MOST_SHORT]
        yield from _aligned(
            ("left", "entity", "expected", "missing", "seen -> target"),
            [_short_row(short) for short in shown],
        )
        if len(result.one_short) > len(shown):
            yield f"  and {len(result.one_short) - len(shown):,} more (in the csv and json)"
        yield ""
    yield from textwrap.wrap(CAUTIONS, WIDTH)


def _rule(rule: BookRule) -> dict[str, Any]:
    return {
        "rule": rule.id,
        "status": rule.status,
        "target": rule.target,
        "stratum": rule.stratum,
        "combination": list(rule.combination),
        "precision": rule.precision,
        "precision_low": rule.precision_low,
        "precision_high": rule.precision_high,
        "expected": rule.expected,
    }


def _common(item: ScanHit | OneShort) -> dict[str, Any]:
    return {
        **_rule(item.rule),
        "entity": item.entity,
        "alerts": [{"type": alert.type, "stamp": alert.stamp} for alert in item.alerts],
        "sessions_left": item.sessions_left,
    }


def _hit(hit: ScanHit) -> dict[str, Any]:
    return {
        **_common(hit),
        "session": hit.session,
        "is_new": hit.is_new,
        "past_triggers": hit.past_triggers,
        "past_hits": hit.past_hits,
        "past_open": hit.past_open,
    }


def _short(short: OneShort) -> dict[str, Any]:
    return {**_common(short), "missing": short.missing}


def _expected(rule: BookRule) -> str:
    if rule.precision is None:
        return "-"
    text = f"{100 * rule.precision:.0f}%"
    if rule.precision_low is not None and rule.precision_high is not None:
        text += f" ({100 * rule.precision_low:.0f}-{100 * rule.precision_high:.0f})"
    return text


def _where(rule: BookRule) -> str:
    return f"{rule.target}" + ("" if rule.stratum == "all" else f" ({rule.stratum})")


def _hit_row(hit: ScanHit) -> tuple[str, ...]:
    before = "-" if hit.past_triggers is None else f"{hit.past_hits} of {hit.past_triggers}"
    return (
        "*" if hit.is_new else "",
        hit.session,
        str(hit.sessions_left),
        hit.entity,
        _expected(hit.rule),
        before,
        f"{hit.rule.name} -> {_where(hit.rule)}",
    )


def _short_row(short: OneShort) -> tuple[str, ...]:
    seen = JOINER.join(alert.type for alert in short.alerts)
    return (
        str(short.sessions_left),
        short.entity,
        _expected(short.rule),
        short.missing,
        f"{seen} -> {_where(short.rule)}",
    )


def _aligned(header: tuple[str, ...], rows: list[tuple[str, ...]]) -> Iterator[str]:
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    for row in (header, *rows):
        yield "  " + "  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=True)).rstrip()
