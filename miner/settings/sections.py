"""The tables of a settings file: their keys, types and defaults."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from .values import Clock, Day, Name, Names, Share, Source, Zone, is_url, number, whole

Kind = Literal["weekdays", "daily", "dates", "exchange"]


class Section(BaseModel):
    """One table of the settings: strict types, no unknown keys, unchangeable."""

    model_config = ConfigDict(strict=True, frozen=True, extra="forbid")


class NameSettings(Section):
    """[study]."""

    name: Name


class TableSettings(Section):
    """Where a table comes from: a path or glob, or a database URL with a query."""

    source: Source
    query: Name | None = None
    columns: dict[str, Name] = Field(default_factory=dict)
    bad_rows: Literal["error", "set-aside"] = "error"

    @property
    def is_database(self) -> bool:
        """Whether the source is a database URL."""
        return is_url(self.source)


class EventSettings(TableSettings):
    """[events]; `targets` None means every event type, each its own target."""

    targets: Names | None = None


class GroupSettings(TableSettings):
    """[groups]; `peers` falls back to `strata`, None means one group of all."""

    strata: Name | None = None
    pooled: bool = False
    peers: Name | None = Field(default_factory=lambda done: done["strata"])

    @property
    def label_columns(self) -> tuple[str, ...]:
        """The label columns in use, each once."""
        return tuple(dict.fromkeys(c for c in (self.strata, self.peers) if c is not None))


class PriceSettings(TableSettings):
    """[prices]: which moves become targets, and what trades on rules would cost.

    `jumps` says what a close at least 1.8 times, or at most 1/1.8 of, the one before is: "error"
    stops, "break" starts the series anew there, "keep" takes it for real. `epsilon` and `threshold`
    are in volatilities, the volatility is that of the `volatility_sessions` returns before.
    A series with more than `largest_gap` sessions without a price starts anew after them.
    `costs_bps` and `slippage_bps` are paid on each of entry and exit.
    """

    moves: Literal["extremes", "close-to-close", "off"] = "extremes"
    epsilon: Annotated[float, number(0)] = 1.0
    threshold: Annotated[float, number(0, is_above=True)] = 2.5
    volatility_sessions: Annotated[int, whole(10)] = 60
    largest_gap: Annotated[int, whole(0)] = 5
    jumps: Literal["error", "break", "keep"] = "error"
    benchmark: Literal["peers", "strata", "all"] = "peers"
    directions: dict[str, Literal["long", "short"]] = Field(default_factory=dict)
    exit: Literal["horizon", "event"] = "horizon"
    costs_bps: Annotated[float, number(0)] = 5.0
    slippage_bps: Annotated[float, number(0)] = 5.0
    position: Annotated[float, number(0, is_above=True)] = 100_000.0


def _kind(calendar: str) -> Kind:
    if calendar == "weekdays":
        return "weekdays"
    if calendar == "daily":
        return "daily"
    return "dates" if calendar.lower().endswith(".csv") else "exchange"


def _default_close(done: dict[str, Any]) -> dt.time | None:
    return None if _kind(done["calendar"]) == "exchange" else dt.time(16)


def _default_zone(done: dict[str, Any]) -> str | None:
    return None if _kind(done["calendar"]) == "exchange" else "UTC"


class SessionSettings(Section):
    """[sessions]; for an exchange code `close` and `timezone` None mean the exchange's own."""

    calendar: Name = "weekdays"
    close: Clock | None = Field(default_factory=_default_close)
    timezone: Zone | None = Field(default_factory=_default_zone)
    start: Day | None = None
    end: Day | None = None

    @property
    def kind(self) -> Kind:
        """What `calendar` names: a rule, a csv of dates, or an exchange code."""
        return _kind(self.calendar)


class WindowSettings(Section):
    """[windows], all in sessions."""

    lookback: Annotated[int, whole(1)] = 5
    horizon: Annotated[int, whole(1)] = 5
    rest: Annotated[int, whole(0)] = Field(default_factory=lambda done: done["horizon"])


class MiningSettings(Section):
    """[mining]."""

    max_size: Annotated[int, whole(1, 6)] = 3
    min_triggers: Annotated[int, whole(1)] = 20
    min_hits: Annotated[int, whole(1)] = 3


class TestingSettings(Section):
    """[testing]; `shuffle` is the number of draws of the plain shuffle, shown to compare."""

    __test__ = False  # pytest would take the name for a test class

    adjust: Literal["bh", "by", "westfall-young"] = "bh"
    margins: Literal["odds", "hazard"] = "odds"
    fdr: Share = 0.05
    permutations: Annotated[int, whole(0, sane=10**6)] = 2000
    placebo: Annotated[int, whole(0, sane=10**4)] = 20
    shuffle: Annotated[int, whole(0, sane=10**6)] = 0
    seed: Annotated[int, whole(0, sane=2**63 - 1)] = 7


class HoldoutSettings(Section):
    """[holdout]; exactly one of `start` and `share` is set. `folds` is for the walk-forward."""

    start: Day | None = None
    share: Share | None = Field(default_factory=lambda done: None if done["start"] else 0.3)
    embargo: Annotated[int, whole(0, sane=2 * 10**9)] = 10
    alpha: Share = 0.05
    folds: Annotated[int, whole(0, sane=1000)] = 4


class ReviewSettings(Section):
    """[review], the quarterly review.

    A rule is proposed for retirement when the evidence that its precision is below `keep_share`
    times its promise reaches 1 / `alpha`, and for watching at `watch_at`. `holdout_share` is the
    part of the window that the review's own hunt holds out, by default that of [holdout];
    `settle` are the sessions waited for price moves to be over.
    """

    alpha: Share = 0.05
    keep_share: Annotated[float, number(0, is_above=True, high=1)] = 1.0
    watch_at: Annotated[float, number(1, is_above=True)] = 5.0
    min_triggers: Annotated[int, whole(1)] = 10
    restart_quarters: Annotated[int, whole(0)] = 4
    hang_together: Literal["peers", "dates", "entity", "quarter"] = "peers"
    procedure: Literal["lord++", "saffron", "addis"] = "lord++"
    holdout_share: Share | None = None
    settle: Annotated[int, whole(0)] = 20
    input_quarters: Annotated[int, whole(2, 40)] = 8


SECTIONS: dict[str, type[Section]] = {
    "study": NameSettings,
    "alerts": TableSettings,
    "events": EventSettings,
    "groups": GroupSettings,
    "coverage": TableSettings,
    "prices": PriceSettings,
    "sessions": SessionSettings,
    "windows": WindowSettings,
    "mining": MiningSettings,
    "testing": TestingSettings,
    "holdout": HoldoutSettings,
    "review": ReviewSettings,
}
OPTIONAL_SECTIONS = frozenset({"groups", "coverage", "prices"})
TABLE_COLUMNS: dict[str, tuple[str, ...]] = {
    "alerts": ("entity", "time", "type", "score"),
    "events": ("entity", "time", "type", "score"),
    "groups": ("entity", "start", "end"),
    "coverage": ("entity", "type", "start", "end"),
    "prices": ("entity", "date", "open", "high", "low", "close", "volume"),
}
