"""Hands on results as json lines: a run that is there is not made again."""

from __future__ import annotations

import json
import platform
import time
from collections.abc import Callable, Iterable, Iterator
from importlib.metadata import version
from pathlib import Path
from typing import Any

PACKAGES = ("numpy", "scipy", "numba", "mlxtend", "pandas")


def versions() -> dict[str, str]:
    """Versions that the figures hang on."""
    return {"python": platform.python_version()} | {name: version(name) for name in PACKAGES}


def read(path: Path) -> list[dict[str, Any]]:
    """Every whole line; a line cut short by an interruption is left out."""
    if not path.exists():
        return []
    rows = []
    for line in path.read_text(encoding="utf-8").splitlines():
        try:
            rows.append(json.loads(line))
        except json.JSONDecodeError:
            continue
    return rows


def run(
    path: Path,
    tasks: Iterable[tuple[dict[str, Any], Callable[[], Any]]],
    most_seconds: float = float("inf"),
) -> Iterator[dict[str, Any]]:
    """Run the tasks whose key is not in the file yet, in order, and add a line for each.

    A task is a key (a flat record) and what makes its result. No task starts after
    ``most_seconds``. Yields the new lines.
    """
    done = {json.dumps(row["key"], sort_keys=True) for row in read(path)}
    began = time.monotonic()
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("a", encoding="utf-8") as file:
        for key, work in tasks:
            if json.dumps(key, sort_keys=True) in done:
                continue
            if time.monotonic() - began > most_seconds:
                return
            start = time.perf_counter()
            row = {"key": key, "result": work(), "seconds": 0.0}
            row["seconds"] = round(time.perf_counter() - start, 3)
            file.write(json.dumps(row) + "\n")
            file.flush()
            yield row
