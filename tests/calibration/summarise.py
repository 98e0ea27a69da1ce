"""Hands on tables made of result lines; every mean with its standard error over seeds."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

Row = dict[str, Any]
Results = dict[str, list[Row]]


def table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A markdown table."""
    body = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(cells) + " |" for cells in body)


@dataclass(frozen=True)
class Mean:
    """A mean over seeds with its standard error; combinations of one world are not independent."""

    value: float
    error: float
    n: int

    def text(self, digits: int = 3, *, with_error: bool = True) -> str:
        """As printed in a table."""
        if self.n == 0:
            return "–"
        shown = f"{self.value:.{digits}f}"
        return f"{shown} ± {self.error:.{digits}f}" if with_error and self.n > 1 else shown


def mean(values: Iterable[float]) -> Mean:
    """Mean and standard error of one value a seed."""
    x = np.array(list(values), dtype=float)
    if x.size == 0:
        return Mean(float("nan"), float("nan"), 0)
    error = float(x.std(ddof=1) / np.sqrt(x.size)) if x.size > 1 else float("nan")
    return Mean(float(x.mean()), error, x.size)


def ratio(tops: Iterable[float], bottoms: Iterable[float]) -> Mean:
    """Sum over sum with the error of a ratio, one pair a seed."""
    top, bottom = np.array(list(tops), dtype=float), np.array(list(bottoms), dtype=float)
    if bottom.sum() == 0:
        return Mean(float("nan"), float("nan"), 0)
    value = float(top.sum() / bottom.sum())
    spread = top - value * bottom
    return Mean(value, float(np.sqrt((spread**2).sum()) / bottom.sum()), top.size)


def by_world(rows: Sequence[Row]) -> Results:
    """Results by world, in order of appearance; runs without a family are left out."""
    worlds: Results = {}
    for row in rows:
        if row["result"] is not None:
            worlds.setdefault(row["key"]["world"], []).append(row["result"])
    return worlds


def level_of(results: Sequence[Row], null: str, which: int, group: str = "all") -> Mean:
    """Share of combinations at or below the ``which``-th level by one null."""
    found = [
        r["below"][null][group][which]
        for r in results
        if null in r["below"] and r["below"][null][group]
    ]
    return mean(found)


def fact(results: Sequence[Row], name: str, of: Callable[[float], float] = float) -> Mean:
    """Mean over seeds of one measured fact."""
    return mean(of(r[name]) for r in results if name in r)


def any_rule(results: Sequence[Row], key: str) -> Mean:
    """Share of hunts that end with a rule."""
    return mean(float(sum(r["rules"][key].values()) > 0) for r in results)


def kinds(results: Sequence[Row], field: str, key: str) -> dict[str, int]:
    """Totals by kind of rules or passing combinations."""
    total: dict[str, int] = {}
    for r in results:
        if key in r[field]:
            for kind, n in r[field][key].items():
                total[kind] = total.get(kind, 0) + n
    return total


def false_share(results: Sequence[Row], field: str, key: str, wrong: Sequence[str]) -> Mean:
    """Realised false discovery rate: mean over hunts of wrong / all, 0 where nothing is found."""
    shares = []
    for r in results:
        if key in r[field]:
            found = r[field][key]
            total = sum(found.values())
            shares.append(sum(found[kind] for kind in wrong) / total if total else 0.0)
    return mean(shares)


def plants(results: Sequence[Row]) -> list[Row]:
    """Every plant of every hunt."""
    return [plant for r in results for plant in r.get("plants", [])]
