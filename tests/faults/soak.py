"""``python -m tests.faults.soak --hunts 500``: many hunts in one process; what grows?"""

from __future__ import annotations

import argparse
import gc
import os
import sys
import tempfile
import threading
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from miner import hunt
from tests.faults.studies import small_study

WARM_UP = 5
MOST_GROWTH = 100_000  # bytes a hunt: a tenth of what one leak of a result would be


@dataclass(frozen=True)
class Soak:
    """After each hunt past the warm-up: resident bytes, open files, threads; all int64."""

    resident: np.ndarray
    files: np.ndarray
    threads: np.ndarray

    @property
    def growth(self) -> float:
        """Bytes a hunt: the median slope between the hunts' earlier and later half (Theil-Sen)."""
        n = self.resident.size // 2
        return float(np.median((self.resident[-n:] - self.resident[:n]) / (self.resident.size - n)))


def resident() -> int:
    """Bytes of memory this process has now."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")


def soak(folder: Path, n_hunts: int) -> Soak:
    """Hunt ``n_hunts`` times after a warm-up, writing over the same run."""
    study = small_study(folder)
    rows = []
    for i in range(WARM_UP + n_hunts):
        hunt(study, folder / "run", replace=True, n_workers=2)
        gc.collect()
        if i >= WARM_UP:
            n_files = len(os.listdir("/proc/self/fd"))
            rows.append((resident(), n_files, threading.active_count()))
    return Soak(*np.array(rows, dtype=np.int64).T)


def main() -> int:
    """Soak, print what grew, and return 1 if anything did."""
    parser = argparse.ArgumentParser(prog="python -m tests.faults.soak", description=__doc__)
    parser.add_argument("--hunts", type=int, default=500)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        found = soak(Path(folder), asked.hunts)
    for name, values in (("memory (MB)", found.resident // 1_000_000), ("open files", found.files),
                         ("threads", found.threads)):  # fmt: skip
        tenths = [int(part[0]) for part in np.array_split(values, min(10, values.size))]
        print(f"{name:12}  {' '.join(map(str, tenths))}  last {values[-1]}")
    print(f"growth {found.growth / 1000:.1f} kB a hunt over {asked.hunts} hunts")
    return 1 if has_grown(found) else 0


def has_grown(found: Soak) -> bool:
    """Whether memory, open files or threads go on growing."""
    return bool(
        found.growth > MOST_GROWTH
        or found.files[-1] > found.files[0]
        or found.threads[-1] > found.threads[0]
    )


if __name__ == "__main__":
    sys.exit(main())
