"""A run's folder: written aside and renamed when complete, so that one that exists is whole."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from miner import placing
from miner.errors import OutputError, explain
from miner.report import render_into

if TYPE_CHECKING:
    from miner.hunting import Hunt

FLOATS = "%.10g"
ELSEWHERE = "Name a folder elsewhere."


def check_free(folder: Path, replace: bool) -> None:
    """Refuse early what could not be written at the end.

    A folder that a killed process had moved away is brought back first.

    Raises
    ------
    OutputError : the folder exists and may not be replaced, or its place cannot be written
    """
    try:
        folder = folder.resolve()
        placing.sweep(folder)
        is_there = folder.exists()
        is_run = folder.is_dir() and ((folder / "run.json").is_file() or not any(folder.iterdir()))
    except (OSError, ValueError, RuntimeError) as error:
        found = f"one the system refuses ({getattr(error, 'strerror', None) or error})"
        raise OutputError(
            explain("output", ascii(str(folder)), "be the path of a folder", found, ELSEWHERE)
        ) from error
    if is_there and not replace:
        raise OutputError(
            explain(
                "output",
                str(folder),
                "not exist yet",
                "a folder that does" if folder.is_dir() else "a file that does",
                "Name another folder, or allow replacing this one: --replace, in Python "
                "replace=True."
                if is_run
                else "Name another folder.",
            )
        )
    if is_there and not is_run:
        raise OutputError(
            explain(
                "output",
                str(folder),
                "be the folder of a run to be replaced",
                "something else",
                "Name another folder.",
            )
        )
    try:
        # to make a folder is the only proof that one can be made
        with placing.aside(folder):
            writable = True
    except OSError:
        writable = False
    if not writable:
        raise OutputError(
            explain(
                "output",
                str(folder.parent),
                "be a folder that can be written",
                "one that cannot",
                ELSEWHERE,
            )
        )


def write(result: Hunt, folder: Path, replace: bool = False) -> None:
    """Write all files of a hunt's result and put them in place in one step.

    Raises
    ------
    OutputError : the files cannot be written; nothing is left behind
    """
    check_free(folder, replace)
    folder = folder.resolve()  # where a link leads to, and not the link, is replaced
    try:
        with placing.aside(folder) as aside:
            _write_into(aside, result)
            placing.put_folder(aside, folder)
    except OSError as error:
        raise OutputError(
            explain(
                "output",
                str(folder),
                "be writable",
                f"the system's error: {error.strerror or error}",
                "Free some space or name a folder elsewhere.",
            )
        ) from error


def _write_into(aside: Path, result: Hunt) -> None:
    _write_table(result.candidates, aside / "candidates.csv")
    result.candidates.to_parquet(aside / "candidates.parquet", index=False)
    _write_table(result.rules, aside / "rules.csv")
    _write_table(result.quarters, aside / "quarters.csv")
    _write_table(result.walk_forward, aside / "walk_forward.csv")
    if result.plain_shuffle is not None:
        _write_table(result.plain_shuffle, aside / "plain_shuffle.csv")
    if result.moves is not None:
        _write_table(result.moves, aside / "moves.csv")
    if len(result.set_aside):
        _write_table(result.set_aside, aside / "set_aside.csv")
    text = json.dumps(_plain(result.record), indent=1, ensure_ascii=False, allow_nan=False)
    (aside / "run.json").write_text(text + "\n", encoding="utf-8")
    evidence = json.dumps(_plain(result.evidence), ensure_ascii=False, allow_nan=False)
    (aside / "evidence.json").write_text(evidence + "\n", encoding="utf-8")
    render_into(aside)


def _write_table(table: pd.DataFrame, path: Path) -> None:
    # numbers are spelled out here: the library takes ten times as long over it
    text = {
        name: ["" if math.isnan(value) else FLOATS % value for value in table[name].to_numpy()]
        for name in table.columns
        if table[name].dtype == "float64"
    }
    table.assign(**text).to_csv(path, index=False, lineterminator="\n")


def _plain(value: Any) -> Any:
    """JSON has no NaN: undefined numbers become null."""
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
