"""Measure whole hunts, and what surrounds them; without further words, hunts on the preset's world.

Every hunt is a process of its own. Worlds are kept in a folder under the system's place for
temporary files.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path

from tests.benchmarks import against_stack, growth, limit, miners
from tests.benchmarks.compare import checked_out, compare
from tests.benchmarks.measure import HERE, BenchmarkError, hunt
from tests.benchmarks.sizes import PRESETS, REFERENCE, study_of
from tests.benchmarks.tables import hunts_table, machine, put_section, size_words

Section = tuple[str, str, bool]


def main(words: list[str] | None = None) -> int:
    """Run what is asked for; 0 done, 1 void: an answer differs, 2 it could not be measured."""
    asked = _parser().parse_args(words)
    work: Callable[[argparse.Namespace, Path], Section] = _hunts
    for name, other in (
        ("growth", _growth),
        ("stack", _stack),
        ("miners", _miners),
        ("limit", _limit),
    ):
        if getattr(asked, name):
            work = other
    try:
        with tempfile.TemporaryDirectory(prefix="miner-runs-") as folder:
            name, text, is_void = work(asked, Path(folder))
    except BenchmarkError as error:
        print(error, file=sys.stderr)
        return 2
    print(text)
    if asked.report is not None:
        put_section(asked.report, name, text)
    return 1 if is_void else 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks", description=__doc__)
    add = parser.add_argument
    add("--preset", choices=list(PRESETS), default="quick", help="size of the world")
    add("--planted", type=int, metavar="N", help="plant so many combinations (0 to 8)")
    add("--repeats", type=int, help="measurements of each (hunts, miners: 3; growth: 1)")
    add("--against", metavar="REVISION", help="hunt in turn with this revision, same answers asked")
    add("--no-warm-up", action="store_true", help="leave out the uncounted first hunt")
    add("--report", type=Path, metavar="FILE", help="put the tables into sections of this file")
    add("--scale", type=float, help="growth: times a quarter of the reference; stack: its share")
    add("--seconds", type=float, default=1200.0, help="most that one process may take")
    kinds = parser.add_mutually_exclusive_group()
    kinds.add_argument("--growth", action="store_true", help="time and memory against each count")
    kinds.add_argument("--stack", action="store_true", help="a hunt beside the usual libraries")
    kinds.add_argument("--miners", action="store_true", help="itemsets by several libraries")
    kinds.add_argument("--limit", action="store_true", help="bytes to move against copying")
    add("--only", nargs="*", choices=list(growth.DIMENSIONS), help="growth: of these counts")
    add("--draws", type=int, default=2000, help="stack: its number of draws")
    add("--lines", type=Path, default=Path("build/benchmarks"), help="growth: what is kept")
    return parser


def _hunts(asked: argparse.Namespace, folder: Path) -> Section:
    """Hunts of this state of the program, or in turn with another's."""
    size, where, repeats = PRESETS[asked.preset], machine(), asked.repeats or 3
    if asked.planted is not None:
        size = replace(size, n_planted=asked.planted)
    with ExitStack() as stack:
        names, checkouts = ["here"], [HERE]
        if asked.against is not None:
            name, checkout = stack.enter_context(checked_out(asked.against))
            names, checkouts = [name, "here"], [checkout, HERE]
        warm_up = None if asked.no_warm_up else study_of(PRESETS["quick"])
        compared = compare(study_of(size), checkouts, folder, repeats=repeats, warm_up=warm_up)
        hunted = compared.hunts[-1][0]
        turns = f", {names[0]} and here in turn" if asked.against else ""
        parts = [
            f"### Whole hunts, {asked.preset}{turns}",
            size_words(size, hunted),
            f"{repeats} runs of each, fresh processes, compiled kernels kept; {where}",
            compared.void or hunts_table(compared, names),
        ]
        if asked.against and not compared.void:
            parts.append("The answers are the same.")
        if compared.new_columns:
            parts.append(f"Columns of one state only: {', '.join(compared.new_columns)}.")
    section = f"hunts, {asked.preset}" + (", against" if asked.against else "")
    return section, "\n\n".join(parts), compared.void is not None


def _growth(asked: argparse.Namespace, folder: Path) -> Section:
    """Growth with each count; the plot goes beside the report."""
    scale, repeats, where = asked.scale or 1.0, asked.repeats or 1, machine()
    hunt(study_of(PRESETS["quick"]), folder / "warm-up")
    points: dict[str, list[growth.Point]] = {}
    texts = []
    for name in asked.only or growth.DIMENSIONS:
        mine, notes = [], []
        for found in growth.measure(
            name,
            asked.lines / "growth.jsonl",
            scale=scale,
            repeats=repeats,
            limit=asked.seconds,
            folder=folder,
        ):
            if isinstance(found, str):
                notes.append(found)
                continue
            mine.append(found)
            whole = found.seconds[growth.WHOLE]
            print(f"{name} {found.count:,.0f}: {whole:.1f} s", file=sys.stderr, flush=True)
        if mine:
            points[name] = mine
            texts.append(growth.text(name, mine, notes))
        else:
            texts.append(f"**{name}**: {'; '.join(notes)}")
    head = [
        "### Growth",
        f"Each count doubled four times (max_size from 1 to 5), the others held at: "
        f"{growth.held(scale).words}. Seconds of wall time, the best of {repeats}; {where} A power "
        "of 1 is growth in proportion; powers with types and max_size are of the number of "
        "combinations that there are.",
    ]
    if asked.report is not None and points:
        from tests.benchmarks.growth_plot import plot

        plot(points, asked.report.parent / "speed" / "growth.svg")
        head.append("![Time and peak memory against each count](speed/growth.svg)")
    return "growth", "\n\n".join([*head, *texts]), False


def _stack(asked: argparse.Namespace, folder: Path) -> Section:
    """A hunt beside the plain stack, at a tenth of the reference by default."""
    size = replace(REFERENCE.times(asked.scale or 0.1), n_planted=asked.planted or 0)
    where = machine()
    hunt(study_of(PRESETS["quick"]), folder / "warm-up")
    text, is_void = against_stack.report(study_of(size), folder, asked.draws, asked.seconds)
    parts = ["### Against pandas, mlxtend, numpy and statsmodels", f"{size.words}. {where}", text]
    return "plain stack", "\n\n".join(parts), is_void


def _miners(asked: argparse.Namespace, folder: Path) -> Section:
    """Itemset miners on the preset's windows and on a dense and a sparse table."""
    where, parts, is_void = machine(), [], False
    for make in (
        lambda: miners.window_table(study_of(PRESETS[asked.preset])),
        miners.dense_table,
        miners.sparse_table,
    ):
        text, differs = miners.report(
            make(), folder, repeats=asked.repeats or 3, limit=asked.seconds
        )
        parts.append(text)
        is_void |= differs
    head = ["### Itemset miners", f"Each in a process of its own. {where}"]
    return f"itemset miners, {asked.preset}", "\n\n".join([*head, *parts]), is_void


def _limit(asked: argparse.Namespace, folder: Path) -> Section:
    """Bytes to move against copying, for the preset's world."""
    size, where = PRESETS[asked.preset], machine()
    hunt(study_of(PRESETS["quick"]), folder / "warm-up")
    text = limit.report(study_of(size), folder)
    parts = [f"### Physical limit, {asked.preset}", f"{size.words}. {where}", text]
    return f"limit, {asked.preset}", "\n\n".join(parts), False


if __name__ == "__main__":
    sys.exit(main())
