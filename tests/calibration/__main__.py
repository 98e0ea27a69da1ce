"""``python -m tests.calibration --form short|full [--part NAME ...] [--report FOLDER]``.

Runs the study's parts and keeps one json line a run; a run that is there is not made again.
"""

from __future__ import annotations

import argparse
from pathlib import Path

from tests.calibration import lines
from tests.calibration.parts import FORMS, PARTS


def main() -> None:
    """Run the parts asked for, then write the report if asked."""
    parser = argparse.ArgumentParser(prog="python -m tests.calibration", description=__doc__)
    parser.add_argument("--form", choices=FORMS, default="short")
    parser.add_argument("--part", choices=list(PARTS), nargs="*", help="default: every part")
    parser.add_argument("--lines", type=Path, default=Path("build/calibration"))
    parser.add_argument("--report", type=Path, metavar="FOLDER", help="write the pages there")
    parser.add_argument("--minutes", type=float, default=float("inf"), help="per part, at most")
    asked = parser.parse_args()
    folder = asked.lines / asked.form
    for part in asked.part if asked.part is not None else PARTS:
        print(part, flush=True)
        for n, row in enumerate(
            lines.run(
                folder / f"{part}.jsonl", PARTS[part](asked.form == "full"), 60 * asked.minutes
            ),
            start=1,
        ):
            if n % 100 == 0:
                print(f"  {n} runs, the last {row['key']}", flush=True)
    if asked.report is not None:
        from tests.calibration.report import write_report
        from tests.calibration.tables_of_review import write_review

        if (folder / "review.jsonl").exists():
            write_review(folder, asked.report)
        if asked.part != ["review"]:
            write_report(folder, asked.report, lines.versions())


if __name__ == "__main__":
    main()
