"""A small study, runs of the program on it, and what must hold of the folder around it."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from pathlib import Path

from tests.worlds import Plant, make_world, write_world

FILES = {
    *("candidates.csv", "candidates.parquet", "candidates.xlsx", "evidence.json", "quarters.csv"),
    *("report.html", "rules.csv", "run.json", "walk_forward.csv"),
}
STEADY = ("candidates.csv", "rules.csv", "quarters.csv", "walk_forward.csv", "candidates.xlsx")
NOTE = "note.txt"


def small_study(folder: Path) -> Path:
    """Tables and settings of a study that a hunt is through with in a second."""
    world = make_world(
        1, n_entities=40, n_sessions=300, n_types=5, alerts_per_type=250,
        planted=(Plant((0, 1), 0.7, 40),),
    )  # fmt: skip
    testing = {"permutations": 100, "placebo": 2}
    return write_world(world, folder, settings={"testing": testing, "mining": {"min_triggers": 10}})


def start(*args: object, **options: object) -> subprocess.Popen[str]:
    """Start the program as from a shell; its output is piped."""
    command = [sys.executable, "-m", "miner", *map(str, args)]
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    return subprocess.Popen(command, **(pipes | options))  # type: ignore[call-overload]


def run(*args: object, **options: object) -> subprocess.CompletedProcess[str]:
    """Run the program to its end."""
    process = start(*args, **options)
    out, err = process.communicate()
    return subprocess.CompletedProcess(process.args, process.returncode, out, err)


def digests(folder: Path) -> dict[str, str]:
    """SHA-256 of every file of a folder, by name."""
    return {path.name: hashlib.sha256(path.read_bytes()).hexdigest() for path in folder.iterdir()}


def fault_of(folder: Path, whole: dict[str, str]) -> str | None:
    """What is wrong with a run's folder beside a whole run's digests; None: it is whole."""
    found = digests(folder)
    if set(found) != FILES:
        return f"files missing or too many: {sorted(set(found) ^ FILES)}"
    other = [name for name in STEADY if found[name] != whole[name]]
    if other:
        return f"other bytes in {', '.join(other)}"
    for name in ("run.json", "evidence.json"):
        try:
            json.loads((folder / name).read_text(encoding="utf-8"))
        except ValueError:
            return f"{name} is cut short"
    if not (folder / "report.html").read_text(encoding="utf-8").rstrip().endswith("</html>"):
        return "report.html is cut short"
    return None


def strangers(folder: Path, known: set[str]) -> list[str]:
    """Names in a folder that are neither known nor hidden left-overs of a killed process."""
    names = {path.name for path in folder.iterdir()} - known
    return sorted(name for name in names if ".unfinished-" not in name)


def left_over(folder: Path) -> list[str]:
    """Names of what killed processes left in a folder."""
    return sorted(path.name for path in folder.iterdir() if path.name.startswith("."))
