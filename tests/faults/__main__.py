"""``python -m tests.faults --kills 200 --stops 100``: ends hunts at random moments and tells what
was left each time, and how long it took to stop."""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

from tests.faults.kills import Range, kill_many
from tests.faults.stops import stop_many


def main() -> int:
    """End hunts as often as asked, print tables, and return 1 if anything was harmed."""
    parser = argparse.ArgumentParser(prog="python -m tests.faults", description=__doc__)
    parser.add_argument("--kills", type=int, default=0)
    parser.add_argument("--stops", type=int, default=0)
    parser.add_argument("--seed", type=int, default=0)
    asked = parser.parse_args()
    faults: list[str] = []
    if asked.kills:
        with tempfile.TemporaryDirectory() as folder:
            tally = kill_many(Path(folder), asked.kills, asked.seed)
        for title, counts in (("killed after", tally.stages), ("found", tally.outcomes)):
            print(f"{title}:")
            for name, count in counts.most_common():
                print(f"  {count:4d}  {name}")
        print(f"{tally.kills} kills, {len(tally.faults)} faults")
        faults += tally.faults
    if asked.stops:
        with tempfile.TemporaryDirectory() as folder:
            stops = stop_many(Range(Path(folder)), asked.stops, asked.seed)
        slow = sorted(stops.seconds)
        print(
            f"{len(slow)} stopped, {stops.finished} had finished, {len(stops.faults)} faults; "
            f"seconds to end: median {slow[len(slow) // 2][0]:.2f}, "
            f"longest {slow[-1][0]:.2f} ({slow[-1][1]})"
        )
        faults += stops.faults
    for fault in faults:
        print(f"  {fault}")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
