"""Hands on who and what the demo invents: sectors, alert types, and the list of what is planted."""

from __future__ import annotations

from dataclasses import dataclass

TARGET = "approach"
BANDS = ("small", "mid", "large")
SECTORS = (
    "glass farming",
    "lamp energy",
    "moss medicine",
    "night retail",
    "paper robotics",
    "river transport",
    "salt mining",
    "sky freight",
    "stone credit",
    "tidal works",
)


@dataclass(frozen=True)
class AlertKind:
    """One alert type: how often it is published, what drives it, where it is covered.

    ``exposure`` is the power of the drivers' level it takes on, ``follow_up_mean`` the number of
    repeats to expect after an alert; ``is_large_only`` leaves small companies out, ``from_date``
    is the first day of publication, ``echo_rate`` the repeats to expect after an event.
    """

    name: str
    n_alerts: int
    exposure: float = 0.3
    follow_up_mean: float = 0.15
    is_large_only: bool = False
    from_date: str = ""
    echo_rate: float = 0.0


ALERT_KINDS = (
    AlertKind("board huddle", 2800),
    AlertKind("borrow squeeze", 3000),
    AlertKind("call skew", 3000),
    AlertKind("counsel retained", 2200, from_date="2020-01-02"),
    AlertKind("headline echo", 20_000, exposure=0.5, echo_rate=2.5),
    AlertKind("jet sighting", 2000),
    AlertKind("loan chatter", 3000),
    AlertKind("price jolt", 80_000, exposure=1.0, follow_up_mean=0.6),
    AlertKind("quiet bid", 2800),
    AlertKind("screen flicker", 150_000, exposure=0.6, follow_up_mean=0.8, is_large_only=True),
    AlertKind("stake creep", 2800),
    AlertKind("volume swell", 70_000, exposure=1.0, follow_up_mean=0.6),
)


@dataclass(frozen=True)
class Planting:
    """Sets of alerts put on company-sessions, followed by the target with a chosen probability.

    ``n_sets`` counts the whole calendar; ``life`` is the share of the calendar, from and to, in
    which the sets are followed by more than chance; ``bands`` are those the sets are put in, and
    ``place`` the share of the calendar. A planting of kind "idle" has no effect: it lets the parts
    of another be seen on their own.
    """

    types: tuple[str, ...]
    kind: str
    n_sets: int
    precision: float
    bands: tuple[str, ...] = BANDS
    life: tuple[float, float] = (0.0, 1.0)
    place: tuple[float, float] = (0.0, 1.0)


_BAND_PAIR = ("loan chatter", "stake creep")
_TRIPLE = ("board huddle", "counsel retained", "stake creep")

PLANTINGS = (
    Planting(("loan chatter", "quiet bid"), "pair", 290, 0.30),
    Planting(_TRIPLE, "triple", 210, 0.38),
    Planting(_TRIPLE[:2], "idle", 300, 0.0),
    Planting(_TRIPLE[1:], "idle", 300, 0.0),
    Planting((_TRIPLE[0], _TRIPLE[2]), "idle", 300, 0.0),
    Planting(("borrow squeeze", "call skew"), "common pair", 520, 0.13),
    Planting(("borrow squeeze", "call skew", "jet sighting"), "sharpening triple", 68, 0.63),
    Planting(("borrow squeeze", "jet sighting"), "idle", 150, 0.0),
    Planting(("call skew", "jet sighting"), "idle", 150, 0.0),
    Planting(_BAND_PAIR, "band pair", 230, 0.32, bands=("mid",)),
    Planting(_BAND_PAIR, "idle", 460, 0.0, bands=("small", "large")),
    Planting(("borrow squeeze", "quiet bid"), "dying pair", 380, 0.28, life=(0.0, 0.6)),
)
DECOY = ("price jolt", "volume swell")


@dataclass(frozen=True)
class Fate:
    """What becomes of a planting in the four quarters after the hunt.

    ``precisions`` are those of its sets, quarter by quarter.
    """

    types: tuple[str, ...]
    name: str
    precisions: tuple[float, float, float, float]
    stratum: str = "all"


FATES = (
    Fate(_TRIPLE, "holds", (0.38, 0.38, 0.38, 0.38)),
    Fate(("borrow squeeze", "call skew"), "decays slowly", (0.08, 0.04, 0.0, 0.0)),
    Fate(_BAND_PAIR, "dies at once", (0.0, 0.0, 0.0, 0.0), stratum="mid"),
    Fate(("loan chatter", "quiet bid"), "an alert is redefined", (0.3, 0.3, 0.3, 0.3)),
)
FARES_ALIKE = (
    Fate(("borrow squeeze", "call skew", "jet sighting"), "decays slowly", (0.33, 0.0, 0.0, 0.0)),
)
REDEFINED = "quiet bid"
REDEFINED_FROM = "2024-05-06"
REDEFINED_FACTOR = 3.0  # as many alerts from then on
