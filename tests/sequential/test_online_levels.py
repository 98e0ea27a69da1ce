"""LORD++, SAFFRON and ADDIS against printed levels, twins by the papers' formulas, and batches."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from miner.sequential import online
from miner.sequential.online import PROCEDURES, Tested, next_levels, test_batch
from tests.sequential import slow_twins as slow

# the example of the onlineFDR package (Robertson et al. 2019, Bioinformatics 35:4196)
P = [2.90e-8, 0.06743, 0.01514, 0.08174, 0.00171, 3.60e-5, 0.79149, 0.27201]
P += [0.28295, 7.59e-8, 0.69274, 0.30443, 0.00136, 0.72342, 0.54757]
LORD = [0.0002675839, 0.0024664457, 0.0005732818, 0.0004872805, 0.0004059066, 0.0003447286]
LORD += [0.0029745013, 0.0008450114, 0.0007305648, 0.0006243143, 0.0032185913, 0.0010617227]
LORD += [0.0009256825, 0.0008019657, 0.0007059610]
SAFFRON = [0.005468627, *[0.010937254] * 4, 0.021874508, 0.032811762, *[0.010823845] * 3]
SAFFRON += [0.021761099, 0.009265591, 0.009265591, 0.020202846, 0.009064367]


def one_by_one(procedure: online.Procedure, p: list[float], alpha: float = 0.05) -> list[Tested]:
    history: list[Tested] = []
    for value in p:
        history += test_batch(procedure, history, np.array([value]), alpha)
    return history


@pytest.mark.parametrize(
    ("procedure", "levels", "found", "digit"),
    [("lord++", LORD, [1, 6, 10], 5.1e-11), ("saffron", SAFFRON, [1, 5, 6, 10, 13], 5.1e-10)],
)
def test_printed_levels(procedure, levels, found, digit) -> None:
    history = one_by_one(procedure, P)
    np.testing.assert_allclose([t.level for t in history], levels, rtol=0, atol=digit)
    assert [i for i, t in enumerate(history, 1) if t.is_rejected] == found


p_values = st.lists(st.floats(0, 1) | st.floats(0, 0.01) | st.just(0.0), max_size=40)


@settings(max_examples=100, deadline=None)
@given(p_values, st.sampled_from([0.05, 0.2]))
def test_levels_agree_with_the_papers_formulas(p, alpha) -> None:
    twins = {
        "lord++": slow.lord(p, alpha),
        "saffron": slow.addis(p, alpha, 0.5, 1.0),
        "addis": slow.addis(p, alpha, 0.25, 0.5),
    }
    for procedure in PROCEDURES:
        made = [t.level for t in one_by_one(procedure, p, alpha)]
        np.testing.assert_allclose(made, twins[procedure], rtol=1e-12)


def test_addis_without_discarding_is_saffron(monkeypatch) -> None:
    monkeypatch.setitem(online.CANDIDATE_DISCARD, "addis", (0.5, 1.0))
    addis, saffron = one_by_one("addis", P), one_by_one("saffron", P)
    assert [t.level for t in addis] == [t.level for t in saffron]
    assert sum(t.is_rejected for t in addis) == 5


@settings(max_examples=60, deadline=None)
@given(p_values, st.integers(1, 6), st.sampled_from(PROCEDURES))
def test_a_batch_is_tested_at_the_least_levels_its_own_outcomes_could_give(p, n, procedure) -> None:
    history = one_by_one(procedure, p)
    batch = next_levels(procedure, history, n)
    assert batch.shape == (n,)
    assert (np.diff(batch) <= 0).all()
    random = np.random.default_rng(len(p))
    for _ in range(5):
        follow = one_by_one(procedure, p + random.random(n).tolist())[len(p) :]
        assert (np.array([t.level for t in follow]) >= batch * (1 - 1e-12)).all()
    # all in the batch count in full: no candidate, none discarded
    middling = one_by_one(procedure, p + [0.4] * n if procedure == "addis" else p + [0.9] * n)
    np.testing.assert_allclose([t.level for t in middling[len(p) :]], batch, rtol=1e-12)


def test_state_is_the_history_alone() -> None:
    for procedure in PROCEDURES:
        history = one_by_one(procedure, P)
        again = [Tested(t.p, t.level, t.is_rejected) for t in history[:9]]
        assert next_levels(procedure, again, 1)[0] == history[9].level
        assert next_levels(procedure, [], 0).size == 0
    with pytest.raises(ValueError, match=r"must be one of lord\+\+, saffron, addis"):
        next_levels("bonferroni", [], 1)  # type: ignore[arg-type]


def test_weights_fall_and_add_up_to_at_most_one() -> None:
    last = 1e6
    root = np.sqrt(np.log(last))
    # the integrals from the last on: log x / (x exp(sqrt(log x))) and x^-1.6
    beyond = {
        online.lord_weights: 0.07720838 * 2 * np.exp(-root) * np.polyval([1, 3, 6, 6], root),
        online.saffron_weights: 0.4374901658 / 0.6 * last**-0.6,
    }
    for weights, rest in beyond.items():
        made = weights(np.arange(1.0, last))
        assert (np.diff(made) < 0)[2:].all()
        assert 0.97 < made.sum() + rest <= 1.0 + 1e-6


@pytest.mark.parametrize("procedure", PROCEDURES)
def test_false_discoveries_are_held(procedure) -> None:
    random = np.random.default_rng(11)
    shares, power = [], []
    for _ in range(150):
        is_true = random.random(100) < 0.2
        p = np.where(is_true, random.beta(0.1, 8, 100), random.random(100))
        history: list[Tested] = []
        for start in range(0, 100, 5):
            history += test_batch(procedure, history, p[start : start + 5], 0.1)
        found = np.array([t.is_rejected for t in history])
        shares.append((found & ~is_true).sum() / max(found.sum(), 1))
        power.append((found & is_true).sum() / is_true.sum())
    assert np.mean(shares) <= 0.1 + 2 * np.std(shares) / np.sqrt(150)
    assert np.mean(power) > 0.3
