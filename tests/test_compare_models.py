"""Classifiers beside the rules: equal numbers of triggers, nothing from the holdout in the fit."""

import numpy as np
import pytest
import worlds

from miner import compare_models, load_study
from miner.assemble import assemble
from miner.chosen import ChosenRule
from miner.hunting import split_sessions
from miner.kernels import windows
from miner.time_split import discovery_slice, holdout_slice


@pytest.fixture(scope="module")
def parts(tmp_path_factory):
    plant = worlds.Plant((0, 1), 0.6, 300)
    world = worlds.make_world(
        5, n_entities=60, n_sessions=400, n_types=5, base_rate=0.03, alerts_per_type=500,
        busy_names=0.5, planted=(plant,),
    )  # fmt: skip
    study = load_study(worlds.write_world(world, tmp_path_factory.mktemp("models")))
    inputs = assemble(study)
    last, first = split_sessions(inputs)
    early = discovery_slice(inputs.panel, last)
    late = holdout_slice(inputs.panel, first, inputs.panel.n_sessions - 1)
    rule = ChosenRule("upset", "all", None, (0, 1), 0.5)
    return early, late, inputs.calendar.dates, [rule], study


def test_each_classifier_triggers_as_often_as_the_rules(parts):
    early, late, dates, rules, study = parts
    records = compare_models.compare_models(early, late, dates, rules, [True], study)
    assert [record["against"] for record in records] == ["rules", "confirmed rules"]
    for record in records:
        assert record["triggers"] >= 20
        assert record[record["against"]] > 0.3
        for name in ("gradient boosting", "logistic regression"):
            assert 0.9 * record["triggers"] <= record[f"{name} triggers"] <= record["triggers"]
            # the planted pair is there to be learnt: well above the base rate of 3 %
            assert record[name] > 0.1


def test_features_are_known_at_their_session(parts):
    """Moving what comes after a session changes no feature at it."""
    early, late, dates, _, study = parts
    case = compare_models._case(late, "upset", study)
    features = compare_models._Features(compare_models._case(early, "upset", study), dates)
    entity, session = np.nonzero(case.unit.is_open_et)
    now = int(np.median(session))
    kept = session <= now
    cells = entity[kept], session[kept]
    cut = compare_models._case(
        type(late)(late.panel.until(now + 1), late.first, now), "upset", study
    )
    assert kept.sum() > 1000
    np.testing.assert_array_equal(features.of(case, cells), features.of(cut, cells))


def test_spaced_cells_against_a_loop():
    rank = np.random.default_rng(1).permutation(7 * 40).reshape(7, 40)
    entity, session = windows.spaced(rank, 90, 4)
    expected = []
    for e in range(7):
        last = -99
        for t in range(40):
            if rank[e, t] < 90 and t - last >= 4:
                expected.append((e, t))
                last = t
    assert list(zip(entity, session, strict=True)) == expected
