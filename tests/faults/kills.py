"""Kills hunts (SIGKILL) at random moments and at every stage, and looks at what is left."""

from __future__ import annotations

import random
import shutil
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

from miner import placing
from tests.faults.studies import (
    NOTE,
    digests,
    fault_of,
    left_over,
    run,
    small_study,
    start,
    strangers,
)

WRITING = "writing ..."


@dataclass
class Tally:
    """What was found after each kill; ``faults`` must stay empty."""

    kills: int = 0
    stages: Counter[str] = field(default_factory=Counter)
    outcomes: Counter[str] = field(default_factory=Counter)
    faults: list[str] = field(default_factory=list)


class Range:
    """A small study with a whole run of it as the yardstick."""

    def __init__(self, folder: Path) -> None:
        self.study = small_study(folder / "study")
        self.folder = self.study.parent
        self.target = self.folder / "study-run"
        done = run("hunt", self.study)  # compiles what has to be
        if done.returncode:
            raise RuntimeError(f"the study cannot be hunted in at all: {done.stderr}")
        self.stages, self.seconds, self.writing = self._timed()
        self.whole = digests(self.target)
        self.kept = folder / "kept"
        self.target.rename(self.kept)
        self.known = {path.name for path in self.folder.iterdir()}

    def _timed(self) -> tuple[list[str], float, float]:
        """Lines of the stages, seconds of a whole run, and of its writing."""
        begun = written = time.monotonic()
        stages = []
        process = start("hunt", self.study, "--replace")
        for line in process.stderr or ():
            if line.rstrip().endswith("..."):
                stages.append(line.strip())
                written = time.monotonic()
        process.communicate()
        ended = time.monotonic()
        return stages, ended - begun, ended - written

    def old_run(self) -> dict[str, str]:
        """Put a run there that differs from any new one, and return its digests."""
        shutil.copytree(self.kept, self.target)
        (self.target / NOTE).write_text("of the earlier run")
        return digests(self.target)

    def clear(self) -> None:
        """Remove the run; left-overs stay, for the next to remove."""
        shutil.rmtree(self.target, ignore_errors=True)


def kill_once(
    place: Range, stage: str | None, delay: float, is_replacing: bool, into: Tally
) -> None:
    """Hunt, kill ``delay`` seconds after a stage's line (None: after the start), and look."""
    place.clear()
    before = place.old_run() if is_replacing else None
    process = start("hunt", place.study, *(["--replace"] if is_replacing else []))
    heard = "start"
    if stage is not None and process.stderr is not None:
        for line in process.stderr:
            heard = line.strip()
            if heard == stage:
                break
    try:
        time.sleep(delay)
    finally:
        process.kill()
    process.communicate()
    into.kills += 1
    into.stages[heard if stage is not None else "anywhere"] += 1
    what = _look(place, before, into)
    into.outcomes[what if process.returncode else "finished before the kill"] += 1
    swept = left_over(place.folder)
    placing.sweep(place.target)
    if left_over(place.folder):
        into.faults.append(f"not swept: {left_over(place.folder)} of {swept}")


def _look(place: Range, before: dict[str, str] | None, into: Tally) -> str:
    others = strangers(place.folder, place.known | {place.target.name})
    if others:
        into.faults.append(f"left beside the run: {others}")
    is_left = bool(left_over(place.folder))
    if not place.target.exists():
        if before is not None:
            into.faults.append("the old run is gone")
        return "no run" + (", left-over beside it" if is_left else "")
    if before is not None and digests(place.target) == before:
        return "old run as it was" + (", left-over beside it" if is_left else "")
    fault = fault_of(place.target, place.whole)
    if fault is not None:
        into.faults.append(fault)
    return "new run, whole" + (", left-over beside it" if is_left else "")


def moments(place: Range, n: int, seed: int) -> Iterator[tuple[str | None, float, bool]]:
    """Where to kill: every stage in turn, while the folder is written, and anywhere."""
    rng = random.Random(seed)
    for i in range(n):
        is_replacing = i % 2 == 1
        if i % 4 < 2:
            yield WRITING, rng.uniform(0.0, place.writing), is_replacing
        elif i % 8 < 4:
            stage = place.stages[(i // 8 * 2 + i % 2) % len(place.stages)]
            yield stage, rng.uniform(0.0, 0.05), is_replacing
        else:
            yield None, rng.uniform(0.0, 1.05 * place.seconds), is_replacing


def kill_many(folder: Path, n: int, seed: int = 0) -> Tally:
    """Kill ``n`` hunts, then hunt to the end."""
    place, tally = Range(folder), Tally()
    for stage, delay, is_replacing in moments(place, n, seed):
        kill_once(place, stage, delay, is_replacing, tally)
    place.clear()
    done = run("hunt", place.study)
    if done.returncode or fault_of(place.target, place.whole):
        tally.faults.append(f"a hunt after all the kills went wrong: {done.stderr}")
    return tally
