"""Formats measurements as Markdown and puts them into named sections of a report."""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path
from statistics import median

import numpy as np

from tests.benchmarks.compare import Compared
from tests.benchmarks.measure import Hunted
from tests.benchmarks.sizes import Size

LIBRARIES = ("numpy", "numba", "pandas", "pyarrow", "mlxtend")
BUSY = 0.3  # cores at work for others, above which times say little


def machine() -> str:
    """The machine and how busy it was, in a line."""
    model = platform.processor() or platform.machine()
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        lines = cpuinfo.read_text(encoding="utf-8").splitlines()
        model = next((s.split(":", 1)[1].strip() for s in lines if "model name" in s), model)
    libraries = ", ".join(f"{name} {version(name)}" for name in LIBRARIES)
    busy = _cores_at_work()
    said = ""
    if busy is not None:
        said = f" Others kept {busy:.1f} cores busy before the start"
        said += ": times are **not to be relied on**." if busy > BUSY else "."
    return (
        f"{os.cpu_count()} cores of {model}; Python {platform.python_version()}, {libraries}.{said}"
    )


def _cores_at_work(watched: float = 1.0) -> float | None:
    """Cores that were not idle while this process slept, None where that cannot be told."""
    stat = Path("/proc/stat")
    if not stat.exists():
        return None

    def ticks() -> np.ndarray:
        return np.array(stat.read_text(encoding="utf-8").splitlines()[0].split()[1:9], dtype=float)

    before = ticks()
    time.sleep(watched)
    spent = ticks() - before
    idle = spent[3] + spent[4]  # idle, and waiting for a disk
    return (os.cpu_count() or 1) * float(1 - idle / spent.sum())


def table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table."""
    return "\n".join(
        "| " + " | ".join(cells) + " |" for cells in (head, ["---"] * len(head), *rows)
    )


def seconds(value: float) -> str:
    """Seconds to two places, or none where they would say nothing."""
    return f"{value:.2f}" if value < 10 else f"{value:.1f}" if value < 100 else f"{value:,.0f}"


def gigabytes(n_bytes: float) -> str:
    """Bytes as GB."""
    return f"{n_bytes / 1e9:.2f}"


def stage_names(runs: Sequence[Sequence[Hunted]]) -> list[str]:
    """Every stage of any run, in the order of the last state's, others after."""
    names: dict[str, None] = {}
    for hunts in reversed(runs):
        names |= dict.fromkeys(hunts[0].seconds)
    return list(names)


def size_words(size: Size, hunted: Hunted) -> str:
    """The size of a study and what was in it."""
    tables = hunted.record["counts"]["tables"]
    return (
        f"{size.words}: {tables['alerts']['used']:,} alerts, {tables['events']['used']:,} events, "
        f"family {hunted.family:,}, {len(hunted.record['rules'])} rules."
    )


def hunts_table(compared: Compared, names: Sequence[str]) -> str:
    """Wall seconds by stage (least, middle, most; middle of each state where there are two)."""
    runs = compared.hunts

    def row(what: str, values: Sequence[Sequence[float]], form=seconds) -> list[str]:
        if len(values) == 1:
            spread = (min(values[0]), median(values[0]), max(values[0]))
            return [what, *(form(value) for value in spread)]
        before, now = (median(v) if v else None for v in values)
        cells = ["-" if value is None else form(value) for value in (before, now)]
        return [what, *cells, f"{before / now:.2f}" if before and now else "-"]

    rows = [
        row(name, [[h.seconds[name] for h in hunts if name in h.seconds] for hunts in runs])
        for name in stage_names(runs)
    ]
    rows.append(row("**whole run**", [[h.use.wall for h in hunts] for hunts in runs]))
    rows.append(row("processor time", [[h.use.cpu for h in hunts] for hunts in runs]))
    rows.append(row("peak memory, GB", [[h.use.peak for h in hunts] for hunts in runs], gigabytes))
    if len(runs) == 1:
        return table(["seconds", "least", "middle", "most"], rows)
    return table(["seconds, middle", *names, "times as fast"], rows)


def put_section(report: Path, name: str, text: str) -> None:
    """Write ``text`` between the marks of section ``name``; new sections go to the end."""
    begin, end = f"<!-- benchmark: {name} -->", f"<!-- end of benchmark: {name} -->"
    block = f"{begin}\n\n{text.strip()}\n\n{end}"
    before = report.read_text(encoding="utf-8") if report.exists() else ""
    if begin in before:
        head, rest = before.split(begin, 1)
        after = head + block + rest.split(end, 1)[1]
    else:
        after = f"{before.rstrip()}\n\n{block}\n".lstrip()
    report.parent.mkdir(parents=True, exist_ok=True)
    report.write_text(after, encoding="utf-8")
