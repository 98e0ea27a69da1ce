"""Single types, types together and the funnel, as their templates take them."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from markupsafe import Markup

from miner.report import charts
from miner.report.read_run import Run

MOST_PAIRS = 8
NOTABLE_EXCESS = 4.0
NEARLY_ALWAYS = 0.8
TIMINGS = {
    "precedes": "precedes",
    "both": "precedes and follows",
    "follows": "follows only",
    "neither": "no clear tie",
}


def types(run: Run) -> list[dict[str, Any]]:
    """Per target the profiles of all types: those that precede first."""
    evidence = run.evidence
    targets = []
    for target in evidence["targets"]:
        mine = [p for p in evidence["profiles"] if p["target"] == target]
        mine.sort(key=lambda p: (list(TIMINGS).index(p["timing"]), p["type"]))
        targets.append(
            {
                "target": target,
                "panels": [
                    {
                        "name": evidence["types"][p["type"]],
                        "timing": TIMINGS[p["timing"]],
                        "profile": p,
                        "plot": charts.profile_plot(
                            p,
                            evidence["reach"],
                            evidence["horizon"],
                            small=True,
                            what=f"Rate of {target}",
                        ),
                    }
                    for p in mine
                ],
            }
        )
    return targets


def matrix(run: Run) -> dict[str, Any]:
    """Types against types: the table's cells, and the pairs that stand out."""
    both, names = run.evidence["together"], run.evidence["types"]
    cells, pairs, always = [], [], []
    for i, name in enumerate(names):
        line = []
        for j, other in enumerate(names):
            ratio, excess = both["ratio"][i][j], both["excess"][i][j]
            n, seen = both["arrivals"][i][j], both["seen"][i][j]
            heat = ""
            if ratio is not None and excess is not None and abs(excess) >= NOTABLE_EXCESS:
                heat = _heat(ratio)
                if ratio > 1:
                    pairs.append((excess, name, other, seen, n, ratio))
            if i != j and n and seen >= NEARLY_ALWAYS * n:
                always.append((name, other, seen, n))
            line.append((None if i == j else ratio, heat))
        cells.append((i + 1, name, line))
    pairs.sort(key=lambda pair: (-pair[0], pair[1:3]))
    return {
        "names": names,
        "cells": cells,
        "pairs": [pair[1:] for pair in pairs[:MOST_PAIRS]],
        "n_pairs": len(pairs),
        "always": always[:MOST_PAIRS],
        "notable": NOTABLE_EXCESS,
    }


def _heat(ratio: float) -> str:
    for least, kind in ((5, "h4"), (2.5, "h3"), (1.5, "h2"), (1.0, "h1")):
        if ratio >= least:
            return kind
    return "c1" if ratio >= 0.67 else "c2"


def funnel(run: Run) -> Iterator[tuple[str, int, Markup, str]]:
    """The steps from the family to the confirmed rules, each with its count."""
    counts, settings = run.record["counts"], run.record["settings"]
    adjust = settings["testing"]["adjust"]
    family = max(1, counts["family"])
    minimum = settings["mining"]["min_triggers"]
    lines = [
        (
            "Family",
            counts["family"],
            f"combinations with at least {minimum} triggers, looked at "
            "or not; every adjustment divides by this number",
        ),
        ("Proposed", counts["candidates"], "of them, seen often enough before events"),
    ]
    said = {
        "bh": "false discovery rate (Benjamini–Hochberg)",
        "by": "false discovery rate under any dependence (Benjamini–Yekutieli)",
        "westfall-young": "family-wise error by joint draws (Westfall–Young)",
    }
    for how, n in sorted(counts["passed"].items(), key=lambda item: item[0] != adjust):
        used = "the one that counts: " if how == adjust else "for comparison: "
        lines.append((f"Passed, {how}", n, used + said[how]))
    lines += [
        ("Rules", counts["rules"], "that account for what passed"),
        ("Confirmed", counts["confirmed"], "of them, on the holdout"),
    ]
    for title, n, text in lines:
        yield title, n, charts.bar(n / family), text
