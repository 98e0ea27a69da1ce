"""Writes reports/calibration.md and its figures from the result lines."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

from tests.calibration import lines, tables_of_hunts, tables_of_tests
from tests.calibration import summarise as s
from tests.calibration.in_short import in_short
from tests.calibration.prose import PROSE


def write_report(folder: Path, reports: Path, versions: Mapping[str, str]) -> None:
    """Read the lines of every part, write the report and the figures."""
    (reports / "figures").mkdir(parents=True, exist_ok=True)
    parts = {path.stem: lines.read(path) for path in sorted(folder.glob("*.jsonl"))}
    worlds = {part: s.by_world(rows) for part, rows in parts.items() if part not in NO_WORLDS}
    sections: list[tuple[str, str, Callable[[], str]]] = [
        ("level", "level", lambda: tables_of_tests.level(worlds["level"], reports)),
        ("level", "forms", lambda: tables_of_tests.forms(worlds["level"])),
        ("laws", "laws", lambda: tables_of_tests.laws(parts["laws"])),
        ("level", "remedies", lambda: tables_of_tests.remedies(worlds["level"])),
        ("power", "power", lambda: tables_of_tests.power(worlds["power"])),
        ("level", "warnings", lambda: tables_of_tests.warnings(worlds["level"])),
        ("nothing", "nothing", lambda: tables_of_hunts.nothing(worlds["nothing"])),
        ("planted", "planted", lambda: tables_of_hunts.planted(worlds["planted"], reports)),
        ("planted", "adjustments", lambda: tables_of_hunts.adjustments(worlds["planted"])),
        ("joint", "joint", lambda: tables_of_hunts.joint(worlds["joint"])),
        ("intervals", "intervals", lambda: tables_of_hunts.intervals(parts["intervals"])),
        ("placebo", "placebo", lambda: tables_of_hunts.placebo(parts["placebo"])),
        ("practice", "practice", lambda: tables_of_hunts.practice(worlds["practice"])),
    ]
    text = [PROSE["head"], PROSE["short"].format(table=in_short(parts, worlds))]
    for part, name, make in sections:
        if parts.get(part):
            text.append(PROSE[name].format(table=make()))
    seconds = sum(row["seconds"] for rows in parts.values() for row in rows)
    runs = sum(len(rows) for rows in parts.values())
    named = ", ".join(f"{name} {number}" for name, number in versions.items())
    text.append(PROSE["foot"].format(runs=runs, minutes=round(seconds / 60), versions=named))
    (reports / "calibration.md").write_text("\n\n".join(text) + "\n", encoding="utf-8")


NO_WORLDS = ("laws", "intervals", "review")
