"""What the two studies on open data share: finding the data, running a hunt, reading a run.

Hands on `data_file`, `stamps_of`, `new_folder`, `run_study`, `raw_ratio`, `print_table` and `say`.
The data files are opened where their packages were installed; the packages themselves are not
imported (two of them pull in much that is not needed here).
"""

from __future__ import annotations

import sys
import textwrap
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pandas as pd

from miner import hunt
from miner.summary import hunt_lines


def data_file(package: str, inside: str) -> Path:
    """Path of a data file that an installed package carries.

    Parameters
    ----------
    package
        Import name of the package, such as "skfolio".
    inside
        Path of the file inside the package's folder.

    Raises
    ------
    SystemExit
        The package or the file in it is missing; the message says what to install.
    """
    spec = find_spec(package)
    folders = list(spec.submodule_search_locations or []) if spec is not None else []
    for folder in folders:
        path = Path(folder) / inside
        if path.is_file():
            return path
    raise SystemExit(
        f"`{package}`: `{inside}` must be an installed data file; got none. "
        "Install the data packages: pip install 'combination-signal-miner[examples]'."
    )


def stamps_of(is_on_te: pd.DataFrame, kind: str) -> pd.DataFrame:
    """Rows (entity, time, type) of the true cells of a table of dates x entities."""
    t_idx, e_idx = np.nonzero(is_on_te.to_numpy(dtype=bool))
    return pd.DataFrame(
        {
            "entity": is_on_te.columns.to_numpy()[e_idx],
            "time": pd.DatetimeIndex(is_on_te.index).strftime("%Y-%m-%d").to_numpy()[t_idx],
            "type": kind,
        }
    )


def new_folder(default: str) -> Path:
    """The folder named on the command line (or `default`), created; it must not exist yet.

    Raises
    ------
    SystemExit
        The folder exists already.
    """
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else default)
    if folder.exists():
        raise SystemExit(
            f"`{folder}`: the folder must not exist yet; got one that does. Name another one."
        )
    folder.mkdir(parents=True)
    return folder


def run_study(study: Path) -> pd.DataFrame:
    """Do what `miner hunt STUDY` does, summary included; the run's candidates, one a row."""
    print(f"\n--- miner hunt {study}", flush=True)
    result = hunt(study, output=study.with_name(f"{study.stem}-run"))
    for line in hunt_lines(result):
        print(line)
    return result.candidates


def raw_ratio(candidates: pd.DataFrame) -> pd.Series:
    """Precision over base rate: how much more often than usual, with nothing held fixed."""
    return candidates["precision"] / candidates["base_rate"]


def print_table(table: pd.DataFrame, title: str) -> None:
    """Print a small table under a title."""
    print(f"\n{title}")
    print(table.to_string(index=False, float_format=lambda x: f"{x:.3g}", na_rep="-"))


def say(text: str) -> None:
    """Print a paragraph."""
    print("\n" + textwrap.fill(text, 100))
