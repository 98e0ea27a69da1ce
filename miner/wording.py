"""Names and words for combinations."""

from __future__ import annotations

from miner.columns import JOINER
from miner.panel import Panel
from miner.triggers import Combo


def combination_name(panel: Panel, combo: Combo) -> str:
    """The combination's types, sorted, joined by " + "."""
    return JOINER.join(panel.type_names[k] for k in combo)
