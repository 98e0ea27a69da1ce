"""``python -m tests.hard_inputs [--report reports/hard-inputs.md]``: writes or prints the page."""

from __future__ import annotations

import argparse
from pathlib import Path

from .page import page
from .table import CASES


def main() -> None:
    """Write the page of all cases."""
    parser = argparse.ArgumentParser(prog="python -m tests.hard_inputs", description=__doc__)
    parser.add_argument("--report", type=Path, metavar="FILE", help="default: standard output")
    asked = parser.parse_args()
    if asked.report is None:
        print(page(CASES), end="")
    else:
        asked.report.write_text(page(CASES), encoding="utf-8")


if __name__ == "__main__":
    main()
