"""Explaining away: order, what is set aside, who explains whom, ties, and sharpening."""

from dataclasses import replace
from pathlib import Path

import naive
import numpy as np
import pytest
from tiny_worlds import random_world, write_study
from worlds import Plant, make_world, write_world

from miner import Hunt, hunt, load_study
from miner.assemble import assemble
from miner.discovery import Adjuster, find
from miner.explain_away import explain_away
from miner.search import cases_of
from miner.sharper import sharper_p
from miner.time_split import discovery_slice

RULES_ONLY = {"testing": {"placebo": 0, "permutations": 0}, "holdout": {"folds": 0}}
PAIR, TRIPLE = Plant((0, 1), 0.3, 400), Plant((2, 3, 4), 0.5, 200)


def found_in(path: Path) -> tuple[list, Adjuster, int]:
    """Every case of a study judged over the whole calendar, its adjuster, and min_triggers."""
    study = load_study(path)
    inputs = assemble(study)
    whole = discovery_slice(inputs.panel, inputs.panel.n_sessions - 1)
    cases = cases_of(whole, inputs.targets, study)
    found = [
        find(case, min_hits=study.mining.min_hits, max_size=study.mining.max_size) for case in cases
    ]
    return found, Adjuster(found, "bh"), study.mining.min_triggers


@pytest.fixture(scope="module")
def planted(tmp_path_factory):
    world = make_world(
        2, n_entities=150, n_sessions=400, n_types=7, alerts_per_type=700, planted=[PAIR, TRIPLE]
    )
    return found_in(write_world(world, tmp_path_factory.mktemp("planted")))


def name(found, case: int, row: int) -> tuple[int, ...]:
    return found[case].case.unit.triggers.combos[row]


def test_the_first_rule_has_the_largest_excess_and_everything_shrinks_to_the_planted(planted):
    found, adjuster, min_triggers = planted
    explained = explain_away(found, adjuster, fdr=0.05, min_triggers=min_triggers)
    (f,) = found
    combos = [name(found, rule.case, rule.row) for rule in explained.rules]
    assert set(combos) == {(0, 1), (2, 3, 4)}
    adjusted = adjuster.adjusted([f.p])[0]
    passing = np.flatnonzero(adjusted <= 0.05)
    excess = (f.hits - f.expected) / np.sqrt(f.variance)
    first = explained.rules[0]
    assert first.row == passing[np.argmax(excess[passing])]
    assert first.excess == pytest.approx(excess[first.row])
    assert (first.hits, first.triggers) == (
        f.hits[first.row],
        f.case.unit.triggers.count_c[first.row],
    )
    assert set(explained.explained_by) == {(0, row) for row in passing} - {
        (0, rule.row) for rule in explained.rules
    }


def test_later_steps_stand_on_cells_far_from_earlier_rules(planted):
    """The second rule's counts are those of its triggers more than a horizon from the first's."""
    found, adjuster, min_triggers = planted
    rules = explain_away(found, adjuster, fdr=0.05, min_triggers=min_triggers).rules
    (f,) = found
    table, horizon = f.case.unit.triggers, f.case.unit.horizon
    first = set(zip(*(x.tolist() for x in table.of(rules[0].row)), strict=True))
    part = slice(table.offset_c[rules[1].row], table.offset_c[rules[1].row + 1])
    entity, session = table.of(rules[1].row)
    is_far = np.array([
        not any((e, t) in first for t in range(s - horizon, s + horizon + 1))
        for e, s in zip(entity.tolist(), session.tolist(), strict=True)
    ])  # fmt: skip
    assert rules[1].triggers == is_far.sum() < is_far.size
    assert rules[1].hits == f.case.is_hit[part][is_far].sum()


def test_whom_a_combination_points_to_took_most_of_its_triggers(planted):
    found, adjuster, min_triggers = planted
    explained = explain_away(found, adjuster, fdr=0.05, min_triggers=min_triggers)
    combos = [set(name(found, rule.case, rule.row)) for rule in explained.rules]
    for (case, row), place in explained.explained_by.items():
        mine = set(name(found, case, row))
        if mine & combos[place] and not mine & combos[1 - place]:
            continue
        assert len(mine & combos[place]) >= len(mine & combos[1 - place])
    assert len(explained.explained_by) > 5


def test_rules_of_one_stratum_leave_the_others_alone(tmp_path):
    """A link planted in one size band: found there and pooled, its step untouched elsewhere."""
    plants = [Plant((0, 1), 0.5, 150, stratum="small"), Plant((2, 3), 0.4, 150, stratum="large")]
    world = make_world(
        3, n_entities=200, n_sessions=400, n_types=5, alerts_per_type=700, planted=plants
    )
    path = write_world(world, tmp_path, strata=True)
    found, adjuster, min_triggers = found_in(path)
    explained = explain_away(found, adjuster, fdr=0.05, min_triggers=min_triggers)
    where = {(found[r.case].case.unit.stratum, name(found, r.case, r.row)): r
             for r in explained.rules}  # fmt: skip
    planted = {("small", (0, 1)), ("large", (2, 3)), ("all", (0, 1)), ("all", (2, 3))}
    assert planted <= set(where)
    for stratum, combo in (("small", (0, 1)), ("large", (2, 3))):
        rule = where[stratum, combo]
        f = found[rule.case]
        assert rule.hits == f.hits[rule.row]
        assert rule.p == f.p[rule.row]


def test_ties_go_to_the_smaller_and_then_to_the_first_by_name(tmp_path):
    """Two types that always alert together make three combinations with the same triggers."""
    world = random_world(5, groups="none", coverage=False, two_targets=False, fades=False)
    twins = {(e, kind, t) for e, _, t in world.alerts if (e, "delay", t) in world.alerts
             and (e, "gap", t) in world.alerts for kind in ("aa", "bb")}  # fmt: skip
    alerts = {row for row in world.alerts if row[1] in ("memo", "spike")} | twins
    path = write_study(replace(world, alerts=frozenset(alerts)), tmp_path, placebo=0)
    result = hunt(path)
    assert result.rules["combination"].tolist()[0] == "aa"
    rows = result.candidates.set_index("combination")
    assert rows.loc[["aa", "bb", "aa + bb"], "p_value"].nunique() == 1
    assert rows.loc[["bb", "aa + bb"], "explained_by"].tolist() == ["aa", "aa"]


def test_a_rule_may_sharpen_another_whichever_came_first(tmp_path):
    """Seed 2: the pair has the larger excess. Seed 1: the triple has, and keeps its place."""
    plants = [Plant((0, 1), 0.2, 500), Plant((0, 1, 2), 0.8, 120)]
    orders = []
    for seed in (1, 2):
        world = make_world(seed, n_entities=300, n_sessions=500, n_types=6, planted=plants)
        result: Hunt = hunt(write_world(world, tmp_path / str(seed), settings=RULES_ONLY))
        rules = result.rules.set_index("combination")
        orders.append(rules.index.tolist())
        assert rules["sharpens"].to_dict() == {"k00 + k01": "", "k00 + k01 + k02": "k00 + k01"}
        assert (rules["explained_by"] == "").all()
        (told,) = (rule for rule in result.record["rules"] if rule["sharpens"] is not None)
        assert told["sharpens"] == "k00 + k01"
        assert told["p_sharper"] <= 0.05
        assert 0 < told["holdout"]["p_sharper"] < 0.05
    assert orders == [["k00 + k01 + k02", "k00 + k01"], ["k00 + k01", "k00 + k01 + k02"]]


def test_a_superset_as_good_as_its_pair_is_not_sharper(planted):
    """p of being sharper is not small for supersets that only add background types."""
    (f,) = planted[0]
    combos = f.case.unit.triggers.combos
    everything = np.ones(f.case.is_hit.size, dtype=bool)
    p = [
        sharper_p(f.case, f.margins, everything, row, combos.index((0, 1)))
        for row, combo in enumerate(combos)
        if {0, 1} < set(combo)
    ]
    assert len(p) >= 3
    assert min(p) > 0.01


def test_nothing_to_explain_without_candidates(tmp_path):
    world = random_world(1, planted=False, groups="none", coverage=False)
    path = write_study(replace(world, min_triggers=500), tmp_path, placebo=2)
    result = hunt(path)
    assert len(result.candidates) == len(result.rules) == 0
    assert result.record["counts"]["family"] == 0
    assert naive.hunt(replace(world, min_triggers=500), 0.05, 0.05) == []
