"""The physical limit: bytes that a hunt has to move, at the speed at which this machine copies."""

from __future__ import annotations

import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd

from tests.benchmarks.measure import REST, Hunted, hunt
from tests.benchmarks.tables import seconds, table

COPY_BYTES = 1 << 30
WORD = 8
TRIGGER = 8  # entity and session, four bytes each


def copy_speed(n_threads: int, n_bytes: int = COPY_BYTES, repeats: int = 5) -> float:
    """Bytes a second that numpy copies, read and written both counted: the best of some tries."""
    source = np.ones(n_bytes, dtype=np.uint8)
    target = np.zeros(n_bytes, dtype=np.uint8)
    parts = list(
        zip(np.array_split(target, n_threads), np.array_split(source, n_threads), strict=True)
    )
    best = 0.0
    with ThreadPoolExecutor(n_threads) as pool:
        for _ in range(repeats):
            start = time.perf_counter()
            list(pool.map(lambda part: np.copyto(*part), parts))
            best = max(best, 2 * n_bytes / (time.perf_counter() - start))
    return best


def bytes_to_move(hunted: Hunted, study: Path) -> dict[str, int]:
    """Bytes that no hunt of this kind can do without, in its packed form.

    Everything is counted once where it is made and once where it is used; what stays in a
    processor's cache in between moves less, so that this is a limit for a program that goes stage
    by stage. Own timing, intervals, walk-forward and report come on top and are left out.
    """
    record = hunted.record
    counts = record["counts"]
    n_words = (record["calendar"]["sessions"] + 63) // 64
    packed = counts["entities"] * counts["alert_types"] * n_words * WORD
    n_used = sum(counts["tables"][name]["used"] for name in ("alerts", "events"))
    candidates = pd.read_csv(hunted.folder / "candidates.csv", usecols=["triggers"])
    n_triggers = int(candidates["triggers"].sum())
    n_worlds = record["settings"]["testing"]["permutations"] + record["placebo"]["worlds"]
    return {
        "tables on disk, read": sum(p.stat().st_size for p in study.parent.glob("*.parquet")),
        "one key a row, written and read": 2 * WORD * n_used,
        "alerts as bits, written and read": 2 * packed,
        "triggers, written and read": 2 * TRIGGER * n_triggers,
        "hits, one byte a trigger, written and read": 2 * n_triggers,
        "hits in drawn worlds, one bit a trigger and world, read": n_triggers * n_worlds // 8,
    }


def report(study: Path, folder: Path) -> str:
    """Text on the limit of one study and how far a hunt on it is from there."""
    hunted = hunt(study, folder / "limit")
    speeds = {n: copy_speed(n) for n in (1, 2)}
    best = max(speeds.values())
    moved = bytes_to_move(hunted, study)
    total = sum(moved.values())
    rows = [[what, f"{n / 1e6:,.0f}", f"{n / best:.3f}"] for what, n in moved.items()]
    rows.append(["**all**", f"{total / 1e6:,.0f}", f"{total / best:.3f}"])
    stages = hunted.use.wall - hunted.seconds[REST]
    copying = " and ".join(
        f"{speed / 1e9:.1f} GB/s on {'one thread' if n == 1 else f'{n} threads'}"
        for n, speed in speeds.items()
    )
    return "\n\n".join(
        [
            f"Copying 1 GiB in memory, bytes read and written both counted: {copying}.",
            table(["what has to move", "MB", f"seconds at {best / 1e9:.1f} GB/s"], rows),
            f"The hunt took {seconds(hunted.use.wall)} s, {seconds(stages)} s of them in its "
            f"stages: {stages * best / total:.0f} times the limit "
            f"({hunted.use.wall * best / total:.0f} times with start, imports and writing).",
        ]
    )
