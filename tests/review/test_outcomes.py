"""Closed triggers, expected rates, evidence and proposals against brute force."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from types import SimpleNamespace

import naive
import numpy as np
import pytest

from miner.review.drafting import ALONE, Draft, in_book
from miner.review.records import RuleReview
from miner.sequential.clusters import hang_together
from miner.sequential.evidence import e_process
from miner.sequential.interval import confidence_sequence
from tests.review.desk import (
    ADOPTED,
    HORIZON,
    QUARTERS,
    make_desk,
    rule,
    session,
    small_world,
)

UNIT = ("upset", "all")
WORLDS = {
    "plain": {"seed": 1, "sectors": False},
    "sectors": {"seed": 2},
    "covered": {"seed": 3, "coverage": True},
    "dead": {"seed": 4, "hold": 0.05},
}
COMBINATIONS = (("a", "b"), ("c",), ("a", "d"))


@cache
def world_of(name: str) -> naive.World:
    return small_world(**WORLDS[name])


@cache
def rates_in(world: naive.World, quarter: str) -> dict[naive.Cell, float]:
    first, last = QUARTERS[quarter]
    return naive.margins_of_unit(world, UNIT, (first - HORIZON, last))


@cache
def closed_in(world: naive.World, combination: tuple[str, ...], quarter: str) -> list[tuple]:
    """(entity, session, hit, expected rate, peer) of what closed in a quarter since adoption."""
    first, last = QUARTERS[quarter]
    segment = (first - HORIZON, last)
    rates = rates_in(world, quarter)
    return [
        (e, t, naive.followed(world, "upset", (e, t)), rates[e, t], naive.peer_at(world, e, t))
        for e, t in naive.eligible_triggers(world, UNIT, segment, combination)
        if t >= session(ADOPTED)
    ]


def status_of(one: RuleReview, min_triggers: int = 10) -> str:
    """The proposal, from the numbers, as the rules of the review say it."""
    if one.since.triggers < min_triggers:
        return "too early"
    if one.broken is not None and one.broken.e >= 20:
        return "retire"
    year = one.last_year
    if one.broken is not None and one.broken.e >= 5:
        return "watch"
    if year.triggers and year.low <= year.expected_hits / year.triggers:
        return "watch"
    return "keep"


@pytest.fixture(scope="module", params=list(WORLDS))
def reviewed(request, tmp_path_factory):
    world = world_of(request.param)
    rules = [rule(*combination) for combination in COMBINATIONS]
    rules.append(rule("b", "c", precision=None))
    desk = make_desk(
        tmp_path_factory.mktemp("desk"), world, rules, restart_quarters=2, keep_share=0.8
    )
    return request.param, world, desk.review("2021Q4")


def test_triggers_outcomes_and_rates_are_the_twins(reviewed):
    _, world, result = reviewed
    n_compared = 0
    for one, combination in zip(result.rules, COMBINATIONS, strict=False):
        for quarter in QUARTERS:
            twin = closed_in(world, combination, quarter)
            mine = {(t.entity, session(t.session)): t for t in one.triggers if t.quarter == quarter}
            assert set(mine) == {(e, t) for e, t, *_ in twin}
            for e, t, hit, rate, peer in twin:
                trigger = mine[e, t]
                assert trigger.hit == hit
                assert trigger.expected == pytest.approx(rate, abs=1e-7)
                assert trigger.peer == peer
                assert session(trigger.close) == t + HORIZON
                n_compared += 1
            (line,) = (line for line in one.quarters if line.quarter == quarter)
            assert (line.triggers, line.hits) == (len(twin), sum(hit for _, _, hit, *_ in twin))
            assert line.expected_hits == pytest.approx(sum(row[3] for row in twin), abs=1e-6)
    assert n_compared > 150


def test_counts_and_intervals_are_the_twins(reviewed):
    _, world, result = reviewed
    for one, combination in zip(result.rules, COMBINATIONS, strict=False):
        for span, quarters in (
            (one.this_quarter, ["2021Q4"]),
            (one.last_year, list(QUARTERS)),
        ):
            rows = [row for q in quarters for row in closed_in(world, combination, q)]
            hits = [int(row[2]) for row in rows]
            low, high, is_few = naive.precision_interval([row[:2] for row in rows], hits, HORIZON)
            assert (span.triggers, span.hits) == (len(rows), sum(hits))
            assert span.low == pytest.approx(low, abs=1e-9)
            assert span.high == pytest.approx(high, abs=1e-9)
            assert span.is_few == is_few


def test_evidence_is_that_of_the_twins_triggers(reviewed):
    _, world, result = reviewed
    last = np.array([b for _, b in QUARTERS.values()])
    for one, combination in zip(result.rules, COMBINATIONS, strict=False):
        rows = [row for q in QUARTERS for row in closed_in(world, combination, q)]
        entity, t, hit, rate, peer = (np.array(column) for column in zip(*rows, strict=True))
        codes = [np.unique(column, return_inverse=True)[1] for column in (entity, peer)]
        groups = hang_together(codes[0], t, codes[1], HORIZON, last)
        up = e_process(hit, rate, groups, 4, "up", reference=0.06, restart_quarters=2)
        floor = np.full(hit.size, 0.4)
        down = e_process(hit, floor, groups, 4, "down", reference=0.4, restart_quarters=2)
        bounds = confidence_sequence(hit, groups, 4)
        assert one.keep_above == pytest.approx(0.4)
        assert math.log(one.works.e) == pytest.approx(up.log_e_q[-1], abs=1e-6)
        assert math.log(one.broken.e) == pytest.approx(down.log_e_q[-1], abs=1e-6)
        for line, log_up, log_down in zip(one.quarters, up.log_e_q, down.log_e_q, strict=True):
            assert math.log(line.e_works) == pytest.approx(log_up, abs=1e-6)
            assert math.log(line.e_broken) == pytest.approx(log_down, abs=1e-6)
        assert one.since.low == pytest.approx(bounds.low_q[-1], abs=1e-6)
        assert one.since.high == pytest.approx(bounds.high_q[-1], abs=1e-6)
        assert one.in_evidence + one.waiting == len(rows)
        assert len(one.evidence) == one.clusters


def test_proposals_follow_from_the_numbers(reviewed):
    name, _, result = reviewed
    for one in result.rules:
        assert one.status == status_of(one)
        assert one.reasons
    pair = result.rules[0]
    assert pair.status == ("retire" if name == "dead" else "keep")
    assert result.counts == {
        status: sum(one.status == status for one in result.rules)
        for status in ("retire", "watch", "keep", "too early")
    }


def test_what_an_interval_shows_and_what_does_not_stand_are_told(reviewed):
    _, _, result = reviewed
    for one in result.rules:
        told, year = " ".join(one.reasons), one.last_year
        expected = year.expected_hits / year.triggers
        is_told = one.status != "too early" and year.low <= expected
        assert ("not yet shown to be better than the" in told) == (
            is_told and year.high >= expected
        )
        assert ("worse than the" in told) == (is_told and year.high < expected)
        alone = one.status == "retire" and not one.broken.in_book
        assert (ALONE in one.reasons) == alone


def test_a_retirement_that_is_one_rules_alone_says_so(reviewed):
    _, _, result = reviewed
    pair = result.rules[0]
    drafts = [
        Draft(replace(pair, id=name, status="retire"), SimpleNamespace(
            log_works=0.0, log_broken=np.log(e)), pair.adopted, ())
        for name, e in (("a", 30.0), ("b", 1.0))
    ]  # fmt: skip
    first, _ = in_book([draft.review for draft in drafts], drafts, 0.05)
    assert not first.broken.in_book
    assert ALONE in first.reasons
    (single,) = in_book([drafts[0].review], drafts[:1], 0.05)
    assert single.broken.in_book
    assert ALONE not in single.reasons


def test_without_a_promise_none_is_tested(reviewed):
    _, _, result = reviewed
    silent = result.rules[-1]
    assert silent.broken is None
    assert silent.keep_above is None
    assert any("promises no precision" in reason for reason in silent.reasons)


def test_e_bh_over_the_book(reviewed):
    _, _, result = reviewed
    for name, m in (("works", 4), ("broken", 3)):
        parts = sorted(
            (e for one in result.rules if (e := getattr(one, name)) is not None),
            key=lambda e: -e.e,
        )
        assert len(parts) == m
        passing = [k for k, e in enumerate(parts, start=1) if e.e >= m / (k * 0.05)]
        n_passing = max(passing, default=0)
        assert [e.in_book for e in parts] == [k <= n_passing for k in range(1, m + 1)]
