"""The hazard law of the margins, and the warnings of a hunt about itself."""

import numpy as np
import pytest
import worlds

from miner import hunt
from miner.columns import HAZARD
from miner.nulls.margins import fit_margins
from miner.panel import Labels


def test_the_hazard_law_holds_the_margins_and_multiplies():
    rng = np.random.default_rng(3)
    is_open = rng.random((12, 30)) < 0.9
    is_window = is_open & (rng.random((12, 30)) < 0.4)
    group = np.repeat(np.arange(12) % 2, 30).reshape(12, 30).astype(np.int16)
    fit = fit_margins(is_open, is_window, Labels(("a", "b"), group), law=HAZARD)
    q = np.full((12, 30), np.nan)
    cells = np.nonzero(is_open)
    q[cells] = fit.rates(*cells)
    np.testing.assert_allclose(np.nansum(q, axis=1), is_window.sum(axis=1), rtol=1e-9)
    for g in range(2):
        mine = q[group[:, 0] == g]
        np.testing.assert_allclose(
            np.nansum(mine, axis=0), is_window[group[:, 0] == g].sum(axis=0), rtol=1e-9, atol=1e-9
        )
        # -log(1 - q) is a product of a row and a column: wherever two rows are both open and
        # neither cell is sure, their ratio is the same
        for a in mine:
            with np.errstate(divide="ignore", invalid="ignore"):
                ratio = np.log1p(-a) / np.log1p(-mine[0])
            inside = (a > 0) & (a < 1) & (mine[0] > 0) & (mine[0] < 1)
            assert inside.sum() > 5
            np.testing.assert_allclose(ratio[inside], np.median(ratio[inside]), rtol=1e-7)


def warnings_of(folder, seed, settings=None, **drivers):
    world = worlds.make_world(
        seed, n_entities=200, n_sessions=500, n_types=10, alerts_per_type=1500, **drivers
    )
    quick = {"permutations": 500, "placebo": 0} | (settings or {})
    study = worlds.write_world(
        world, folder / str(seed), settings={"testing": quick, "holdout": {"folds": 0}}
    )
    return " ".join(hunt(study).record["warnings"])


@pytest.mark.parametrize("seed", [0, pytest.param(1, marks=pytest.mark.slow)])
def test_a_family_that_leans_as_a_whole_is_told(tmp_path, seed):
    spells = warnings_of(tmp_path, seed, base_rate=0.05, busy_spell=0.5)
    assert "leans towards events" in spells


@pytest.mark.parametrize("seed", [0, *(pytest.param(s, marks=pytest.mark.slow) for s in (1, 2, 3))])
def test_rules_alone_do_not_make_a_family_lean(tmp_path, seed):
    plants = (worlds.Plant((0, 1), 0.4, 300), worlds.Plant((2, 3, 4), 0.5, 200))
    drivers = {"season": 0.6, "market_shocks": 0.6, "busy_names": 0.6, "planted": plants}
    assert "leans" not in warnings_of(tmp_path, seed, base_rate=0.05, **drivers)


def test_high_base_rates_point_to_the_hazard_law(tmp_path):
    drivers = {"base_rate": 0.2, "busy_names": 0.5}
    assert "hazard" in warnings_of(tmp_path / "odds", 0, **drivers)
    assert "hazard" not in warnings_of(tmp_path / "hazard", 0, {"margins": "hazard"}, **drivers)


def test_a_small_family_around_one_rule_is_no_reason_for_distrust(tmp_path):
    """With five types hardly anything shares no type with the rule, so nothing can be told."""
    for seed in range(2):
        world = worlds.make_world(
            seed, n_entities=120, n_sessions=500, n_types=5, base_rate=0.04, alerts_per_type=900,
            planted=(worlds.Plant((0, 1), 0.4, 250),),
        )  # fmt: skip
        study = worlds.write_world(
            world,
            tmp_path / str(seed),
            settings={"testing": {"permutations": 300, "placebo": 0}, "holdout": {"folds": 0}},
        )
        result = hunt(study)
        assert len(result.rules) >= 1
        assert not [text for text in result.record["warnings"] if "leans" in text]
