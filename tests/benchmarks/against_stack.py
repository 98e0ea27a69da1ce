"""A hunt beside the plain stack on one study: the same counts, then the time of each."""

from __future__ import annotations

import json
import math
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tests.benchmarks.measure import BenchmarkError, Hunted, Use, hunt, run
from tests.benchmarks.tables import gigabytes, seconds, table

COUNTS = ("triggers", "hits")
RATES = ("precision", "base_rate")
AFTER_SEARCH = "placebo worlds"  # the first stage that the stack has no part of


@dataclass(frozen=True)
class Stack:
    """A finished run of the plain stack: what it used, its counts, seconds and candidates."""

    use: Use
    counts: dict[str, Any]
    seconds: dict[str, float]
    candidates: pd.DataFrame


def run_stack(study: Path, folder: Path, n_draws: int, limit: float) -> Stack:
    """Run the plain stack as a process.

    Raises
    ------
    BenchmarkError : it failed or took longer than ``limit`` seconds
    """
    module = "tests.benchmarks.plain_stack"
    use = run([sys.executable, "-m", module, str(study), str(folder), str(n_draws)], limit=limit)
    if use.is_cut or use.status != 0:
        raise BenchmarkError(f"plain stack on {study}: status {use.status}: {use.log[-2000:]}")
    record = json.loads((folder / "run.json").read_text())
    candidates = pd.read_csv(folder / "candidates.csv")
    return Stack(use, record["counts"], record["seconds"], candidates)


def unequal(
    candidates: pd.DataFrame, family: int, proposed: int, stack: pd.DataFrame, funnel: dict
) -> list[str]:
    """How the counts of a hunt's candidates differ from the plain stack's; empty if they do not.

    Proposed sets, family, candidates, triggers and hits have to be equal, precision and base rate
    within rounding.
    """
    found = [
        f"{what}: {ours:,} and {theirs:,}"
        for what, ours, theirs in (
            ("family", family, funnel["family"]),
            ("proposed", proposed, funnel["proposed"]),
        )
        if ours != theirs
    ]
    both = candidates.merge(stack, on="combination", suffixes=("", "_stack"))
    if not len(both) == len(candidates) == len(stack):
        found.append(f"candidates: {len(candidates):,} and {len(stack):,}, {len(both):,} in both")
    for column in COUNTS:
        n = int((both[column] != both[f"{column}_stack"]).sum())
        found += [f"{column} of {n:,} candidates"] if n else []
    for column in RATES:
        n = int((~np.isclose(both[column], both[f"{column}_stack"], rtol=1e-9, atol=0)).sum())
        found += [f"{column} of {n:,} candidates"] if n else []
    return found


def report(study: Path, folder: Path, n_draws: int, limit: float) -> tuple[str, bool]:
    """Text of the comparison, and whether counts differ (then no time is told)."""
    ours = hunt(study, folder / "ours")
    stack = run_stack(study, folder / "stack", n_draws, limit)
    candidates = pd.read_csv(ours.folder / "candidates.csv", keep_default_na=False)
    proposed = sum(margins["proposed"] for margins in ours.record["margins"])
    apart = unequal(candidates, ours.family, proposed, stack.candidates, stack.counts)
    if apart:
        return "void: counts differ: " + "; ".join(apart), True
    return "\n\n".join(_text(ours, stack, candidates)), False


def _text(ours: Hunted, stack: Stack, candidates: pd.DataFrame) -> list[str]:
    counts, used = stack.counts, stack.seconds
    n_draws, n_needed = counts["draws"], _draws_needed(ours)
    a_draw = used["draws"] / n_draws
    # of one core, so that on a quiet machine its processor time is its time
    enough = stack.use.cpu - used["draws"] + n_needed * a_draw
    stages = list(ours.seconds)
    search = sum(ours.seconds[name] for name in stages[: stages.index(AFTER_SEARCH)])
    rows = [
        [name, seconds(value), seconds(n_needed * a_draw) if name == "draws" else seconds(value)]
        for name, value in {"start": stack.use.cpu - sum(used.values()), **used}.items()
    ]
    rows += [
        ["**whole**", seconds(stack.use.cpu), seconds(enough)],
        ["times the hunt's processor time", *_times(stack.use.cpu, enough, ours.use.cpu)],
        ["times the hunt's wall time", *_times(stack.use.wall, enough, ours.use.wall)],
        ["times its reading and searching", *_times(stack.use.wall, enough, search)],
    ]
    both = candidates.merge(stack.candidates, on="combination", suffixes=("", "_stack"))
    some = both["expected_hits"] >= 10
    ratio = both.loc[some, "expected_hits_stack"] / both.loc[some, "expected_hits"]
    head = [
        "plain stack, processor seconds",
        f"{n_draws:,} draws",
        f"{n_needed:,} draws, by {a_draw * 1e3:.1f} ms a draw",
    ]
    return [
        f"Equal in both: {counts['proposed']:,} proposed sets, a family of {counts['family']:,}, "
        f"triggers ({counts['triggers']:,}) and hits of all {len(both):,} candidates; precision "
        "and base rate to 1e-9. Of the same null in kind (each entity's number of events and each "
        "sector's on each session are held): the stack's mean of draws is "
        f"{ratio.median():.3f} times the hunt's expected hits in the middle of {int(some.sum()):,} "
        f"candidates ({ratio.quantile(0.05):.3f} to {ratio.quantile(0.95):.3f} for nine in ten).",
        table(head, rows),
        f"The hunt took {seconds(ours.use.wall)} s in all ({seconds(ours.use.cpu)} s of processor "
        f"time, {gigabytes(ours.use.peak)} GB), {seconds(search)} s of them reading and searching, "
        "which is what the stack does and explaining away besides. The stack has one core and took "
        f"{seconds(stack.use.wall)} s of wall time and {gigabytes(stack.use.peak)} GB. A "
        f"p-value from draws is at least 1 / (1 + draws), so that with {n_draws:,} draws nothing "
        f"passes unless {math.ceil(n_needed / (1 + n_draws)):,} combinations together lie at that "
        f"floor; with {n_needed:,} a single one can, which is "
        "the fewest that could give a hunt's answer.",
    ]


def _times(measured: float, enough: float, ours: float) -> tuple[str, str]:
    return f"{measured / ours:.1f}", f"{enough / ours:.0f}"


def _draws_needed(ours: Hunted) -> int:
    fdr = ours.record["settings"]["testing"]["fdr"]
    return math.ceil(max(1, ours.family) / fdr)
