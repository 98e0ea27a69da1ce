"""Hands on the parts of the study by name, each in its short and its full form."""

from __future__ import annotations

from collections.abc import Callable

from tests.calibration import level
from tests.calibration.level import Tasks

FORMS = ("short", "full")


def _level(is_full: bool) -> Tasks:
    return level.tasks(200, 80, 10) if is_full else level.tasks(6, 0, 0)


PARTS: dict[str, Callable[[bool], Tasks]] = {"level": _level}
