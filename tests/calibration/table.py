"""Hands on the named worlds of the study: what drives alerts and events alike in each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from tests.worlds import Plant, WorldArrays, make_world

SIZE: dict[str, Any] = {
    "n_entities": 200,
    "n_sessions": 400,
    "n_types": 10,
    "alerts_per_type": 1500,
    "base_rate": 0.05,
}
CALENDAR = {"season": 1.0, "market_shocks": 1.0, "sector_shocks": 1.0}
LIVES = {"listing": 0.5, "type_coverage": 0.5}
CLUSTERS = {"clustered_alerts": 1.0, "clustered_events": 1.0}
HELD = CALENDAR | LIVES | CLUSTERS | {"busy_names": 1.0}


@dataclass(frozen=True)
class NamedWorld:
    """A recipe.

    ``is_claimed``: the margins null holds fixed all that alerts and events share here, so its
    level must hold. Elsewhere the study only measures how far off it is.
    """

    name: str
    what: str
    drivers: dict[str, Any] = field(default_factory=dict)
    is_claimed: bool = True

    def make(self, seed: int, planted: Sequence[Plant] = (), **other: Any) -> WorldArrays:
        """Draw it; ``other`` replaces arguments of ``make_world``."""
        return make_world(seed, **(SIZE | self.drivers | other), planted=planted)


WORLDS = tuple(
    NamedWorld(*row)
    for row in (
        ("quiet", "nothing shared, base rate 5 %"),
        ("rare", "nothing shared, base rate 0.5 %", {"base_rate": 0.005}),
        ("common", "nothing shared, base rate 20 %", {"base_rate": 0.2}),
        ("season", "shared season", {"season": 1.0}),
        ("market", "shared market shocks", {"market_shocks": 1.0}),
        ("sectors", "shared sector shocks, sectors known", {"sector_shocks": 1.0}),
        ("busy names", "busy names", {"busy_names": 1.0}),
        ("listing", "half of the names list late or leave early", {"listing": 0.5}),
        ("coverage", "half of the types partly published", {"type_coverage": 0.5}),
        ("alert clusters", "alerts come in bursts", {"clustered_alerts": 1.0}),
        ("event clusters", "events come in bursts", {"clustered_events": 1.0}),
        ("both clusters", "both in bursts, apart", CLUSTERS),
        ("reactive", "alerts follow events", {"reactive_alerts": 1.0}),
        ("calendar", "season, market and sector shocks", CALENDAR),
        ("calendar, busy", "and busy names", CALENDAR | {"busy_names": 1.0}),
        (
            "calendar, busy, common",
            "the same, base rate 20 %",
            CALENDAR | {"busy_names": 1.0, "base_rate": 0.2},
        ),
        ("all held", "and listing, coverage, bursts", HELD),
        ("all held, rare", "base rate 0.5 %", HELD | {"base_rate": 0.005}),
        ("all held, common", "base rate 20 %", HELD | {"base_rate": 0.2}),
        ("all held, 8 types", "8 types", HELD | {"n_types": 8}),
        ("all held, 40 types", "40 types", HELD | {"n_types": 40}),
        ("all held, 50 names", "50 entities", HELD | {"n_entities": 50, "alerts_per_type": 400}),
        (
            "sectors unknown",
            "sector shocks, no peer column",
            {"sector_shocks": 1.0, "sectors_known": False},
            False,
        ),
        (
            "reactive, clustered",
            "alerts follow events, events in bursts",
            {"reactive_alerts": 1.0, "clustered_events": 1.0},
            False,
        ),
        ("busy spell", "each name has busy weeks of its own", {"busy_spell": 1.0}, False),
        ("busy spell, mild", "a third as much of it", {"busy_spell": 0.3}, False),
        (
            "everything",
            "all held, and the three above",
            HELD | {"sectors_known": False, "reactive_alerts": 1.0, "busy_spell": 1.0},
            False,
        ),
    )
)
BY_NAME = {world.name: world for world in WORLDS}
