"""Rules by name on a segment of a study: each one's triggers, with its target's events beside."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from miner.columns import POOLED
from miner.errors import SettingsError, explain
from miner.panel import Panel
from miner.time_split import Segment
from miner.triggers import Combo, find_triggers
from miner.units import Case, make_case, make_unit


class NamedRule(Protocol):
    """What it takes to find a rule's triggers."""

    @property
    def target(self) -> str:
        """Event type."""

    @property
    def stratum(self) -> str:
        """Stratum, "all" for all entities together."""

    @property
    def combination(self) -> Sequence[str]:
        """Alert types."""

    @property
    def lookback(self) -> int:
        """Sessions."""

    @property
    def horizon(self) -> int:
        """Sessions."""

    @property
    def rest(self) -> int:
        """Sessions."""


@dataclass(frozen=True)
class RuleCase:
    """A rule's row in a case: its unit on the segment, with the target's events in it."""

    case: Case
    row: int

    @property
    def triggers(self) -> tuple[np.ndarray, np.ndarray]:
        """Entity and session of the rule's triggers, int32 each, by entity, then session."""
        return self.case.unit.triggers.of(self.row)

    @property
    def is_hit(self) -> np.ndarray:
        """Bool [triggers]: an event within the horizon after."""
        offset_c = self.case.unit.triggers.offset_c
        return self.case.is_hit[offset_c[self.row] : offset_c[self.row + 1]]


def combo_of(panel: Panel, names: Sequence[str]) -> Combo:
    """Codes of alert types.

    Raises
    ------
    SettingsError : a type that the panel does not know
    """
    code = {name: k for k, name in enumerate(panel.type_names)}
    missing = [name for name in names if name not in code]
    if missing:
        raise SettingsError(
            explain(
                "rules",
                "combination",
                "be made of alert types of the log",
                ", ".join(missing),
                "Correct the spelling, or use the rules' own study.",
            )
        )
    return tuple(sorted(code[name] for name in names))


def stratum_code(panel: Panel, stratum: str) -> int | None:
    """Code of a stratum in ``panel.strata``; None for all entities together.

    Raises
    ------
    SettingsError : a stratum that the panel does not know
    """
    names = () if panel.strata is None else panel.strata.names
    if stratum in names:
        return names.index(stratum)
    if stratum == POOLED:
        return None
    raise SettingsError(
        explain(
            "rules",
            "stratum",
            f'be "{POOLED}" or a label of the groups table',
            f'"{stratum}"',
            f"Labels there: {', '.join(names) or 'none'}.",
        )
    )


def rule_cases(
    segment: Segment,
    rules: Sequence[NamedRule],
    *,
    n_workers: int = 1,
) -> list[RuleCase]:
    """The rules' triggers that count on a segment, with the events of each one's target.

    Rules of one target, stratum and windows share a case.

    Raises
    ------
    SettingsError : a rule names a target, stratum or alert type that the panel does not know
    """
    panel = segment.panel
    combos = [combo_of(panel, rule.combination) for rule in rules]
    groups: dict[tuple[str, str, int, int, int], set[Combo]] = {}
    for rule, combo in zip(rules, combos, strict=True):
        groups.setdefault(_key(rule), set()).add(combo)
    cases = {}
    for key, members in groups.items():
        target, stratum, lookback, horizon, rest = key
        if target not in panel.events:
            raise SettingsError(
                explain(
                    "rules",
                    "target",
                    "be a target of the study",
                    f'"{target}"',
                    f"Targets there: {', '.join(panel.events) or 'none'}.",
                )
            )
        code = stratum_code(panel, stratum)
        windows = {"lookback": lookback, "horizon": horizon, "rest": rest}
        table = find_triggers(segment, sorted(members), code, n_workers=n_workers, **windows)
        unit = make_unit(segment, stratum, code, table, **windows)
        cases[key] = make_case(target, unit, panel.events[target])
    return [
        RuleCase(cases[_key(rule)], cases[_key(rule)].unit.triggers.combos.index(combo))
        for rule, combo in zip(rules, combos, strict=True)
    ]


def _key(rule: NamedRule) -> tuple[str, str, int, int, int]:
    return rule.target, rule.stratum, rule.lookback, rule.horizon, rule.rest
