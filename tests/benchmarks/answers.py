"""Whether two runs gave the same answer: ``rules.csv`` and ``candidates.csv``, cell by cell."""

from __future__ import annotations

import math
from pathlib import Path

import pandas as pd

TABLES = ("rules.csv", "candidates.csv")
NEEDED = ("target", "stratum", "combination", "triggers", "hits", "p_value", "verdict")
RELATIVE = 1e-9
ROUNDING = 1e-12  # what sums in another order may do to a number near 0, p-values aside


def differences(first: Path, second: Path) -> list[str]:
    """How the tables of two run folders differ, a line each; empty if they do not.

    Numbers are the same within 1e-9 of each other. A column that only one side has is no answer
    changed, unless it is one that no table can do without.
    """
    found: list[str] = []
    for name in TABLES:
        one, two = (
            pd.read_csv(folder / name, dtype=str, keep_default_na=False)
            for folder in (first, second)
        )
        if len(one) != len(two):
            found.append(f"{name}: {len(one):,} rows and {len(two):,}")
            continue
        missing = [c for c in NEEDED if c not in one.columns or c not in two.columns]
        if missing:
            found.append(f"{name}: no column {', '.join(missing)} on one side")
            continue
        for column in (c for c in one.columns if c in two.columns):
            rounding = 0.0 if column.endswith(("p_value", "q_value")) else ROUNDING
            apart = [
                row
                for row, (a, b) in enumerate(zip(one[column], two[column], strict=True))
                if a != b and not _is_close(a, b, rounding)
            ]
            if apart:
                row = apart[0]
                found.append(
                    f"{name}: {column} differs in {len(apart):,} of {len(one):,} rows, first in "
                    f"row {row + 1} ({one['combination'][row]}): {one[column][row]!r} and "
                    f"{two[column][row]!r}"
                )
    return found


def columns_apart(first: Path, second: Path) -> list[str]:
    """Columns of the candidates that only one of two run folders has."""
    one, two = (set(pd.read_csv(folder / TABLES[1], nrows=0).columns) for folder in (first, second))
    return sorted(one ^ two)


def _is_close(a: str, b: str, rounding: float) -> bool:
    try:
        return math.isclose(float(a), float(b), rel_tol=RELATIVE, abs_tol=rounding)
    except ValueError:  # text, or a number beside an empty cell
        return False
