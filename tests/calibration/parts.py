"""Hands on the parts of the study by name, each in its short and its full form."""

from __future__ import annotations

from collections.abc import Callable

from tests.calibration import coverage, hunts, level, placebo, power, practice
from tests.calibration.level import Tasks

FORMS = ("short", "full")


def _level(is_full: bool) -> Tasks:
    return level.tasks(200, 80, 10) if is_full else level.tasks(4, 1, 0)


def _nothing(is_full: bool) -> Tasks:
    return hunts.nothing_planted(200 if is_full else 2)


def _planted(is_full: bool) -> Tasks:
    return hunts.planted(250 if is_full else 3)


def _power(is_full: bool) -> Tasks:
    return power.tasks(60 if is_full else 1)


def _intervals(is_full: bool) -> Tasks:
    return coverage.tasks(4000 if is_full else 200)


def _placebo(is_full: bool) -> Tasks:
    return placebo.tasks(60 if is_full else 1)


def _practice(is_full: bool) -> Tasks:
    return practice.tasks(25 if is_full else 1)


PARTS: dict[str, Callable[[bool], Tasks]] = {
    "level": _level,
    "nothing": _nothing,
    "planted": _planted,
    "power": _power,
    "intervals": _intervals,
    "placebo": _placebo,
    "practice": _practice,
}
