"""Closed triggers on hard little worlds: strata that change, types with lives of their own, two
targets, and price moves that are known only later."""

from __future__ import annotations

from dataclasses import replace

import naive
import numpy as np
import pytest
from tiny_worlds import TYPES, random_world, write_study

from miner import load_study
from miner.assemble import assemble
from miner.review.cutting import cut_inputs
from miner.review.outcomes import closed_triggers, is_known, window
from miner.review.quarters import Quarter, quarters_of
from miner.rule_book import BookRule, rule_id

FIRST_QUARTER = (0, 89)  # of 2021, on every day


def rules_of(world: naive.World, rest: int) -> list[BookRule]:
    """Singles and pairs in every stratum and for every target."""
    return [
        BookRule(
            id=rule_id(target, stratum, combination, world.lookback, world.horizon, rest),
            target=target, stratum=stratum, combination=combination,
            lookback=world.lookback, horizon=world.horizon, rest=rest,
        )
        for target, stratum in naive.units(world)
        for combination in (("delay",), ("gap", "memo"), ("delay", "gap"), ("halt", "spike"))
    ]  # fmt: skip


@pytest.mark.parametrize("seed", range(6))
def test_against_the_twin(tmp_path, seed):
    world = random_world(
        seed, groups=("both", "strata", "peers")[seed % 3], coverage=seed % 2 == 0, pooled=True,
        two_targets=True,
    )  # fmt: skip
    inputs = assemble(load_study(write_study(world, tmp_path)))
    early = cut_inputs(inputs, FIRST_QUARTER[1] + 1)
    rules = rules_of(world, world.rest)
    (quarter,) = quarters_of(early.calendar.dates)
    found = closed_triggers(early.panel, rules, [quarter], settle=9, n_workers=2)
    n_compared = 0
    for rule, closed in zip(rules, found, strict=True):
        unit = (rule.target, rule.stratum)
        segment = (FIRST_QUARTER[0] - world.horizon, FIRST_QUARTER[1])
        rates = naive.margins_of_unit(world, unit, segment)
        cells = naive.eligible_triggers(world, unit, segment, rule.combination)
        mine = [
            (early.panel.entity_names[e], int(t))
            for e, t in zip(closed.entity, closed.session, strict=True)
        ]
        assert sorted(mine) == sorted(cells)
        for cell, hit, rate in zip(mine, closed.is_hit, closed.rate, strict=True):
            assert hit == naive.followed(world, rule.target, cell)
            assert rate == pytest.approx(rates[cell], abs=1e-6)
            n_compared += 1
        assert (closed.close == closed.session + world.horizon).all()
    assert n_compared > 100


def test_rules_of_another_rest_have_their_own_triggers(tmp_path):
    world = random_world(3, groups="none", coverage=False, two_targets=False)
    inputs = assemble(load_study(write_study(world, tmp_path)))
    rules = [*rules_of(world, world.rest), *rules_of(world, 40)]
    early = cut_inputs(inputs, 90)
    closed = closed_triggers(early.panel, rules, quarters_of(early.calendar.dates), settle=0)
    half = len(rules) // 2
    for far in closed[half:]:
        for e in set(far.entity.tolist()):
            assert (np.diff(far.session[far.entity == e]) >= 40).all()
    assert sum(c.session.size for c in closed[:half]) > sum(c.session.size for c in closed[half:])


def test_a_target_that_is_known_late_closes_late(tmp_path):
    """An event counts when it was known by the quarter's end, and triggers wait for it."""
    world = random_world(4, groups="none", coverage=False, two_targets=False)
    inputs = assemble(load_study(write_study(world, tmp_path)))
    entity, session = inputs.panel.events["upset"]
    rng = np.random.default_rng(0)
    known = (session + rng.integers(0, 12, session.size)).astype(np.int32)
    panel = replace(inputs.panel, known={"upset": known})
    settle, last = 7, 89
    early = panel.until(last + 1)
    (closed,) = closed_triggers(
        early, rules_of(world, world.rest)[:1], [Quarter("2021Q1", 0, last)], settle=settle
    )
    seen = {(int(e), int(s)) for e, s, k in zip(entity, session, known, strict=True) if k <= last}
    assert (closed.close == closed.session + world.horizon + settle).all()
    assert closed.close.max() <= last
    assert closed.session.size > 20
    for e, t, hit in zip(closed.entity, closed.session, closed.is_hit, strict=True):
        within = {(int(e), s) for s in range(int(t) + 1, int(t) + world.horizon + 1)}
        assert hit == bool(within & seen)


def test_a_window_of_the_panel_is_the_panel(tmp_path):
    world = random_world(2, groups="both", coverage=True, pooled=True, two_targets=False)
    panel = assemble(load_study(write_study(world, tmp_path))).panel
    part, offset = window(panel, 100, 128, known_by=120)
    assert (offset, part.n_sessions) == (64, 64)
    assert np.array_equal(part.cover_eqw[:, :, 0], panel.cover_eqw[:, :, 1])
    assert np.array_equal(part.peers.code_et, panel.peers.code_et[:, 64:128])
    mine = {(e, s + 64) for e, s in zip(*part.events["upset"], strict=True)}
    assert mine == {(e, s) for e, s in zip(*panel.events["upset"], strict=True) if 64 <= s <= 120}


def test_what_a_panel_does_not_know(tmp_path):
    world = random_world(2, groups="none", coverage=False, two_targets=False)
    panel = assemble(load_study(write_study(world, tmp_path))).panel
    rule = rules_of(world, 5)[0]
    assert set(rule.combination) <= set(TYPES)
    assert is_known(panel, rule)
    for other in ({"target": "x"}, {"stratum": "x"}, {"combination": ("x",)}):
        unknown = rule.model_copy(update=other)
        assert not is_known(panel, unknown)
        (closed,) = closed_triggers(panel, [unknown], [Quarter("2021Q1", 0, 89)], settle=0)
        assert closed.session.size == 0
