"""``python -m tests.fuzz --minutes 10``: all fuzzing, in turns until time is up.

Half of the time goes to studies through the commands, a quarter to the readers, a quarter to the
comparison with the twin. A failure is printed with what brings it back, and ends the run with 1.
"""

from __future__ import annotations

import argparse
import time
from collections import Counter

from tests.fuzz import readers, running, studies, twin

EXAMPLES = 100  # of a turn


def main() -> None:
    """Run from the command line."""
    parser = argparse.ArgumentParser(prog="python -m tests.fuzz", description=__doc__)
    parser.add_argument("--minutes", type=float, default=10)
    parser.add_argument("--number", type=int, default=1, help="where the draws begin")
    asked = parser.parse_args()
    quarter = 15 * asked.minutes

    print("studies through the commands", flush=True)
    running.warm_up()
    seen: Counter[str] = Counter()
    number, stop = asked.number, time.monotonic() + 2 * quarter
    while time.monotonic() < stop:
        studies.trial(EXAMPLES, number, seen)()
        number += 1
    print(dict(seen), flush=True)

    print("readers", flush=True)
    readers.run(quarter, asked.number)

    print("twin", flush=True)
    total: Counter[str] = Counter()
    seed, stop = 10_000 * asked.number, time.monotonic() + quarter
    while time.monotonic() < stop:
        compared, wrong = twin.run(range(seed, seed + 10))
        if wrong:
            raise SystemExit(1)
        total += compared
        seed += 10
    print(dict(total), flush=True)


if __name__ == "__main__":
    main()
