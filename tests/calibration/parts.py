"""Hands on the parts of the study by name, each in its short and its full form."""

from __future__ import annotations

from collections.abc import Callable

from tests.calibration import coverage, hunts, joint, laws, level, placebo, power, practice, review
from tests.calibration.level import Tasks

FORMS = ("short", "full")


def _level(is_full: bool) -> Tasks:
    return level.tasks(150, 50, 8) if is_full else level.tasks(4, 1, 0)


def _laws(is_full: bool) -> Tasks:
    return laws.tasks(25 if is_full else 1)


def _nothing(is_full: bool) -> Tasks:
    return hunts.nothing_planted(150 if is_full else 2)


def _planted(is_full: bool) -> Tasks:
    return hunts.planted(200 if is_full else 3)


def _joint(is_full: bool) -> Tasks:
    return joint.tasks(50 if is_full else 1)


def _power(is_full: bool) -> Tasks:
    return power.tasks(60 if is_full else 1)


def _intervals(is_full: bool) -> Tasks:
    return coverage.tasks(4000 if is_full else 200)


def _placebo(is_full: bool) -> Tasks:
    return placebo.tasks(50 if is_full else 1)


def _practice(is_full: bool) -> Tasks:
    return practice.tasks(20 if is_full else 1)


def _review(is_full: bool) -> Tasks:
    return review.tasks(16 if is_full else 1)


PARTS: dict[str, Callable[[bool], Tasks]] = {
    "level": _level,
    "laws": _laws,
    "nothing": _nothing,
    "planted": _planted,
    "power": _power,
    "joint": _joint,
    "intervals": _intervals,
    "placebo": _placebo,
    "practice": _practice,
    "review": _review,
}
