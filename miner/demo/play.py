"""Writes the demo, hunts and reviews in it, and sets what was planted beside what was found."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from miner.assemble import assemble
from miner.columns import EXPLAINED, JOINER, POOLED
from miner.demo.quarters import Year, play_quarters, year_lines
from miner.demo.scenario import DEFAULT_SEED, Truth, write_demo
from miner.errors import OutputError, explain
from miner.hunting import Hunt, hunt, split_sessions
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.settings import load_study
from miner.summary import WIDTH, hunt_lines, p_text
from miner.time_split import discovery_slice
from miner.triggers import find_triggers
from miner.units import make_case, make_unit
from miner.workers import Progress, n_default, silent

SHUFFLES = 99


@dataclass(frozen=True)
class Played:
    """A demo that was written and hunted in, the decoy's two p-values, and the four quarters that
    came after, None where they were left out."""

    truth: Truth
    result: Hunt
    decoy_shuffle: float
    decoy_margins: float
    year: Year | None = None


def play(
    folder: Path,
    *,
    seed: int | None = None,
    with_quarters: bool = True,
    n_workers: int | None = None,
    progress: Progress = silent,
) -> Played:
    """Write the scenario into ``folder``, hunt in it, put the decoy before the plain shuffle, and
    review the rules at the end of each of the four quarters that follow.

    Raises
    ------
    OutputError : the folder holds something else
    """
    is_other = not folder.is_dir() or (
        any(folder.iterdir()) and not (folder / "truth.json").is_file()
    )
    if folder.exists() and is_other:
        raise OutputError(
            explain(
                "demo",
                str(folder),
                "be a new or empty folder, or an earlier demo's",
                "something else",
                "Name another folder.",
            )
        )
    n_workers = n_workers or n_default()
    progress("inventing a market")
    seed = DEFAULT_SEED if seed is None else seed
    truth = write_demo(folder, seed)
    result = hunt(truth.study, folder / "run", n_workers=n_workers, replace=True, progress=progress)
    progress("shuffling the decoy")
    decoy = result.candidates.query("stratum == @POOLED and combination == @truth.decoy")
    margins = float(decoy["p_value"].iloc[0]) if len(decoy) else 1.0
    shuffled = _shuffled_p(truth, n_workers)
    year = None
    if with_quarters:
        year = play_quarters(folder, seed, n_workers=n_workers, progress=progress)
    return Played(truth, result, shuffled, margins, year)


def _shuffled_p(truth: Truth, n_workers: int) -> float:
    """The decoy's p-value under the plain shuffle of the alerts."""
    study = load_study(truth.study)
    inputs = assemble(study)
    early = discovery_slice(inputs.panel, split_sessions(inputs)[0])
    names = inputs.panel.type_names
    combo = tuple(sorted(names.index(name) for name in truth.decoy.split(JOINER)))
    windows = study.windows.model_dump()
    table = find_triggers(early, [combo], None, n_workers=n_workers, **windows)
    unit = make_unit(early, POOLED, None, table, **windows)
    case = make_case(truth.target, unit, early.panel.events[truth.target])
    null = PlainShuffleNull(SHUFFLES, study.testing.seed)
    return float(null.judge(case, np.array([0]), n_workers).p_value[0])


def demo_lines(played: Played) -> Iterator[str]:
    """The hunt's screen, then planted against found."""
    yield from hunt_lines(played.result)
    yield ""
    yield f"Planted (truth.json in {played.truth.study.parent}) and found:"
    rows = [
        (
            plant.combination,
            plant.kind,
            plant.stratum,
            _found(played.result, plant.combination, plant.stratum),
        )
        for plant in played.truth.planted
    ]
    yield from _left_aligned(("planted", "kind", "stratum", "found"), rows)
    planted = {plant.combination for plant in played.truth.planted}
    extra = [rule for rule in played.result.rules["combination"] if rule not in planted]
    yield f"Rules that were not planted: {', '.join(extra) or 'none'}."
    yield textwrap.fill(
        f"Decoy {played.truth.decoy}, good only through shared shocks: the plain shuffle of alerts "
        f"{'falls for it' if played.decoy_shuffle <= 0.05 else 'does not fall for it'} "
        f"(p {p_text(played.decoy_shuffle)}, the least {SHUFFLES} draws can give being "
        f"{1 / (1 + SHUFFLES):.2g}); the margins null "
        f"{'falls for it' if played.decoy_margins <= 0.05 else 'does not'} "
        f"(p {p_text(played.decoy_margins)}).",
        WIDTH,
    )
    if played.year is not None:
        yield ""
        yield from year_lines(played.year)


def _found(result: Hunt, combination: str, stratum: str) -> str:
    row = result.candidates.query("combination == @combination and stratum == @stratum")
    if row.empty:
        return "not proposed"
    verdict = row["verdict"].iloc[0]
    if verdict == EXPLAINED:
        return f"explained by {row['explained_by'].iloc[0]}"
    order = row["rule_order"].iloc[0]
    return f"rule {order}, {verdict}" if row["rule_order"].notna().iloc[0] else verdict


def _left_aligned(header: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> Iterator[str]:
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    for row in (header, *rows):
        yield "  " + "  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=True)).rstrip()
