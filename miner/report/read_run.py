"""Reads a run's folder: all the report knows."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from miner.columns import CANDIDATE_COLUMNS
from miner.errors import OutputError, explain

Row = dict[str, Any]

FORMAT = 1
UNDEFINED = frozenset(("", "nan", "inf", "-inf"))
MOST_ROWS = 1_500
QUARTERS = {
    "rule_order": "integer",
    "triggers": "integer",
    "hits": "integer",
    "precision": "number",
    "expected_hits": "number",
}


@dataclass(frozen=True)
class Run:
    """A run as its files tell it; numbers that are undefined are None."""

    record: dict[str, Any]
    evidence: dict[str, Any]
    candidates: list[Row]
    rules: list[Row]
    quarters: list[Row]

    @cached_property
    def foremost(self) -> list[Row]:
        """The candidates that people are shown: those with the smallest p, in that order."""
        rows = sorted(
            self.candidates,
            key=lambda c: (c["p_value"], c["target"], c["stratum"], c["combination"]),
        )
        return rows[:MOST_ROWS]

    @cached_property
    def rule_of(self) -> dict[str, int]:
        """Numbers of the rules by "combination [target, stratum]"."""
        return {
            f"{rule['combination']} [{rule['target']}, {rule['stratum']}]": rule["rule_order"]
            for rule in self.rules
        }


def read_run(folder: Path) -> Run:
    """Read the files of a run.

    Raises
    ------
    OutputError : the folder is no run, or one of its files is missing or of another version
    """
    try:
        record = json.loads((folder / "run.json").read_text(encoding="utf-8"))
        evidence = json.loads((folder / "evidence.json").read_text(encoding="utf-8"))
        run = Run(
            record,
            evidence,
            read_table(folder / "candidates.csv", CANDIDATE_COLUMNS),
            read_table(folder / "rules.csv", CANDIDATE_COLUMNS),
            read_table(folder / "quarters.csv", QUARTERS),
        )
    except FileNotFoundError as error:
        raise _no_run(folder, f"no {Path(error.filename).name} in it") from error
    except (OSError, ValueError) as error:
        raise _no_run(folder, f"one that cannot be read ({error})") from error
    if evidence.get("format") != FORMAT:
        raise _no_run(folder, f"evidence.json of format {evidence.get('format')}")
    return run


def _no_run(folder: Path, found: str) -> OutputError:
    return OutputError(
        explain(
            "report",
            str(folder),
            "be the folder of a whole run of this version",
            found,
            "Name the folder a hunt has written, or hunt again.",
        )
    )


def read_table(path: Path, kinds: dict[str, str]) -> list[Row]:
    """Rows of a csv file, columns of kind "integer" and "number" as such, others as text."""
    with path.open(encoding="utf-8", newline="") as lines:
        reader = csv.reader(lines)
        names = next(reader, [])
        columns = [
            _values(texts, kinds.get(name, "text"))
            for name, texts in zip(names, zip(*reader, strict=True), strict=False)
        ]
    return [dict(zip(names, row, strict=True)) for row in zip(*columns, strict=True)]


def _values(texts: Iterable[str], kind: str) -> list[Any]:
    if kind == "text":
        return list(texts)
    number = int if kind == "integer" else float
    return [None if text in UNDEFINED else number(text) for text in texts]
