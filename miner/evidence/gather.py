"""Gathers everything the report shows beyond the tables, once, when the hunt is over."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from miner import workers
from miner.adjust import benjamini_hochberg
from miner.chosen import ChosenRule
from miner.columns import CONFIRMED
from miner.evidence.lead_times import events_caught, months_judged
from miner.evidence.profiles import EventRates, Profile, event_rates, profile
from miner.evidence.records import Disagreement, Evidence, Load
from miner.evidence.rule_facts import RuleFacts, parts_of, rule_facts
from miner.evidence.tables import in_stratum, with_rows, within
from miner.evidence.together import together
from miner.holdout import Outcome
from miner.judged import judge_rules
from miner.panel import Panel
from miner.search import Search
from miner.settings import Study
from miner.time_split import Segment, holdout_slice
from miner.triggers import TriggerTable, find_triggers
from miner.units import Case, make_case, make_unit


def gather(
    found: Search,
    outcomes: Sequence[Outcome],
    candidates: pd.DataFrame,
    panel: Panel,
    dates: np.ndarray,
    study: Study,
    *,
    holdout_first: int,
    warnings: Sequence[str] = (),
    n_workers: int = 1,
) -> Evidence:
    """Work out what the report shows; nothing here decides anything.

    Parameters
    ----------
    found, outcomes : the rules, and what the holdout said of each
    candidates : the candidates table
    panel, dates : the whole study
    holdout_first : session at which the holdout begins
    warnings : what looks wrong in the inputs, in words
    """
    windows = study.windows.model_dump()
    rules = found.chosen()
    combos = {rule.combo for rule in rules}
    n_types, last = len(panel.type_names), panel.n_sessions - 1
    targets = tuple(dict.fromkeys(f.case.target for f in found.found))

    # with no horizon the triggers of the last sessions are there too, whose outcome is open
    wanted = sorted(combos | {(k,) for k in range(n_types)})
    every = find_triggers(
        Segment(panel, 0, last), wanted, None, n_workers=n_workers, **windows | {"horizon": 0}
    )
    is_judged = every.session <= last - study.windows.horizon
    whole = within(every, is_judged)
    singles = with_rows(whole, [whole.combos.index((k,)) for k in range(n_types)])

    cases = {target: _whole_case(panel, target, None, "", singles, windows) for target in targets}
    profiles = {}
    for target, case in cases.items():
        rates = event_rates(case, n_workers)

        def one(k: int, rates: EventRates = rates) -> Profile:
            return profile(rates, *singles.of(k), study.windows.horizon)

        for k, made in enumerate(workers.in_order(one, range(n_types), n_workers)):
            profiles[target, k] = made

    of_rules = with_rows(whole, [whole.combos.index(combo) for combo in sorted(combos)])
    units = {
        key: _whole_case(
            panel,
            key[0],
            key[2],
            key[1],
            in_stratum(of_rules, panel, key[2]),
            windows,
        )
        for key in dict.fromkeys((rule.target, rule.stratum, rule.code) for rule in rules)
    }
    return Evidence(
        panel.type_names,
        panel.entity_names,
        dates,
        study.windows.horizon,
        _facts(found, rules, panel, dates, study, every, units, holdout_first, n_workers),
        _loads(rules, outcomes, units, dates),
        targets,
        profiles,
        0.05 / max(1, 2 * len(profiles)),
        together(panel, singles, study.windows.lookback, n_workers),
        _disagreement(candidates, found.adjuster.family, study.testing.fdr),
        tuple(warnings),
    )


def _facts(
    found: Search,
    rules: Sequence[ChosenRule],
    panel: Panel,
    dates: np.ndarray,
    study: Study,
    every: TriggerTable,
    units: dict[tuple[str, str, int | None], Case],
    holdout_first: int,
    n_workers: int,
) -> tuple[RuleFacts, ...]:
    if not rules:
        return ()
    windows = study.windows.model_dump()
    asked = {part for rule in rules for part in (*parts_of(rule.combo), rule.combo)}
    segment = found.found[0].case.unit.segment
    early = find_triggers(segment, sorted(asked), None, n_workers=n_workers, **windows)
    late = holdout_slice(panel, holdout_first, panel.n_sessions - 1)
    judged = judge_rules(late, rules, n_workers=n_workers, **windows)
    places = [rule.case for rule in found.explanation.rules]
    rates_of: dict[int, tuple[EventRates, EventRates]] = {}
    order = sorted(range(len(rules)), key=lambda i: places[i])
    facts: dict[int, RuleFacts] = {}
    for i in order:
        rule, place = rules[i], places[i]
        if place not in rates_of:
            rates_of.clear()  # one case's at a time: they are as large as the panel
            rates_of[place] = (
                event_rates(found.found[place].case, n_workers),
                event_rates(judged[i][0].case, n_workers),
            )
        own = in_stratum(with_rows(every, [every.combos.index(rule.combo)]), panel, rule.code)
        facts[i] = rule_facts(
            found,
            place,
            rule.combo,
            early,
            judged[i],
            units[rule.target, rule.stratum, rule.code],
            own,
            rates_of[place],
            dates,
        )
    return tuple(facts[i] for i in range(len(rules)))


def _whole_case(
    panel: Panel,
    target: str,
    code: int | None,
    stratum: str,
    table: TriggerTable,
    windows: dict[str, int],
) -> Case:
    segment = Segment(panel, 0, panel.n_sessions - 1)
    unit = make_unit(segment, stratum, code, table, **windows)
    return make_case(target, unit, panel.events[target])


def _loads(
    rules: Sequence[ChosenRule],
    outcomes: Sequence[Outcome],
    units: dict[tuple[str, str, int | None], Case],
    dates: np.ndarray,
) -> tuple[Load, ...]:
    loads = []
    for target in dict.fromkeys(rule.target for rule in rules):
        held = [
            rule
            for rule, outcome in zip(rules, outcomes, strict=True)
            if outcome.verdict == CONFIRMED and rule.target == target
        ]
        calls: set[tuple[int, int]] = set()
        events: set[tuple[int, int]] = set()
        caught: set[tuple[int, int]] = set()
        months = 0.0
        for rule in held:
            case = units[rule.target, rule.stratum, rule.code]
            row = case.unit.triggers.combos.index(rule.combo)
            is_caught = events_caught(case, [row])
            calls.update(_pairs(*case.unit.triggers.of(row)))
            events.update(_pairs(*case.events))
            caught.update(_pairs(case.events[0][is_caught], case.events[1][is_caught]))
            months = months_judged(case, dates)
        loads.append(Load(target, len(held), len(calls), months, len(events), len(caught)))
    return tuple(loads)


def _pairs(entity: np.ndarray, session: np.ndarray) -> zip[tuple[int, int]]:
    return zip(entity.tolist(), session.tolist(), strict=True)


def _disagreement(candidates: pd.DataFrame, family: int, fdr: float) -> Disagreement:
    is_passed = (candidates["q_value"] <= fdr).to_numpy()
    own = candidates["p_own_timing"].to_numpy(dtype=float)
    adjusted = benjamini_hochberg(own, family) if own.size else own
    return Disagreement(
        int((is_passed & (own > fdr)).sum()), int((~is_passed & (adjusted <= fdr)).sum())
    )
