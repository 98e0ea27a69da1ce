"""The pictures of a review's page. Each is given numbers that are already worked out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from datetime import date
from typing import Any

from markupsafe import Markup

from miner.report.charts import quarter_number, share_ticks
from miner.report.review_words import evidence_text
from miner.report.svg import Plot, ticks
from miner.report.words import count, number, percent, some, span

Row = dict[str, Any]

FLOOR = -3.0  # log10 of the evidence below which curves are cut off
MOST_QUARTERS = 12  # in the small line; all are in the large one
STRETCHES = (("last_year", "year"), ("since", "since"))


def _expected(row: Row) -> float | None:
    """Expected share of a stretch's or a quarter's triggers."""
    return row["expected_hits"] / row["triggers"] if row["triggers"] else None


def _highest(rule: Row, quarters: Sequence[Row]) -> float:
    shown = [q["precision"] for q in quarters] + [_expected(q) for q in quarters]
    shown.append(rule["promise"])
    return max([y for y in shown if y is not None], default=0.0)


def quarter_strip(rule: Row) -> Markup:
    """Precision of the last quarters against promise and expectation, without scales."""
    quarters = rule["quarters"][-MOST_QUARTERS:]
    n = max(len(quarters), 4)
    top = min(max(_highest(rule, quarters) * 1.15, 0.01), 1.05)
    plot = Plot((-0.6, n - 0.4), (0, top), width=150, height=44, margin=(4, 4, 4, 4))
    plot.line([(-0.6, 0), (n - 0.4, 0)], "grid")
    if rule["promise"] is not None:
        plot.line([(-0.6, rule["promise"]), (n - 0.4, rule["promise"])], "promise")
    most = max((q["triggers"] for q in quarters), default=0)
    told = []
    for x, q in enumerate(quarters, start=n - len(quarters)):
        expected = _expected(q)
        if expected is None or q["precision"] is None:
            told.append(f"{q['quarter']} no trigger")
            continue
        plot.line([(x - 0.4, expected), (x + 0.4, expected)], "expectedline")
        kind = "dot late" if x == n - 1 else "dot early"
        plot.dot(x, q["precision"], kind, 1.8 + 2.2 * (q["triggers"] / most) ** 0.5)
        told.append(f"{q['quarter']} {percent(q['precision'])} of {q['triggers']}")
    return plot.done(f"Precision by quarter: {'; '.join(told) or 'none yet'}", "chart strip")


def precision_plot(rule: Row, high: float) -> Markup:
    """The quarter above and since adoption below, with intervals; promise and expected rate as
    upright marks. All rules share the scale 0 .. ``high``."""
    plot = Plot((0, high), (0, 2), width=170, height=34, margin=(2, 4, 2, 4))
    plot.line([(0, 1), (high, 1)], "grid")
    told = []
    if rule["promise"] is not None:
        plot.upright(min(rule["promise"], high), "promise")
        told.append(f"promise {percent(rule['promise'])}")
    for key, y, kind, name in (
        ("this_quarter", 1.5, "early", "this quarter"),
        ("since", 0.5, "late", "since adoption"),
    ):
        part = rule[key]
        expected = None if part is None else _expected(part)
        if expected is None or part["precision"] is None:
            told.append(f"{name}: no trigger")
            continue
        plot.upright(min(expected, high), "expected", (y - 0.42, y + 0.42))
        if part["low"] is not None and part["high"] is not None:
            plot.line([(part["low"], y), (min(part["high"], high), y)], f"range {kind}")
        plot.dot(part["precision"], y, f"dot {kind}", 3.5)
        told.append(
            f"{name} {percent(part['precision'])} ({span(part['low'], part['high'])}), expected "
            f"{percent(expected)}"
        )
    return plot.done("; ".join(told), "chart interval")


def _log(e: float | None) -> float | None:
    if e is None:
        return None
    return max(math.log10(e), FLOOR) if e > 0 else FLOOR


def _curve(rule: Row, key: str, last: str) -> list[tuple[float, float | None]]:
    """From 1 at adoption to what the quarter's end says, as days and powers of ten."""
    first = min([rule["adopted"], *(point["date"] for point in rule["evidence"])])
    points: list[tuple[float, float | None]] = [(_day(first), 0.0)]
    points += [(_day(point["date"]), _log(point[key])) for point in rule["evidence"]]
    side = rule["works" if key == "e_works" else "broken"]
    return [*points, (_day(last), _log(side["e"]) if side else None)]


def _day(text: str) -> float:
    return float(date.fromisoformat(text).toordinal())


def evidence_strip(rule: Row, last: str, watch_at: float, retire_at: float) -> Markup | None:
    """Evidence that the promise is broken, small; None without a promise."""
    if rule["broken"] is None:
        return None
    points = _curve(rule, "e_broken", last)
    high = math.log10(retire_at) + 0.8
    first, end = points[0][0], max(points[-1][0], points[0][0] + 1)
    plot = Plot((first, end), (-1, high), width=120, height=44, margin=(4, 4, 4, 4))
    for at, kind in ((watch_at, "watchline"), (retire_at, "retireline")):
        plot.line([(first, math.log10(at)), (end, math.log10(at))], kind)
    inside: list[tuple[float, float | None]] = [
        (x, None if y is None else min(max(y, -1.0), high)) for x, y in points
    ]
    plot.line(inside, "seenline")
    e, top = rule["broken"]["e"], rule["broken"]["e_highest"]
    return plot.done(
        f"Evidence that the promise is broken: {evidence_text(e)}, at most {evidence_text(top)} "
        "at a quarter's end",
        "chart strip",
    )


def evidence_plot(
    rule: Row, key: str, last: str, marks: Sequence[tuple[float, str, str]]
) -> Markup | None:
    """One evidence curve on a log scale.

    Parameters
    ----------
    key : "e_works" or "e_broken"; None comes back where the rule has no such evidence
    marks : thresholds: value, what it is for, kind of line
    """
    side = rule["works" if key == "e_works" else "broken"]
    if side is None:
        return None
    points = _curve(rule, key, last)
    shown = [y for _, y in points if y is not None]
    high = max(math.log10(marks[-1][0]) + 0.6, *shown) * 1.04
    low = min(-1.0, *shown)
    first, end = points[0][0], max(points[-1][0], points[0][0] + 1)
    plot = Plot((first, end), (low, high), height=150)
    step = max(1, math.ceil((high - low) / 4))
    at = range(math.ceil(low / step) * step, math.floor(high) + 1, step)
    plot.y_axis([(k, _power(k)) for k in at])
    for value, _, kind in marks:
        plot.line([(first, math.log10(value)), (end, math.log10(value))], kind)
    plot.line(points, "seenline")
    for x, y in points[1:-1]:
        if y is not None and len(points) < 60:
            plot.dot(x, y, "stray", 1.6)
    for i, (value, text, _) in enumerate(marks):
        below = i < len(marks) - 1  # the last one's words stand above its line
        foot = plot.py(math.log10(value)) + (11 if below else -3)
        plot.text(plot.left + 4, foot, text, "start", "halo")
    plot.x_axis(_quarter_ticks(rule["quarters"], first))
    what = "it still works" if key == "e_works" else "its promise is broken"
    return plot.done(
        f"Evidence that {what}: "
        + "; ".join(f"{q['quarter']} {evidence_text(q[key])}" for q in rule["quarters"])
    )


def _power(k: int) -> str:
    if -3 <= k <= 3:
        return f"{10.0**k:g}"
    return f"1e{k}"


def _quarter_ticks(quarters: Sequence[Row], first: float) -> list[tuple[float, str]]:
    """Starts of the quarters as days, four or five of them named."""
    step = -(-len(quarters) // 5) or 1
    found = []
    for q in quarters[::-1][::step][::-1]:
        year, part = q["quarter"].split("Q")
        found.append((max(_day(f"{year}-{3 * int(part) - 2:02d}-01"), first), q["quarter"]))
    return found


def rule_plot(rule: Row) -> Markup:
    """Precision by quarter against promise and expectation; at the right, with their intervals,
    the last four quarters and since adoption."""
    quarters = rule["quarters"]
    first = quarter_number(quarters[0]["quarter"])
    last = max(quarter_number(quarters[-1]["quarter"]), first + 3)
    stretches = [(rule[key], name) for key, name in STRETCHES if rule[key] is not None]
    ends = [rule[key]["high"] for key in ("this_quarter", "last_year", "since") if rule[key]]
    top = max([y for y in ends if y is not None], default=0.0)
    top = min(1.0, max(top, _highest(rule, quarters), 0.01) * 1.08)
    gap = max(1.0, (last - first + 1) / 6)
    plot = Plot((first - 0.6, last + 0.6 + 2 * gap), (0, top), height=190)
    plot.y_axis(share_ticks(top))
    if rule["promise"] is not None:
        for share, kind in ((rule["keep_above"], "keepline"), (rule["promise"], "promise")):
            plot.line([(first - 0.6, share), (last + 0.6, share)], kind)
    most = max((q["triggers"] for q in quarters), default=0)
    for q in quarters:
        x, expected = quarter_number(q["quarter"]), _expected(q)
        if expected is None or q["precision"] is None:
            continue
        plot.line([(x - 0.4, expected), (x + 0.4, expected)], "expectedline")
        now = rule["this_quarter"]
        is_now = q is quarters[-1]
        if is_now and now["low"] is not None and now["high"] is not None:
            plot.line([(x, now["low"]), (x, now["high"])], "range late")
        kind = "dot late" if is_now else "dot early"
        plot.dot(x, q["precision"], kind, 1.8 + 3.0 * (q["triggers"] / most) ** 0.5)
    step = -(-(last - first + 1) // 6)
    plot.x_axis([(x, f"{x // 4}Q{x % 4 + 1}"[2:]) for x in range(last, first - 1, -step)][::-1])
    told = [
        f"{q['quarter']} {percent(q['precision'])} of {q['triggers']}, expected "
        f"{percent(_expected(q))}"
        for q in quarters
    ]
    for place, (part, name) in enumerate(stretches):
        at = last + 0.6 + gap * (place + 0.6)
        plot.text(plot.px(at), plot.height - plot.bottom + 13, name)
        if part["precision"] is None:
            continue
        if part["low"] is not None and part["high"] is not None:
            plot.line([(at, part["low"]), (at, min(part["high"], top))], "range late")
        plot.dot(at, part["precision"], "dot late", 4)
        told.append(f"{name} {percent(part['precision'])} ({span(part['low'], part['high'])})")
    if rule["promise"] is not None:
        told.append(f"promise {percent(rule['promise'])}")
    return plot.done(f"Precision by quarter: {'; '.join(told)}")


def bars(
    rows: Sequence[Row], whole: str, part: str, words: tuple[str, str], *, height: int = 112
) -> Markup:
    """Bars by quarter, a part of each filled, with a tick where that part was expected."""
    top = max([row[whole] for row in rows] + [1]) * 1.12
    plot = Plot((-0.6, max(len(rows), 4) - 0.4), (0, top), height=height, margin=(8, 8, 20, 38))
    plot.y_axis([(y, count(y)) for y in ticks(top, 3) if y == int(y)])
    for x, row in enumerate(rows):
        plot.box((x - 0.36, x + 0.36), (0, row[whole]), "null")
        plot.box((x - 0.36, x + 0.36), (0, row[part]), "bar")
        expected = row["expected_hits"]
        plot.line([(x - 0.45, expected), (x + 0.45, expected)], "expected")
    step = -(-len(rows) // 6) or 1
    at = range(len(rows) - 1, -1, -step)
    plot.x_axis([(x, rows[x]["quarter"]) for x in reversed(at)])
    return plot.done(
        f"{words[0]} and {words[1]} by quarter: "
        + "; ".join(
            f"{row['quarter']} {count(row[whole])} and {count(row[part])}, "
            f"{number(row['expected_hits'])} expected"
            for row in rows
        )
    )


def weeks_plot(weeks: Sequence[str], alerts: Sequence[int], since: str | None, last: Row) -> Markup:
    """Alerts of one type by week; the reviewed quarter shaded, a change of level marked.

    Parameters
    ----------
    last : first and last session of the reviewed quarter, as ``first`` and ``last``
    """
    top = max([*alerts, 1]) * 1.1
    days = [_day(week) for week in weeks]
    plot = Plot((days[0], _day(last["last"])), (0, top), width=200, height=92,
                margin=(6, 6, 18, 34))  # fmt: skip
    plot.box((max(_day(last["first"]), days[0]), _day(last["last"])), (0, top), "window")
    plot.y_axis([(y, count(y)) for y in ticks(top, 3) if y == int(y)])
    plot.line(list(zip(days, map(float, alerts), strict=True)), "seenline")
    if since is not None:
        plot.upright(_day(since), "changed")
    first_year, last_year = int(weeks[0][:4]), int(weeks[-1][:4])
    starts = [(_day(f"{year}-01-01"), str(year)) for year in range(first_year, last_year + 1)]
    plot.x_axis([(max(x, days[0]), text) for x, text in starts if x > days[0] - 200][-3:])
    told = f"; a lasting change from {since} on" if since else ""
    return plot.done(
        f"Alerts by week, {some(len(alerts), 'week')}: between {count(min(alerts))} and "
        f"{count(max(alerts))}{told}"
    )
