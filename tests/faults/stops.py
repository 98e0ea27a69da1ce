"""Stops hunts by a signal at random moments; takes the time until the program has ended."""

from __future__ import annotations

import random
import signal
import time
from dataclasses import dataclass, field

from tests.faults.kills import Range, moments
from tests.faults.studies import digests, fault_of, left_over, start, strangers

STATUS = {signal.SIGINT: 130, signal.SIGTERM: 143}


@dataclass
class Stops:
    """Seconds from signal to end by stage heard before, and what was wrong."""

    seconds: list[tuple[float, str]] = field(default_factory=list)
    finished: int = 0
    faults: list[str] = field(default_factory=list)


def stop_once(
    place: Range, stage: str | None, delay: float, is_replacing: bool, number: int, into: Stops
) -> None:
    """Hunt, send a signal ``delay`` seconds after a stage's line, and look."""
    place.clear()
    before = place.old_run() if is_replacing else None
    process = start("hunt", place.study, *(["--replace"] if is_replacing else []))
    heard = []
    for line in process.stderr or ():
        heard.append(line.strip())
        if stage is None or line.strip() == stage:
            break
    time.sleep(delay)
    process.send_signal(number)
    begun = time.monotonic()
    _, rest = process.communicate()
    took = time.monotonic() - begun
    is_done = place.target.exists() and not fault_of(place.target, place.whole)
    if process.returncode == 0 or (process.returncode == -number and is_done):
        into.finished += 1  # the second: Python was already taking itself down
    else:
        into.seconds.append((took, heard[-1] if heard else "start"))
        lines = [*heard, *rest.splitlines()]
        said = [line for line in lines if not line.endswith("...")]
        if process.returncode != STATUS[signal.Signals(number)]:
            into.faults.append(f"status {process.returncode}: {said}")
        elif len(said) != 1 or signal.Signals(number).name not in said[0]:
            into.faults.append(f"not one line: {said}")
    if left_over(place.folder):
        into.faults.append(f"left over: {left_over(place.folder)}")
    others = strangers(place.folder, place.known | {place.target.name})
    if others:
        into.faults.append(f"left beside the run: {others}")
    if place.target.exists():
        is_old = before is not None and digests(place.target) == before
        fault = None if is_old else fault_of(place.target, place.whole)
        if fault is not None:
            into.faults.append(fault)
    elif before is not None:
        into.faults.append("the old run is gone")


def stop_many(place: Range, n: int, seed: int = 0) -> Stops:
    """Stop ``n`` hunts, by Ctrl-C and SIGTERM in turn."""
    stops, rng = Stops(), random.Random(seed)
    for stage, delay, is_replacing in moments(place, n, seed):
        if stage is None:  # not before the program listens
            delay *= rng.random()
        number = signal.SIGTERM if rng.random() < 0.5 else signal.SIGINT
        stop_once(place, stage, delay, is_replacing, number, stops)
    return stops
