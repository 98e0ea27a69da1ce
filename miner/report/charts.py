"""The report's pictures. Each is given numbers that are already worked out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from markupsafe import Markup

from miner.report.svg import Plot, ticks
from miner.report.words import count, number, percent, some

Row = dict[str, Any]


def share_ticks(high: float) -> list[tuple[float, str]]:
    """Round shares from 0 up to ``high``, with their words."""
    at = ticks(high)
    digits = 0 if len(at) < 2 or at[1] >= 0.01 else 1 if at[1] >= 0.001 else 2
    return [(y, f"{100 * y:.{digits}f}%") for y in at]


def interval_plot(rule: Row, high: float) -> Markup:
    """Precision with its interval, in discovery above and holdout below; expected and base rate
    as upright marks. All rules share the scale 0 .. ``high``."""
    plot = Plot((0, high), (0, 2), width=170, height=34, margin=(2, 4, 2, 4))
    plot.line([(0, 1), (high, 1)], "grid")
    halves = (
        (
            "discovery",
            1.5,
            rule["precision"],
            rule["precision_low"],
            rule["precision_high"],
            rule["expected_hits"],
            rule["triggers"],
            rule["base_rate"],
            "early",
        ),
        (
            "holdout",
            0.5,
            rule["holdout_precision"],
            rule["holdout_low"],
            rule["holdout_high"],
            rule["holdout_expected_hits"],
            rule["holdout_triggers"],
            rule["holdout_base_rate"],
            "late",
        ),
    )
    told = []
    for name, y, share, low, top, expected, n, base, kind in halves:
        if base is not None:
            plot.upright(base, "base", (y - 0.42, y + 0.42))
        if not n or share is None:
            told.append(f"{name}: no trigger")
            continue
        plot.upright(expected / n, "expected", (y - 0.42, y + 0.42))
        if low is not None and top is not None:
            plot.line([(low, y), (top, y)], f"range {kind}")
        plot.dot(share, y, f"dot {kind}", 3.5)
        told.append(
            f"{name} {percent(share)} ({percent(low)} to {percent(top)}), expected "
            f"{percent(expected / n)}, base rate {percent(base)}"
        )
    return plot.done("; ".join(told), "chart interval")


def interval_axis(high: float) -> Markup:
    """The scale of the interval plots."""
    plot = Plot((0, high), (0, 1), width=170, height=16, margin=(0, 4, 0, 4))
    for x, words in share_ticks(high):
        plot.text(plot.px(x), 12, words, "start" if x == 0 else "middle")
    return plot.done(f"Scale from 0 to {percent(high)}", "chart interval")


def null_plot(null: Row, when: str) -> Markup:
    """Chances of hits under the null, and the hits that were."""
    first, width, chance = null["first"], null["width"], null["chance"]
    last = first + width * len(chance)
    high = max(last, null["hits"] + 1)
    low = min(first, null["hits"])
    low = 0 if low < 0.3 * high else low
    top = max(chance, default=1.0) * 1.25
    plot = Plot((low, high), (0, top), height=112, margin=(20, 10, 20, 10))
    outline = [(float(first), 0.0)]
    for i, share in enumerate(chance):
        outline += [(first + i * width, share), (first + (i + 1) * width, share)]
    plot.area([*outline, (float(last), 0.0)], "null")
    plot.x_axis([(x + 0.5, count(x)) for x in ticks(high - 1) if x >= low])
    hits = null["hits"] + 0.5
    plot.upright(hits, "seen")
    right = plot.px(hits) < plot.width / 2
    plot.text(
        plot.px(hits) + (5 if right else -5),
        14,
        f"{count(null['hits'])} seen, {number(null['expected'])} expected",
        "start" if right else "end",
        "t strong",
    )
    return plot.done(
        f"Hits in {when}: {count(null['hits'])} of {some(null['triggers'], 'trigger')}; the null "
        f"expects {number(null['expected'])} and puts nearly all its weight between "
        f"{count(first)} and {count(min(last, null['triggers']))}."
    )


def profile_plot(
    profile: Row, reach: int, horizon: int, *, small: bool = False, what: str = "Event rate"
) -> Markup:
    """Event rate by session around triggers, with what the null expects and its band."""
    offsets = range(-reach, reach + 1)
    shown = [y for key in ("rate", "high") for y in profile[key] if y is not None]
    if not shown:
        plot = Plot((-reach, reach), (0, 1), width=200 if small else 340, height=60)
        plot.text(plot.width / 2, 34, "no trigger")
        return plot.done(f"{what}: no trigger to draw")
    top = max(shown) * 1.08 or 0.01
    size = {"width": 200, "height": 92, "margin": (6, 6, 18, 34)} if small else {"height": 170}
    plot = Plot((-reach, reach), (0, top), **size)
    plot.box((0.5, min(horizon, reach) + 0.5), (0, top), "window")
    plot.y_axis(share_ticks(top)[: None if not small else 4])
    band = [
        (x, low, high)
        for x, low, high in zip(offsets, profile["low"], profile["high"], strict=True)
        if low is not None
    ]
    plot.area(
        [(x, low) for x, low, _ in band] + [(x, high) for x, _, high in reversed(band)], "band"
    )
    plot.line(list(zip(offsets, profile["expected"], strict=True)), "expectedline")
    plot.upright(0, "zero")
    plot.line(list(zip(offsets, profile["rate"], strict=True)), "seenline")
    outside = 0
    for x, y, low, high in zip(
        offsets, profile["rate"], profile["low"], profile["high"], strict=True
    ):
        if y is not None and not low <= y <= high:
            outside += 1
            plot.dot(x, y, "stray", 1.7 if small else 2.4)
    plot.x_axis([(x, f"{x:+d}" if x else "0") for x in range(-reach, reach + 1, reach // 2)])
    peak = max(
        (y, -abs(x), x) for x, y in zip(offsets, profile["rate"], strict=True) if y is not None
    )
    before, after = profile["before"], profile["after"]
    return plot.done(
        f"{what} around {some(profile['triggers'], 'trigger')}: highest {percent(peak[0])} at "
        f"session {peak[2]:+d}; in the {horizon} sessions after, {count(after['events'])} events "
        f"against {number(after['expected'])} expected; in the {horizon} before, "
        f"{count(before['events'])} against {number(before['expected'])}; {outside} of "
        f"{len(offsets)} sessions outside the band."
    )


def quarter_plot(quarters: Sequence[Row], holdout_quarter: str) -> Markup:
    """Precision by quarter beside expectation; dots grow with the triggers; holdout shaded."""
    first, last = quarter_number(quarters[0]["quarter"]), quarter_number(quarters[-1]["quarter"])
    first, last = min(first, last - 3), max(last, first + 3)
    held = quarter_number(holdout_quarter)
    top = max(max(q["precision"], q["expected_hits"] / q["triggers"]) for q in quarters)
    top = max(top * 1.1, 0.01)
    plot = Plot((first - 0.6, last + 0.6), (0, top))
    if held <= last:
        plot.box((max(held, first) - 0.5, last + 0.6), (0, top), "window")
    plot.y_axis(share_ticks(top))
    years = [at for at in range(first, last + 1) if at % 4 == 0]
    plot.x_axis([(at, str(at // 4)) for at in years[:: -(-len(years) // 8) or 1]])
    at = [quarter_number(q["quarter"]) for q in quarters]
    for x, q in zip(at, quarters, strict=True):
        y = q["expected_hits"] / q["triggers"]
        plot.line([(x - 0.4, y), (x + 0.4, y)], "expectedline")
    most = max(q["triggers"] for q in quarters)
    for x, q in zip(at, quarters, strict=True):
        plot.dot(
            x,
            q["precision"],
            "dot late" if x >= held else "dot early",
            1.8 + 3.4 * (q["triggers"] / most) ** 0.5,
        )
    return plot.done(
        "Precision by quarter: "
        + "; ".join(
            f"{q['quarter']} {percent(q['precision'])} of {q['triggers']}, expected "
            f"{percent(q['expected_hits'] / q['triggers'])}"
            for q in quarters
        )
    )


def quarter_number(name: str) -> int:
    """Quarters since year 0 of a quarter's name."""
    year, quarter = name.split("Q")
    return 4 * int(year) + int(quarter) - 1


def lead_plot(counts: Sequence[int]) -> Markup:
    """Hits by sessions from trigger to event."""
    top = max([*counts, 1]) * 1.15
    plot = Plot((0.5, len(counts) + 0.5), (0, top), height=112, margin=(8, 10, 20, 38))
    plot.y_axis([(y, count(y)) for y in ticks(top, 3) if y == int(y)])
    for i, n in enumerate(counts, start=1):
        if n:
            plot.box((i - 0.4, i + 0.4), (0, n), "bar")
    step = -(-len(counts) // 12)
    plot.x_axis([(i, str(i)) for i in range(1, len(counts) + 1, step)])
    told = ", ".join(f"{n} after {i}" for i, n in enumerate(counts, start=1) if n)
    return plot.done(f"Hits by sessions from trigger to event: {told or 'no hits'}")


def bar(share: float) -> Markup:
    """One bar of the funnel, as long as ``share`` of the first."""
    plot = Plot((0, 1), (0, 1), width=300, height=14, margin=(0, 0, 0, 0))
    plot.box((0, max(share, 0.004)), (0, 1), "bar")
    return Markup(
        str(plot.done(""))
        .replace('role="img" ', 'aria-hidden="true" ')
        .replace(' aria-label=""', "")
    )
