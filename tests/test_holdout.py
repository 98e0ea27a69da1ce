"""The holdout: power, verdicts, Holm, the split and the walk-forward."""

from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import naive
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from worlds import Plant, WorldArrays, make_world, write_world

from miner import hunt, load_study
from miner.assemble import assemble
from miner.chosen import ChosenRule
from miner.columns import CONFIRMED, REFUTED, UNDERPOWERED
from miner.errors import SettingsError
from miner.holdout import judge_holdout, least_passing, power_at
from miner.hunting import split_sessions
from miner.judged import judge_on
from miner.kernels import tails
from miner.time_split import discovery_slice, holdout_slice
from miner.walk_forward import folds

WINDOWS = {"lookback": 5, "horizon": 5, "rest": 5}
rates_of = st.lists(st.sampled_from([0.0, 1.0, 0.01, 0.05, 0.2, 0.6]), min_size=1, max_size=40)


@given(rates_of, st.floats(0.0, 1.0), st.sampled_from([0.05, 0.01, 1e-4]))
def test_power_is_the_twins(rates, precision, level):
    """The twin takes the discovery precision and goes halfway itself."""
    expected = naive.holdout_power(rates, level, precision)
    halfway = 0.5 * (np.mean(rates) + precision)
    assert power_at(np.array(rates), halfway, level) == pytest.approx(expected, rel=1e-6, abs=1e-9)


@pytest.mark.parametrize(
    ("n", "times_base", "power"), [(20, 3, 0.17), (20, 5, 0.59), (40, 3, 0.39), (40, 5, 0.90)]
)
def test_power_of_equal_rates_is_the_binomial_one(n, times_base, power):
    """Base rate 5 %, level .05 / 5 (own calculation from the binomial law)."""
    found = power_at(np.full(n, 0.05), 0.05 * times_base, 0.01)
    assert found == pytest.approx(power, abs=0.006)


@given(rates_of, st.sampled_from([0.5, 0.05, 1e-3, 1e-9]))
def test_the_fewest_passing_hits_are_found(rates, level):
    q = np.array(rates)
    one_by_one = [x for x in range(q.size + 1) if tails.exact_tail(q, x) <= level]
    assert least_passing(q, level) == (one_by_one or [q.size + 1])[0]


# --- verdicts -------------------------------------------------------------------------------


def judged(folder: Path, world: WorldArrays, rules: list[tuple[tuple[int, ...], float]]):
    """Outcomes of rules with given discovery precisions, over the world's last 200 sessions."""
    panel = assemble(load_study(write_world(world, folder))).panel
    segment = holdout_slice(panel, panel.n_sessions - 200, panel.n_sessions - 1)
    chosen = [ChosenRule("upset", "all", None, combo, precision) for combo, precision in rules]
    return judge_holdout(segment, chosen, alpha=0.05, **WINDOWS), segment


@pytest.fixture(scope="module")
def outcomes(tmp_path_factory):
    world = make_world(
        4, n_entities=200, n_sessions=500, n_types=6, alerts_per_type=900,
        planted=[Plant((0, 1), 0.35, 300)],
    )  # fmt: skip
    rules = [((0, 1), 0.4), ((2,), 0.4), ((2, 3), 0.08), ((3, 4, 5), 0.4)]
    return judged(tmp_path_factory.mktemp("holdout"), world, rules)


def test_a_live_rule_is_confirmed_a_dead_one_refuted_and_a_thin_one_neither(outcomes):
    found, _ = outcomes
    assert [o.verdict for o in found] == [CONFIRMED, REFUTED, UNDERPOWERED, UNDERPOWERED]
    assert found[1].power >= 0.8 > found[2].power
    assert found[3].triggers < 5


def test_holdout_p_values_are_adjusted_over_the_rules(outcomes):
    found, _ = outcomes
    assert [o.p_holm for o in found] == pytest.approx(naive.holm([o.p for o in found]))
    assert found[0].p_holm == pytest.approx(4 * found[0].p)
    assert all(o.low <= o.precision <= o.high for o in found if o.triggers)


def test_the_holdout_refits_its_own_margins(outcomes):
    """Expected hits over all cells of the holdout are its own windows, whatever came before."""
    found, segment = outcomes
    alone = judge_on(segment, "upset", "all", None, [(2,)], **WINDOWS)
    assert found[1].expected == pytest.approx(alone.expected[0], rel=1e-9)
    panel = segment.panel
    entity, session = panel.events["upset"]
    later = session >= segment.first
    cut = replace(panel, events={"upset": (entity[later], session[later])})
    again = judge_on(replace(segment, panel=cut), "upset", "all", None, [(2,)], **WINDOWS)
    assert again.expected[0] == alone.expected[0]
    assert (alone.case.unit.is_open_et[:, : segment.first]).sum() == 0
    assert session[later].size < session.size


def test_a_rule_without_holdout_triggers_is_underpowered(tmp_path):
    world = make_world(6, n_entities=40, n_sessions=300, n_types=6, alerts_per_type=20)
    (outcome,), _ = judged(tmp_path, world, [((0, 1, 2, 3, 4), 0.9)])
    assert (outcome.triggers, outcome.p, outcome.power) == (0, 1.0, 0.0)
    assert outcome.verdict == UNDERPOWERED
    assert np.isnan(outcome.precision)


# --- the split ------------------------------------------------------------------------------


def study_with(folder: Path, n_sessions: int = 200, **holdout: object):
    world = make_world(1, n_entities=30, n_sessions=n_sessions, n_types=3, alerts_per_type=200)
    return load_study(write_world(world, folder, settings={"holdout": holdout}))


@pytest.mark.parametrize(
    ("holdout", "last", "first"),
    [
        ({"share": 0.3}, 129, 140),
        ({"share": 0.3, "embargo": 20}, 119, 140),
        ({"start": "2020-05-01"}, 110, 121),
    ],
)
def test_exactly_the_embargo_lies_between(holdout, last, first, tmp_path):
    inputs = assemble(study_with(tmp_path, **holdout))
    assert split_sessions(inputs) == (last, first)
    early = discovery_slice(inputs.panel, last)
    assert early.panel.n_sessions == last + 1
    assert max(s.max() for _, s in early.panel.events.values()) <= last
    late = holdout_slice(inputs.panel, first, inputs.panel.n_sessions - 1)
    assert (late.first, late.last) == (first, 199)


@pytest.mark.parametrize("share", [0.01, 0.96])
def test_a_split_without_room_for_a_trigger_is_refused(share, tmp_path):
    with pytest.raises(SettingsError, match=r"leave at least 10 sessions on either side"):
        hunt(study_with(tmp_path, share=share))


@given(st.integers(20, 900), st.integers(0, 8), st.integers(0, 60), st.integers(1, 40))
def test_folds_expand_keep_their_gap_and_cover_the_end(n_sessions, n_folds, gap, shortest):
    found = folds(n_sessions, n_folds, gap, shortest)
    assert len(found) <= n_folds
    for until, first, last in found:
        assert first - until - 1 == gap
        assert until + 1 >= shortest
        assert last - first + 1 >= shortest
    for (_, _, last), (until, first, _) in pairwise(found):
        assert first == last + 1
        assert until > 0
    if found:
        assert found[-1][2] == n_sessions - 1


def test_folds_are_equal_parts_of_the_calendar():
    assert folds(200, 4, 10, 20) == [(29, 40, 79), (69, 80, 119), (109, 120, 159), (149, 160, 199)]
    assert folds(200, 1, 10, 20) == [(89, 100, 199)]
    assert folds(100, 1, 40, 5) == [(9, 50, 99)]
    assert folds(100, 4, 25, 5) == []


def test_the_walk_forward_finds_the_living_rule_again_and_again(tmp_path):
    world = make_world(
        8, n_entities=200, n_sessions=600, n_types=5, alerts_per_type=900,
        planted=[Plant((0, 1), 0.4, 600)],
    )  # fmt: skip
    settings = {"testing": {"placebo": 0, "permutations": 0}, "holdout": {"folds": 4}}
    result = hunt(write_world(world, tmp_path, settings=settings))
    walk = result.walk_forward
    living = walk[walk["combination"] == "k00 + k01"]
    assert living["fold"].tolist() == [1, 2, 3, 4]
    assert (living["hits"] > 2 * living["expected_hits"]).all()
    assert (living["found_until"] < living["judged_from"]).all()
    by_fold = {told["fold"]: told for told in result.record["walk_forward"]}
    for fold, part in walk.groupby("fold"):
        assert by_fold[fold]["hits"] == part["hits"].sum()
    quarters = result.quarters[result.quarters["combination"] == "k00 + k01"]
    assert len(quarters) >= 6
    assert (quarters["precision"] * quarters["triggers"]).to_numpy() == pytest.approx(
        quarters["hits"].to_numpy()
    )
