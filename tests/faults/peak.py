"""A hunt in a process of its own: what was foreseen of its memory, and what it took.

``python -m tests.faults.peak STUDY`` prints megabytes: foreseen before the search, and the peak.
"""

from __future__ import annotations

import json
import resource
import sys

from miner import hunt, memory_estimate


def main(study: str) -> None:
    """Hunt, and print the largest figure foreseen at any of the checks beside the peak."""
    foreseen = []

    def note(need: memory_estimate.Need) -> None:
        foreseen.append((memory_estimate._resident() + need.total, need.largest))

    memory_estimate.refuse = note
    hunt(study, n_workers=2)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    size, grows_with = max(foreseen)
    print(
        json.dumps(
            {"foreseen": round(size / 1e6), "peak": round(peak / 1e6), "grows_with": grows_with}
        )
    )


if __name__ == "__main__":
    main(sys.argv[1])
