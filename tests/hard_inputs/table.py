"""Every case, group by group."""

from __future__ import annotations

from . import (
    commands,
    databases,
    encodings,
    files,
    names,
    parquets,
    prices,
    settings,
    shapes,
    spans,
    times,
)
from .case import Case

GROUPS = tuple(
    module.GROUP
    for module in (
        files,
        encodings,
        parquets,
        databases,
        times,
        names,
        spans,
        prices,
        shapes,
        settings,
        commands,
    )
)
CASES: tuple[Case, ...] = tuple(case for group in GROUPS for case in group.cases)
