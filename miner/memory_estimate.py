"""Estimates what a hunt will take of memory from counts, and refuses what does not fit.

The figures are bytes a row, cell or trigger as measured on whole hunts (``tests/faults``); stages
come one after the other, so what counts is the largest on top of what all of them keep. Once
memory runs out a machine swaps for hours or kills whatever it likes, so this is asked beforehand.
``MINER_MEMORY`` in the environment sets the limit: gigabytes, or "off".
"""

from __future__ import annotations

import math
import os
import sys
import threading
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from miner.errors import SettingsError, explain

SETTING = "MINER_MEMORY"
KERNELS = 70_000_000  # compiled code and libraries that are loaded on the way
READ_ROW = 40  # a row's columns are joined once all have been read
ALERT_ROW = 12
LABEL_CELL = 6
EVIDENCE_CELL = 34
SEARCHED_CELL = 48  # the same by cell of discovery, of which the whole calendar has more
UNIT_CELL, CASE_CELL = 3, 10
STREAM_TRIGGER, TABLE_TRIGGER = 12, 8
JUDGED_TRIGGER = 9  # its rate, and whether it is a hit
PLACEBO_TRIGGER = 9
LATER_TRIGGER = 32  # the whole calendar's triggers for the walk-forward
DRAWN = 4 * 5.2  # hits and log p of a draw, joined and sorted
EXCHANGED = 4 * (522 + 512)  # random numbers and sessions of an event in a block of draws

CELLS = "cells (entities x sessions)"
ROWS = "rows"
TRIGGERS = "triggers"
DRAWS = "draws"
ADVICE = {
    ROWS: "Read a shorter history or fewer alert types",
    CELLS: "Hunt with fewer entities or alert types, or shorten [sessions]",
    TRIGGERS: "Raise [mining] min_triggers, lower max_size, or hunt with fewer alert types",
    DRAWS: "Lower [testing] permutations (0 does without) or raise [mining] min_triggers",
}


@dataclass(frozen=True)
class Need:
    """Bytes yet to be taken: ``kept`` to the end, and ``stages`` of which the largest counts.

    Both are told by what they grow with: ROWS, CELLS, TRIGGERS or DRAWS.
    """

    kept: dict[str, float]
    stages: dict[str, float]

    @property
    def total(self) -> float:
        """The most that will be taken at once."""
        return sum(self.kept.values()) + max(self.stages.values(), default=0.0)

    @property
    def largest(self) -> str:
        """What most of it grows with."""
        both = {name: self.kept.get(name, 0.0) + size for name, size in self.stages.items()}
        return max(both or self.kept, key=(both or self.kept).__getitem__)


def of_rows(n_rows: int) -> Need:
    """What a table of which ``n_rows`` have been read takes to hand on."""
    return Need({}, {ROWS: float(READ_ROW) * n_rows})


def of_panel(
    n_entities: int, n_sessions: int, n_types: int, n_alerts: int, n_classes: int = 1
) -> Need:
    """What placing the tables on sessions takes, and whatever grows with the number of cells.

    ``n_classes`` bounds the sets of types that are covered alike.
    """
    cells = float(n_entities) * n_sessions
    bits = 3 * cells / 8 * (n_types + n_classes)  # whole, discovery and holdout
    kept = ALERT_ROW * n_alerts + (LABEL_CELL + UNIT_CELL + CASE_CELL) * cells + bits
    return Need({CELLS: KERNELS + kept}, {CELLS: EVIDENCE_CELL * cells})


def of_search(
    n_cells: int,
    n_units: int,
    triggers: Sequence[int],
    family: Sequence[int],
    events: Sequence[int],
    n_draws: int,
    n_workers: int,
) -> Need:
    """What a search takes once its family has been found, and all that follows it.

    Parameters
    ----------
    n_cells : entities times sessions of discovery
    triggers, family, events : of each case (a target in a stratum)
    """
    n_triggers, n_worlds = float(sum(triggers)), n_workers if n_draws else 0
    return Need(
        {
            TRIGGERS: KERNELS + JUDGED_TRIGGER * n_triggers,
            CELLS: float(n_cells) * (UNIT_CELL * n_units + CASE_CELL * (len(family) - 1)),
        },
        {
            TRIGGERS: max(LATER_TRIGGER, PLACEBO_TRIGGER * n_workers) * n_triggers,
            CELLS: float(SEARCHED_CELL) * n_cells,
            DRAWS: DRAWN * n_draws * sum(family) + EXCHANGED * n_worlds * max(events, default=0),
        },
    )


class Growing:
    """Foresees what lists of triggers will take while blocks of entities are being looked at."""

    def __init__(self, n_blocks: int) -> None:
        self.n_blocks = n_blocks
        self.n_done, self.n_triggers = 0, 0
        self.lock = threading.Lock()

    def add(self, n_triggers: int) -> None:
        """Take note of a block's triggers.

        Raises
        ------
        SettingsError : at this rate they will not fit
        """
        with self.lock:
            self.n_done += 1
            self.n_triggers += n_triggers
            most = self.n_triggers / self.n_done * self.n_blocks
            size = (STREAM_TRIGGER + TABLE_TRIGGER) * most - STREAM_TRIGGER * self.n_triggers
        if size > KERNELS:
            refuse(Need({}, {TRIGGERS: size}))


def refuse(need: Need) -> None:
    """Refuse what will not fit into free memory.

    Raises
    ------
    SettingsError : it needs more than is free; the message says what to change
    """
    free = free_bytes()
    if free is None or need.total <= free:
        return
    raise SettingsError(
        explain(
            "memory",
            need.largest,
            f"fit into the {free / 1e9:.2g} GB that are free",
            f"about {need.total / 1e9:.2g} GB",
            f"{ADVICE[need.largest]}. {SETTING}=off in the environment tries all the same, "
            f"{SETTING}=4 allows 4 GB.",
        )
    )


def free_bytes() -> float | None:
    """Bytes this process may still take: what the machine has free, or a limit leaves it.

    None where nothing tells, or where MINER_MEMORY is "off".

    Raises
    ------
    SettingsError : MINER_MEMORY is neither a number above zero nor "off"
    """
    asked = os.environ.get(SETTING, "").strip()
    if asked == "off":
        return None
    if asked:
        limit = float(asked) if _is_number(asked) else math.nan
        if not limit > 0:
            rule, found = 'be a number of gigabytes, or "off"', f'"{asked}"'
            raise SettingsError(explain("environment", SETTING, rule, found))
        return limit * 1e9 - _resident()
    return min(_limits(), default=None)


def _is_number(text: str) -> bool:
    with suppress(ValueError):
        return math.isfinite(float(text))
    return False


def _limits() -> Iterator[float]:
    """Every bound on what is free that the system tells of."""
    available = _field("/proc/meminfo", "MemAvailable:")
    if available is not None:
        yield available * 1024.0
    yield from _cgroup_limits()
    if sys.platform != "win32":
        import resource

        limit, _ = resource.getrlimit(resource.RLIMIT_AS)
        size = _field("/proc/self/status", "VmSize:")
        if limit != resource.RLIM_INFINITY and size is not None:
            yield limit - size * 1024.0


def _cgroup_limits() -> Iterator[float]:
    """What the control groups of this process leave free (version 2 and 1)."""
    for line in _lines("/proc/self/cgroup"):
        _, controllers, path = line.split(":", 2)
        if controllers == "":
            root, most = "/sys/fs/cgroup", "memory.max"
            now, cache = "memory.current", "inactive_file"
        elif "memory" in controllers.split(","):
            root, most = "/sys/fs/cgroup/memory", "memory.limit_in_bytes"
            now, cache = "memory.usage_in_bytes", "total_inactive_file"
        else:
            continue
        group = Path(root + path)
        for folder in (group, *group.parents):
            limit, used = _number(folder / most), _number(folder / now)
            if limit is not None and used is not None and limit < 1 << 60:
                # pages of files that nobody has used lately are given up first
                yield limit - used + (_field(folder / "memory.stat", cache) or 0)
            if str(folder) == root:
                break


def _resident() -> float:
    """Bytes of memory this process has now."""
    return (_field("/proc/self/status", "VmRSS:") or 0) * 1024.0


def _field(path: str | Path, name: str) -> int | None:
    for line in _lines(path):
        words = line.split()
        if words and words[0] == name:
            return int(words[1])
    return None


def _number(path: Path) -> int | None:
    for line in _lines(path):
        return int(line) if line.strip().isdigit() else None
    return None


def _lines(path: str | Path) -> list[str]:
    try:
        return Path(path).read_text(encoding="utf-8").splitlines()
    except OSError:
        return []
