"""The last sessions of a log as a scan sees them: triggers, and whether they are settled."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np

from miner.columns import POOLED
from miner.panel import Panel
from miner.rule_book.records import BookRule
from miner.rule_cases import combo_of
from miner.time_split import Segment
from miner.triggers import Combo, TriggerTable, find_triggers

LONG_AGO = -(1 << 30)


@dataclass(frozen=True, eq=False)
class View:
    """A panel of the last sessions, and the same with everything covered.

    ``first`` is the calendar's session at which the view begins, ``is_mine`` which of the scan's
    alerts are in it.
    """

    panel: Panel
    everywhere: Panel
    rules: Sequence[BookRule]
    first: int
    is_mine: np.ndarray

    @cache  # noqa: B019 - a view lives as long as one scan
    def _found(
        self, is_everywhere: bool, lookback: int, rest: int
    ) -> tuple[TriggerTable, dict[Combo, int]]:
        """Triggers of all rules with this look-back, at this rest, in all strata together."""
        panel = self.everywhere if is_everywhere else self.panel
        combos = {combo_of(panel, r.combination) for r in self.rules if r.lookback == lookback}
        table = find_triggers(
            Segment(panel, 0, panel.n_sessions - 1),
            sorted(combos),
            None,
            lookback=lookback,
            horizon=0,
            rest=rest,
        )
        return table, {combo: row for row, combo in enumerate(table.combos)}

    def _of(self, rule: BookRule, is_everywhere: bool, rest: int) -> tuple[np.ndarray, np.ndarray]:
        table, place = self._found(is_everywhere, rule.lookback, rest)
        return table.of(place[combo_of(self.panel, rule.combination)])

    def in_stratum(self, rule: BookRule, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
        """Whether cells are in a rule's stratum: bool, the shape of ``entity``."""
        strata = self.panel.strata
        if strata is not None and rule.stratum in strata.names:
            return strata.code_et[entity, session] == strata.names.index(rule.stratum)
        return np.full(entity.shape, rule.stratum == POOLED)

    def triggers(self, rule: BookRule) -> tuple[np.ndarray, np.ndarray]:
        """Entity and session (of the view) of a rule's triggers, as the hunt finds them."""
        entity, session = self._of(rule, False, rule.rest)
        mine = self.in_stratum(rule, entity, session)
        return entity[mine], session[mine]

    def last_trigger(self, rule: BookRule) -> np.ndarray:
        """Session of each entity's last trigger, covered or not, long ago where none: int64."""
        last_e = np.full(self.panel.n_entities, LONG_AGO, dtype=np.int64)
        entity, session = self._of(rule, True, rule.rest)
        np.maximum.at(last_e, entity, session)
        return last_e

    def is_settled(self, start_report: int) -> bool:
        """Whether every completion from ``start_report`` on follows one that is surely a trigger.

        Completions are known from session ``lookback`` of the view on; one is surely a trigger when
        the ``rest - 1`` sessions before it are all known and hold no other.
        """
        for rule in self.rules:
            entity, session = self._of(rule, True, 0)
            known = session >= rule.lookback
            entity, session = entity[known], session[known].astype(np.int64)
            if not entity.size:
                continue
            is_first = np.append(True, entity[1:] != entity[:-1])
            gap = np.diff(session, prepend=0)
            gap[is_first] = session[is_first] - rule.lookback + 1
            place = np.arange(entity.size)
            latest_sure = np.maximum.accumulate(np.where(gap >= rule.rest, place, -1))
            group_start = np.maximum.accumulate(np.where(is_first, place, 0))
            if ((session >= start_report) & (latest_sure < group_start)).any():
                return False
        return True
