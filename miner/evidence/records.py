"""What ``gather`` hands on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from miner.evidence.as_json import as_dict
from miner.evidence.profiles import Profile
from miner.evidence.rule_facts import RuleFacts
from miner.evidence.together import Together


@dataclass(frozen=True)
class Load:
    """What all confirmed rules of a target together ask of a desk, over the whole study.

    ``triggers`` counts an entity's session once, however many rules call it; ``caught`` events of
    the target had a trigger of any of the rules within the horizon before.
    """

    target: str
    rules: int
    triggers: int
    months: float
    events: int
    caught: int


@dataclass(frozen=True)
class Disagreement:
    """Combinations on which the two nulls part: ``margins_only`` passed but the entities' own
    timing explains them (p above the level), ``own_timing_only`` the reverse (adjusted alike)."""

    margins_only: int
    own_timing_only: int


@dataclass(frozen=True)
class Evidence:
    """All of it."""

    type_names: tuple[str, ...]
    entity_names: tuple[str, ...]
    dates: np.ndarray
    horizon: int
    rules: tuple[RuleFacts, ...]
    loads: tuple[Load, ...]
    targets: tuple[str, ...]
    profiles: dict[tuple[str, int], Profile]
    """(target, type) -> profile of the type's triggers over the whole study, all entities"""
    timing_level: float
    """level of one side of a profile of a single type, for all of them together at 5 %"""
    together: Together
    disagreement: Disagreement
    warnings: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain lists and numbers, as they stand in ``evidence.json``."""
        return as_dict(self)
