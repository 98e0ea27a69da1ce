"""Closed triggers of a book's rules, quarter by quarter, with outcome and expected rate.

A trigger closes on the last session of its horizon and belongs to the quarter of that session. Its
expected rate is the margins null's, refitted on the cells that close in the same quarter. Each
quarter is computed on what was known by its end. Of a target whose events are known only later
(price moves) a trigger closes ``settle`` sessions after its horizon.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from miner import workers
from miner.nulls.margins import fit_margins
from miner.panel import Labels, Panel
from miner.review.quarters import Quarter
from miner.rule_book import BookRule
from miner.rule_cases import combo_of, stratum_code
from miner.time_split import Segment
from miner.triggers import TriggerTable, find_triggers, no_triggers
from miner.units import make_case, make_unit
from miner.workers import Progress, silent

WORD = 64  # sessions to a word of bits


@dataclass(frozen=True)
class Closed:
    """Closed triggers of one rule, by entity, then session: arrays of one length.

    Attributes
    ----------
    entity, session, peer : int32, ``peer`` the code of the peer group on the trigger's session
    close : int32, session on which the outcome is known
    quarter : int64, place in the quarters asked for
    is_hit : bool
    rate : float64, expected rate
    """

    entity: np.ndarray
    session: np.ndarray
    peer: np.ndarray
    close: np.ndarray
    quarter: np.ndarray
    is_hit: np.ndarray
    rate: np.ndarray


def wait_of(panel: Panel, target: str, settle: int) -> int:
    """Sessions after the horizon until the outcome of a trigger is known."""
    return settle if target in panel.known else 0


def closed_triggers(
    panel: Panel,
    rules: Sequence[BookRule],
    quarters: Sequence[Quarter],
    *,
    settle: int,
    n_workers: int = 1,
    progress: Progress = silent,
) -> list[Closed]:
    """What has closed of each rule in each of the quarters.

    A rule of an alert type, a target or a stratum that the panel does not know has no triggers.

    Parameters
    ----------
    panel : cut at the end of the last quarter
    quarters : in order, without holes
    """
    rule_groups: dict[tuple[str, str, int, int], list[int]] = {}
    for i, rule in enumerate(rules):
        if is_known(panel, rule):
            key = rule.target, rule.stratum, rule.lookback, rule.horizon
            rule_groups.setdefault(key, []).append(i)
    found = [_nothing() for _ in rules]
    stage = "triggers that closed"
    for done, ((target, stratum, lookback, horizon), members) in enumerate(rule_groups.items()):
        progress(stage, done / len(rule_groups))
        wait = horizon + wait_of(panel, target, settle)
        tables = {
            rest: find_triggers(
                Segment(panel, 0, panel.n_sessions - 1 - wait + horizon),
                [combo_of(panel, rules[i].combination) for i in members if rules[i].rest == rest],
                stratum_code(panel, stratum),
                lookback=lookback,
                horizon=horizon,
                rest=rest,
                n_workers=n_workers,
            )
            for rest in {rules[i].rest for i in members}
        }
        judged = {
            rest: _judge(
                panel, table, target, stratum, lookback, horizon, wait, quarters, n_workers
            )
            for rest, table in tables.items()
        }
        for i in members:
            rest = rules[i].rest
            row = tables[rest].combos.index(combo_of(panel, rules[i].combination))
            found[i] = _part(judged[rest], tables[rest], row)
    return found


def is_known(panel: Panel, rule: BookRule) -> bool:
    """Whether the panel knows a rule's alert types, target and stratum."""
    strata = () if panel.strata is None else panel.strata.names
    return (
        set(rule.combination) <= set(panel.type_names)
        and rule.target in panel.events
        and (rule.stratum == "all" or rule.stratum in strata)
    )


def _judge(
    panel: Panel,
    table: TriggerTable,
    target: str,
    stratum: str,
    lookback: int,
    horizon: int,
    wait: int,
    quarters: Sequence[Quarter],
    n_workers: int,
) -> Closed:
    """Outcome and expected rate of all triggers of a table that closed in the quarters."""
    entity, session = table.entity, table.session
    close = session + np.int32(wait)
    quarter = np.searchsorted([q.last for q in quarters], close).astype(np.int64)
    quarter[close < quarters[0].first] = -1
    is_hit, rate = np.zeros(entity.size, dtype=bool), np.zeros(entity.size)

    def judge(place: int) -> None:
        mine = np.flatnonzero(quarter == place)
        if not mine.size:
            return
        a, b = quarters[place].first - wait, quarters[place].last - wait + horizon
        part, offset = window(panel, max(a, 0), b + 1, known_by=quarters[place].last)
        segment = Segment(part, max(a, lookback - 1) - offset, b - offset)
        unit = make_unit(
            segment, stratum, stratum_code(panel, stratum), no_triggers(),
            lookback=1, horizon=horizon, rest=0,
        )  # fmt: skip
        case = make_case(target, unit, part.events[target])
        margins = fit_margins(unit.is_open_et, case.is_window_et, part.peers, law=panel.law)
        e, t = entity[mine], session[mine] - np.int32(offset)
        is_hit[mine] = case.is_window_et[e, t]
        rate[mine] = margins.rates(e, t)

    workers.in_order(judge, range(len(quarters)), n_workers)
    peer = panel.peers.code_et[entity, session].astype(np.int32)
    return Closed(entity, session, peer, close, quarter, is_hit, rate)


def window(panel: Panel, first: int, stop: int, known_by: int) -> tuple[Panel, int]:
    """The panel's sessions from a word's first on (at most ``first``) to before ``stop``, without
    alerts, and the session it begins with.

    Only events that were known by the session ``known_by``.
    """
    word = first // WORD
    offset = word * WORD

    def cut(labels: Labels) -> Labels:
        return Labels(labels.names, np.ascontiguousarray(labels.code_et[:, offset:stop]))

    events = {}
    for target, (entity, session) in panel.events.items():
        kept = (session >= offset) & (session < stop)
        kept &= panel.known.get(target, session) <= known_by
        events[target] = entity[kept], session[kept] - np.int32(offset)
    words = slice(word, (stop + WORD - 1) // WORD)
    part = replace(
        panel,
        n_sessions=stop - offset,
        alert_ekw=panel.alert_ekw[:, :0, words],
        events=events,
        cover_eqw=panel.cover_eqw[:, :, words],
        strata=None if panel.strata is None else cut(panel.strata),
        peers=cut(panel.peers),
        known={},
    )
    return part, offset


def _part(judged: Closed, table: TriggerTable, row: int) -> Closed:
    part = slice(table.offset_c[row], table.offset_c[row + 1])
    kept = np.flatnonzero(judged.quarter[part] >= 0) + part.start
    return Closed(
        judged.entity[kept],
        judged.session[kept],
        judged.peer[kept],
        judged.close[kept],
        judged.quarter[kept],
        judged.is_hit[kept],
        judged.rate[kept],
    )


def _nothing() -> Closed:
    none = np.empty(0, dtype=np.int32)
    return Closed(
        none, none, none, none, none.astype(np.int64), none.astype(bool), none.astype(float)
    )
