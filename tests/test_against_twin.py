"""The program on tiny studies on disk against the slow twin: every column of every row."""

from collections import Counter
from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import naive
import numpy as np
import pandas as pd
import pytest
from tiny_worlds import random_world, write_study

from miner import Hunt, hunt, load_study
from miner.columns import CANDIDATE_COLUMNS

LEVEL = 0.05
EVERYDAY = range(25)
TEXT = [name for name, kind in CANDIDATE_COLUMNS.items() if kind == "text"]
WHOLE = [name for name, kind in CANDIDATE_COLUMNS.items() if kind == "integer"]
NUMBERS = [name for name, kind in CANDIDATE_COLUMNS.items() if kind == "number"]


def hunt_both(world: naive.World, adjust: str = "bh") -> tuple[Hunt, list[dict[str, Any]]]:
    """The program's result on the world written to disk, and the twin's rows."""
    with TemporaryDirectory() as folder:
        study = load_study(write_study(world, Path(folder), adjust=adjust, placebo=0))
        study = replace(study, holdout=study.holdout.model_copy(update={"folds": 0}))
        result = hunt(study, n_workers=1)
    return result, naive.hunt(world, LEVEL, LEVEL, adjust)


@cache
def everyday(seed: int) -> tuple[naive.World, Hunt, list[dict[str, Any]]]:
    world = random_world(seed)
    return world, *hunt_both(world)


def name_of(row: dict[str, Any], order: int | None, rules: dict[int, dict[str, Any]]) -> str:
    """How a row names a rule: with target and stratum where those are not the row's own."""
    if order is None:
        return ""
    rule = rules[order]
    unit = rule["target"], rule["stratum"]
    of = "" if unit == (row["target"], row["stratum"]) else f" [{unit[0]}, {unit[1]}]"
    return rule["combination"] + of


def assert_same(result: Hunt, rows: list[dict[str, Any]]) -> None:
    """Counts, texts and verdicts equal; other numbers to nine digits."""
    rules = {row["rule_order"]: row for row in rows if row["rule_order"] is not None}
    twin = pd.DataFrame(rows).astype(dict.fromkeys(WHOLE, "Int64"))
    twin["sharpens"] = [name_of(row, row["sharpens_order"], rules) for row in rows]
    twin["explained_by"] = [name_of(row, row["explained_by_order"], rules) for row in rows]
    mine = result.candidates
    assert list(mine.columns) == list(CANDIDATE_COLUMNS)
    for name in (*TEXT, *WHOLE):
        assert mine[name].tolist() == twin[name].tolist(), name
    for name in NUMBERS:
        expected = twin[name].astype(float).to_numpy()
        np.testing.assert_allclose(mine[name], expected, rtol=1e-9, atol=1e-300, err_msg=name)

    assert len(result.record["rules"]) == len(result.rules) == len(rules)
    for order, told in enumerate(result.record["rules"], start=1):
        row, step = rules[order], told["step"]
        judged = row["judgement"]
        assert (step["triggers"], step["hits"]) == (row["step"].triggers, row["step"].hits)
        pairs = [
            (step["expected_hits"], row["step"].expected),
            (step["p"], row["step"].p),
            (told["holdout"]["p_holm"], judged.p_holm),
            (told["holdout"]["power"], judged.power),
            (told["holdout"]["p_sharper"], judged.sharper_p),
        ]
        if row["sharpens_order"] is None:
            pairs.append((step["standardised_excess"], row["step"].z))
        for mine_value, value in pairs:
            assert mine_value == (value if value is None else pytest.approx(value, rel=1e-8))
        assert told["holdout"]["too_few_clusters"] == judged.too_few_clusters
        assert told["holdout"]["verdict"] == row["verdict"]


@pytest.mark.parametrize("seed", EVERYDAY)
def test_a_hunt_is_the_twins(seed):
    world, result, rows = everyday(seed)
    assert_same(result, rows)
    families = [naive.family(world, unit) for unit in naive.units(world)]
    assert result.record["counts"]["family"] == sum(map(len, families))


def test_the_everyday_worlds_are_not_trivial():
    seen: Counter[str] = Counter()
    for seed in EVERYDAY:
        world, _, rows = everyday(seed)
        seen.update(row["verdict"] for row in rows)
        seen["sharpening"] += sum(row["sharpens"] is not None for row in rows)
        seen["coverage"] += world.coverage is not None
        seen["strata"] += world.strata is not None
        seen["peers"] += world.peers is not None
        seen["pooled"] += world.pooled
        seen["two targets"] += len(world.targets) == 2
        seen["two-way interval"] += any(
            row["judgement"] is not None and not row["judgement"].too_few_clusters for row in rows
        )
    assert min(seen["confirmed"], seen["refuted"], seen["underpowered"]) >= 3, seen
    assert min(seen["explained"], seen["not significant"]) >= 100, seen
    assert min(seen[x] for x in ("sharpening", "coverage", "strata", "peers")) >= 5, seen
    assert min(seen[x] for x in ("pooled", "two targets", "two-way interval")) >= 3, seen


@pytest.mark.parametrize("seed", [41, 42])
@pytest.mark.parametrize(
    "options",
    [
        {"groups": "both", "pooled": True, "coverage": True},
        {"two_targets": True, "groups": "strata", "pooled": True},
        {"fades": True, "coverage": True},
    ],
    ids=["pooled strata", "two targets", "fading"],
)
def test_a_hunt_is_the_twins_with(options, seed):
    world = random_world(seed, **options)
    result, rows = hunt_both(world)
    assert len({(row["target"], row["stratum"]) for row in rows}) == len(naive.units(world))
    assert_same(result, rows)


@pytest.mark.parametrize("seed", [3, 5, 8])
def test_a_hunt_under_benjamini_yekutieli_is_the_twins(seed):
    world, _, bh_rows = everyday(seed)
    result, rows = hunt_both(world, "by")
    assert_same(result, rows)
    assert any(a["q_value"] > b["q_value"] for a, b in zip(rows, bh_rows, strict=True))


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(100, 500))
def test_many_hunts_are_the_twins(seed):
    assert_same(*hunt_both(random_world(seed)))
