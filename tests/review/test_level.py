"""Rules that say nothing, watched for two years: the evidence that they work stays small.

The expected rates are fitted to the very quarter whose triggers they judge, so that this has to be
seen in worlds with everything that drives alerts and events alike.
"""

from __future__ import annotations

from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from worlds import Plant, make_world, write_world

from miner import load_study
from miner.assemble import assemble
from miner.review.outcomes import closed_triggers
from miner.review.quarters import quarters_of
from miner.rule_book import BookRule, rule_id
from miner.sequential.clusters import hang_together
from miner.sequential.evidence import e_process

KINDS = {
    "still": {},
    "driven": {"season": 0.6, "sector_shocks": 0.8, "busy_names": 0.8, "market_shocks": 0.4},
    "clustered": {"clustered_alerts": 0.8, "clustered_events": 0.8, "sector_shocks": 0.5},
}


def highest_evidence(folder: Path, seed: int, **world: object) -> tuple[np.ndarray, np.ndarray]:
    """By rule, evidence that it works at its highest and at the end, in logs, over eight quarters:
    every pair of six alert types."""
    made = make_world(
        seed, n_entities=150, n_sessions=731, n_types=6, base_rate=0.05, alerts_per_type=3500,
        **world,
    )  # fmt: skip
    inputs = assemble(load_study(write_world(made, folder)))
    quarters = quarters_of(inputs.calendar.dates)
    rules = [
        BookRule(
            id=rule_id("upset", "all", pair, 5, 5, 5),
            target="upset", combination=pair, lookback=5, horizon=5, rest=5,
        )
        for pair in combinations(made.type_names, 2)
    ]  # fmt: skip
    last = np.array([q.last for q in quarters])
    highest, final = [], []
    for closed in closed_triggers(inputs.panel, rules, quarters, settle=0, n_workers=2):
        groups = hang_together(closed.entity, closed.session, closed.peer, 5, last)
        e = e_process(closed.is_hit, closed.rate, groups, len(quarters), "up", reference=0.05)
        assert e.n_triggers_q[-1] > 50
        highest.append(max(0.0, e.log_e_c.max()))
        final.append(e.log_e_q[-1])
    return np.array(highest), np.array(final)


def level(tmp_path: Path, n_worlds: int, **world: object) -> tuple[float, float]:
    """Share of rules that ever reach 20, and the mean of the evidence at the end."""
    found = [highest_evidence(tmp_path / str(i), 100 + i, **world) for i in range(n_worlds)]
    highest = np.concatenate([part[0] for part in found])
    final = np.concatenate([part[1] for part in found])
    return float((highest >= np.log(20)).mean()), float(np.exp(final).mean())


@pytest.mark.slow
@pytest.mark.parametrize("kind", list(KINDS))
def test_rules_that_say_nothing_rarely_reach_twenty(tmp_path, kind):
    share, mean = level(tmp_path, 25, **KINDS[kind])
    assert share <= 0.05
    assert mean <= 1.3


def test_a_few_rules_that_say_nothing_and_one_that_does(tmp_path):
    share, mean = level(tmp_path, 2, **KINDS["driven"])
    assert share <= 0.05
    assert mean <= 1.5
    plant = Plant((0, 1), 0.4, 400)
    highest, _ = highest_evidence(tmp_path / "true", 9, planted=[plant])
    assert highest[0] > np.log(1000)
