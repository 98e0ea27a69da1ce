"""Plain-text screens: what a hunt and a check print. Formats; computes no statistic."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

import pandas as pd

from miner.columns import POOLED

if TYPE_CHECKING:
    from miner.checking import Check
    from miner.hunting import Hunt

WIDTH = 100
LABEL = 14
LONGEST_STRATUM = 16
NUMBER_WIDTHS = (7, 6, 14, 8, 9, 6)

CAUTIONS = (
    "Research, not advice: past precision does not promise any to come. Alerts ahead of corporate "
    "events can reflect leaked information: involve compliance before acting on a rule. Local "
    "rules and licensed practice come first."
)


def percent(share: float, digits: int | None = None) -> str:
    """A share as per cent, with more digits where it is small; "-" where undefined."""
    if pd.isna(share):
        return "-"
    if digits is None:
        digits = 0 if share >= 0.1 or share == 0 else 1 if share >= 0.01 else 2
    return f"{100 * share:.{digits}f}%"


def p_text(p: float) -> str:
    """A p-value; what lies below 1e-300 is only known to."""
    return "< 1e-300" if p <= 1e-300 else f"{p:.2g}"


def wrapped(text: str, first: str = "", rest: str = "") -> str:
    """A paragraph no wider than the screen; ``first`` stands before its first line."""
    return textwrap.fill(plain(text), WIDTH, initial_indent=first, subsequent_indent=rest)


def plain(text: str) -> str:
    """Names come from tables: nothing in them may steer a terminal."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)


def cut(text: str, width: int) -> str:
    """A name that has to stay in its column."""
    text = plain(text)
    return text if len(text) <= width else text[: width - 3] + "..."


def entry(label: str, text: str) -> str:
    """A labelled paragraph of the summary."""
    return wrapped(text, f"{label:<{LABEL}}", " " * LABEL)


def hunt_lines(result: Hunt) -> Iterator[str]:
    """One screen: what was read, the funnel, the placebo, then one entry a rule."""
    record = result.record
    counts, split, settings = record["counts"], record["split"], record["settings"]
    calendar = record["calendar"]
    yield wrapped(
        f"{record['study']}: {calendar['first']} to {calendar['last']}, "
        f"{calendar['sessions']:,} sessions ({calendar['name']}, {calendar['timezone']})"
    )
    yield ""
    yield entry("Read", read_text(counts["tables"], counts["entities"], counts["alert_types"]))
    yield entry(
        "Split",
        f"discovery to {split['discovery_last']} ({split['discovery_sessions']:,} sessions), "
        f"holdout from {split['holdout_first']} ({split['holdout_sessions']:,}), "
        f"{split['embargo']} between",
    )
    horizon = settings["windows"]["horizon"]
    yield entry(
        "Base rate",
        f"within {horizon} sessions: "
        + "; ".join(
            f"{_of(unit['target'], unit['stratum'])} {percent(unit['base_rate'])}"
            for unit in record["margins"]
            if unit["base_rate"] is not None
        ),
    )
    minimum, fdr = settings["mining"]["min_triggers"], settings["testing"]["fdr"]
    yield entry(
        "Family",
        f"{counts['family']:,} combinations with at least {minimum} triggers, looked at or not; "
        f"{counts['candidates']:,} of them proposed by the windows before events",
    )
    adjust = settings["testing"]["adjust"]
    others = [f"{n:,} by {how}" for how, n in counts["passed"].items() if how != adjust]
    yield entry(
        "Passed",
        f"{counts['passed'].get(adjust, 0):,} beat the margins null at {100 * fdr:g}% ({adjust}"
        + (f"; {', '.join(others)})" if others else ")"),
    )
    if counts["rules"]:
        yield entry(
            "Rules",
            f"{counts['rules']} account{'s' * (counts['rules'] == 1)} for all that passed",
        )
        yield entry("Confirmed", f"{counts['confirmed']} of them held on the holdout")
    placebo = record["placebo"]
    if placebo["worlds"]:
        yield entry(
            "Placebo",
            f"the same hunt finds {placebo['mean_rules']:.2g} rules on average in "
            f"{placebo['worlds']} worlds with nothing to find (any in "
            f"{100 * placebo['share_with_any']:g}% of them)",
        )
    yield from _walk_text(record)
    yield from _models_text(record)
    for warning in record["warnings"]:
        yield entry("Note", warning)
    yield ""
    if not counts["family"]:
        yield f"Nothing could be judged: no combination has {minimum} triggers in discovery. Lower"
        yield "min_triggers, lengthen the study, or look at what was set aside."
    elif result.rules.empty:
        yield "No rule: nothing precedes the events more often than chance, the calendar and busy"
        yield "names explain. Most hunts end like this."
    else:
        yield f"Rules: share of triggers with the event within {horizon} sessions (95% interval)"
        yield from rule_lines(result.rules, record["rules"])
    yield ""
    yield textwrap.fill(CAUTIONS, WIDTH)
    if result.folder is not None:
        yield ""
        yield f"Written to {result.folder}"


def read_text(tables: dict[str, dict[str, int]], n_entities: int, n_types: int) -> str:
    """What was read and set aside, in words."""
    alerts, events = tables["alerts"], tables["events"]
    text = (
        f"{alerts['used']:,} alerts of {n_types} types and {events['used']:,} events on "
        f"{n_entities:,} entities"
    )
    aside = [
        f"{count[reason]:,} {name} {words}"
        for name, count in tables.items()
        for reason, words in (
            ("outside calendar", "outside the calendar"),
            ("unknown entity", "of unknown entities"),
            ("unreadable", "unreadable"),
        )
        if count.get(reason)
    ]
    return text + (f"; set aside: {', '.join(aside)}" if aside else "")


def rule_lines(rules: pd.DataFrame, steps: Sequence[dict[str, Any]]) -> Iterator[str]:
    """The rules in the order found; a combination found in several strata is told once.

    Under each combination one line a stratum, in columns that are the same for all rules.
    """
    table = rules.to_dict("records")
    width = min(LONGEST_STRATUM, max(len("stratum"), *(len(rule["stratum"]) for rule in table)))
    yield _columns(
        "",
        width,
        "stratum",
        "verdict",
        ("holdout", "of", "95% interval", "expected", "discovery", "of"),
    )
    told: set[tuple[str, str]] = set()
    for rule in table:
        key = rule["target"], rule["combination"]
        if key in told:
            continue
        told.add(key)
        yield wrapped(f"{rule['combination']} -> {rule['target']}", "", "     ")
        for same, step in zip(table, steps, strict=True):
            if (same["target"], same["combination"]) == key:
                yield from _stratum_lines(same, step, width)


def _columns(order: str, width: int, stratum: str, verdict: str, numbers: Sequence[str]) -> str:
    cells = "".join(f"  {cell:>{w}}" for cell, w in zip(numbers, NUMBER_WIDTHS, strict=True))
    return f"{order:>4} {cut(stratum, width):<{width}}  {verdict:<12}{cells}"


def _stratum_lines(rule: dict[str, Any], step: dict[str, Any], width: int) -> Iterator[str]:
    n = rule["holdout_triggers"]
    low, high = percent(rule["holdout_low"]), percent(rule["holdout_high"])
    holdout = (
        (
            percent(rule["holdout_precision"]),
            f"{n:,}",
            f"{low} to {high}",
            percent(rule["holdout_expected_hits"] / n),
        )
        if n
        else ("-", "0", "-", "-")
    )
    discovery = percent(rule["precision"]), f"{rule['triggers']:,}"
    order = f"{rule['rule_order']}."
    yield _columns(order, width, rule["stratum"], rule["verdict"], (*holdout, *discovery))
    notes = []
    if rule["sharpens"]:
        p = step["holdout"]["p_sharper"]
        notes.append(
            f"sharpens {rule['sharpens']}" + (f" (p {p_text(p)} in the holdout)" if p else "")
        )
    if step["explains"]:
        notes.append(f"explains {step['explains']} more that passed")
    if step["holdout"]["too_few_clusters"] and n:
        notes.append("too few clusters for a close interval")
    if rule["p_own_timing"] > 0.05:
        notes.append(
            f"beware: the entities' own timing explains it (p {p_text(rule['p_own_timing'])})"
        )
    if notes:
        indent = " " * (7 + width)
        yield wrapped("; ".join(notes), indent, indent)


def _walk_text(record: dict[str, Any]) -> Iterator[str]:
    folds = record["walk_forward"]
    if folds:
        n = sum(fold["rules"] for fold in folds)
        hits = sum(fold["hits"] for fold in folds)
        triggers = sum(fold["triggers"] for fold in folds)
        expected = sum(fold["expected_hits"] for fold in folds)
        text = f"{len(folds)} folds found {n} rules"
        if triggers:
            text += (
                f"; on the fold after, {hits} of {triggers} triggers hit ({expected:.1f} expected)"
            )
        yield entry("Walk-forward", text)


def _models_text(record: dict[str, Any]) -> Iterator[str]:
    for row in record["models"] or ():
        kind = row["against"]
        others = ", ".join(
            f"{percent(row[name])} by {name}"
            for name in ("gradient boosting", "logistic regression")
        )
        yield entry(
            "Classifiers",
            f"{row['target']}, {row['triggers']:,} holdout triggers each: "
            f"{percent(row[kind])} by the {kind}, {others}",
        )


def _of(target: str, stratum: str) -> str:
    return target if stratum == POOLED else f"{target} ({stratum})"


def check_lines(result: Check) -> Iterator[str]:
    """What ``miner check`` prints."""
    record = result.record
    yield wrapped(
        f"{record['study']}: {record['first']} to {record['last']}, "
        f"{record['sessions']:,} sessions ({record['calendar']}, {record['timezone']})"
    )
    yield ""
    yield entry("Read", read_text(record["tables"], record["entities"], len(result.types)))
    yield entry(
        "Split",
        f"discovery to {record['discovery_last']}, holdout from {record['holdout_first']}",
    )
    yield entry("Family", f"{record['family']:,} combinations have enough triggers in discovery")
    yield ""
    yield "Alert types: distinct alerts, entities with any of those covered, and the share followed"
    yield "by another of the same type and entity within the look-back"
    type_rows = [
        (
            row.type,
            f"{row.alerts:,}",
            f"{row.entities:,} of {row.entities_covered:,}",
            percent(row.followed_within_lookback),
        )
        for row in result.types.itertuples()
    ]
    yield from aligned(("type", "alerts", "entities", "followed"), type_rows)
    yield ""
    yield "Targets: events and base rate in discovery and in the holdout"
    rows = [
        (
            _of(row.target, row.stratum),
            f"{row.family:,}",
            f"{row.events_discovery:,}",
            percent(row.base_rate_discovery),
            f"{row.events_holdout:,}",
            percent(row.base_rate_holdout),
        )
        for row in result.targets.itertuples()
    ]
    yield from aligned(("target", "family", "events", "base rate", "held out", "base rate"), rows)
    yield ""
    yield (
        f"Power: smallest precision that passes discovery at {100 * record['fdr']:g}% as the only "
        "finding, and"
    )
    yield f"the holdout at {100 * record['alpha']:g}% as the only rule, at the base rates above"
    counts = sorted(result.power["triggers"].unique())
    power_rows: list[tuple[str, ...]] = []
    for (target, stratum), part in result.power.groupby(["target", "stratum"], sort=False):
        for stage, column in (
            ("discovery", "precision_discovery"),
            ("holdout", "precision_holdout"),
        ):
            power_rows.append((_of(target, stratum), stage, *(percent(x) for x in part[column])))
    yield from aligned(("target", "", *(f"{n} triggers" for n in counts)), power_rows)
    yield ""
    for warning in result.warnings:
        yield wrapped(warning, "! ", "  ")
    if not result.warnings:
        yield "Nothing looks wrong."


def aligned(header: Sequence[str], rows: Sequence[Sequence[str]]) -> Iterator[str]:
    """Rows under a header, first column to the left, the others to the right.

    The first column gives way where the table would be wider than the screen.
    """
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    room = WIDTH - 2 - sum(w + 2 for w in widths[1:])
    first_width = max(len(header[0]), min(widths[0], room))
    for row in (header, *rows):
        first = f"  {cut(row[0], first_width):<{first_width}}"
        rest = "".join(f"  {cell:>{w}}" for cell, w in zip(row[1:], widths[1:], strict=True))
        yield (first + rest).rstrip()
