"""The record in which discovery hands a rule to what judges it."""

from __future__ import annotations

from dataclasses import dataclass

from miner.triggers import Combo


@dataclass(frozen=True)
class ChosenRule:
    """A rule: what it is, how precise it was in discovery, and the rule it sharpens, if any.

    ``code`` is the stratum's code in ``panel.strata``, None for all entities together.
    """

    target: str
    stratum: str
    code: int | None
    combo: Combo
    precision: float
    sharpens: Combo | None = None
