"""What a rule book holds, as frozen records; what each value must be is said here, once."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field

from miner.columns import JOINER
from miner.settings.sections import Section
from miner.settings.values import Name, Names, number, whole

FORMAT: Literal[1] = 1
DIGITS = 6  # of the numbers in a book's file
STATUSES = ("candidate", "live", "watch", "retired")
Status = Literal["candidate", "live", "watch", "retired"]
Count = Annotated[int, whole(0)]
Rate = Annotated[float, number(0)]


def rule_id(
    target: str,
    stratum: str,
    combination: Sequence[str],
    lookback: int,
    horizon: int,
    rest: int,
) -> str:
    """The rule's id: the first ten hexadecimal digits of a SHA-256 over what the rule says.

    The same rule has the same id in every run, whatever else was found and in what order.
    """
    said = [target, stratum, sorted(combination), lookback, horizon, rest]
    text = json.dumps(said, ensure_ascii=False, separators=(",", ":"))
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()[:10]


class Findings(Section):
    """What one part of the calendar said of a rule; rates are shares, 0 to 1."""

    triggers: Count
    hits: Count
    precision: Rate | None = None
    precision_low: Rate | None = None
    precision_high: Rate | None = None
    base_rate: Rate | None = None
    expected_hits: Rate | None = None
    p_value: Rate | None = None
    q_value: Rate | None = None
    p_own_timing: Rate | None = None
    p_holm: Rate | None = None
    power: Rate | None = None


class Lead(Section):
    """Sessions from a trigger to the event, over the triggers that hit: quartiles."""

    quarter: Rate
    median: Rate
    three_quarters: Rate
    hits: Count


class Workload(Section):
    """How often the rule calls, and the share of all events that it calls, over the study."""

    triggers_a_month: Rate
    share_of_events: Rate | None = None


class BookRule(Section):
    """One rule. Everything below ``run`` is evidence, and missing for a rule written by hand.

    ``precision``, ``precision_low`` and ``precision_high`` are what to expect of it: those of the
    holdout, with their 95 % interval. ``expected`` is what would be expected of such triggers if
    the alerts said nothing.
    """

    id: Name
    status: Status = "candidate"
    note: str = ""
    target: Name
    stratum: Name = "all"
    combination: Names
    lookback: Annotated[int, whole(1)]
    horizon: Annotated[int, whole(1)]
    rest: Annotated[int, whole(0)]
    verdict: Name | None = None
    sharpens: Name | None = None
    run: Name | None = None
    precision: Rate | None = None
    precision_low: Rate | None = None
    precision_high: Rate | None = None
    expected: Rate | None = None
    discovery: Findings | None = None
    holdout: Findings | None = None
    lead: Lead | None = None
    workload: Workload | None = None

    @property
    def name(self) -> str:
        """The combination as the hunt spells it."""
        return JOINER.join(self.combination)

    @property
    def own_id(self) -> str:
        """The id that belongs to what the rule says."""
        return rule_id(
            self.target, self.stratum, self.combination, self.lookback, self.horizon, self.rest
        )


class RunOrigin(Section):
    """A run that rules came from: what it was given, by SHA-256, and the split it used."""

    study: Name
    version: Name
    discovery_to: Name
    holdout_from: Name
    holdout_to: Name
    rules_sha256: Name
    inputs: dict[str, str] = Field(default_factory=dict)


class History(Section):
    """The file of the triggers so far, which a scan tells of."""

    source: Name


class RuleBook(Section):
    """A whole rule book.

    ``sessions``, ``alerts``, ``groups`` and ``coverage`` are the sections of the study's settings
    of those names, as far as a scan needs them; paths are relative to the book's folder.
    """

    format: Literal[1]
    sessions: dict[str, Any]
    alerts: dict[str, Any] = Field(default_factory=dict)
    groups: dict[str, Any] | None = None
    coverage: dict[str, Any] | None = None
    history: History | None = None
    run: dict[str, RunOrigin] = Field(default_factory=dict)
    rule: Annotated[tuple[BookRule, ...], Field(strict=False)] = ()

    def by_id(self) -> Mapping[str, BookRule]:
        """The rules by id."""
        return {rule.id: rule for rule in self.rule}

    def rules_with(self, statuses: Sequence[str]) -> tuple[BookRule, ...]:
        """The rules in any of these statuses, in the book's order."""
        return tuple(rule for rule in self.rule if rule.status in statuses)

    def within(self, folder: Path) -> dict[str, Any]:
        """The sections a scan needs, as the settings of a study in ``folder``."""
        sections: dict[str, Any] = {"sessions": dict(self.sessions)}
        for name in ("groups", "coverage"):
            if getattr(self, name) is not None:
                sections[name] = dict(getattr(self, name))
        return sections
