"""A run's folder: written aside and renamed when complete, so that one that exists is whole."""

from __future__ import annotations

import json
import math
import os
import shutil
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from miner.errors import OutputError, explain
from miner.report import render_into

if TYPE_CHECKING:
    from miner.hunting import Hunt

FLOATS = "%.10g"


def check_free(folder: Path, replace: bool) -> None:
    """Refuse early what could not be written at the end.

    Raises
    ------
    OutputError : the folder exists and may not be replaced, or its place cannot be written
    """
    if folder.exists() and not replace:
        raise OutputError(
            explain(
                "output",
                str(folder),
                "not exist yet",
                "a folder that does",
                "Name another folder, or allow replacing this one (--replace).",
            )
        )
    is_other = not folder.is_dir() or (
        any(folder.iterdir()) and not (folder / "run.json").is_file()
    )
    if folder.exists() and is_other:
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
        folder.parent.mkdir(parents=True, exist_ok=True)
        # to make a folder is the only proof that one can be made
        os.rmdir(tempfile.mkdtemp(prefix=".probe-", dir=folder.parent))
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
                "Name a folder elsewhere.",
            )
        )


def write(result: Hunt, folder: Path, replace: bool = False) -> None:
    """Write all files of a hunt's result and put them in place in one step.

    Raises
    ------
    OutputError : the files cannot be written; nothing is left behind
    """
    check_free(folder, replace)
    aside = None
    try:
        aside = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.parent))
        aside.chmod(0o777 & ~_umask())
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
        if folder.exists():
            old = Path(tempfile.mkdtemp(prefix=f".{folder.name}-old-", dir=folder.parent))
            folder.rename(old / folder.name)
            try:
                aside.rename(folder)
            except OSError:
                (old / folder.name).rename(folder)
                raise
            finally:
                shutil.rmtree(old)
        else:
            aside.rename(folder)
    except OSError as error:
        raise OutputError(
            explain(
                "output",
                str(folder),
                "be writable",
                f"the system's error: {error.strerror}",
                "Free some space or name a folder elsewhere.",
            )
        ) from error
    finally:
        if aside is not None:
            shutil.rmtree(aside, ignore_errors=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _write_table(table: pd.DataFrame, path: Path) -> None:
    table.to_csv(path, index=False, float_format=FLOATS, lineterminator="\n")


def _plain(value: Any) -> Any:
    """JSON has no NaN: undefined numbers become null."""
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
