"""Alarms about leaks: they ring where one was planted and nowhere else, and say how many."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tiny_worlds import random_world, write_study

from miner import check, hunt
from miner.kernels import bits
from miner.kernels.coincidence import chances
from miner.leaks import coincidences, foreknowledge, label_changes
from miner.panel import Labels
from tests.audits.leak_rates import TRUE, alarms, false_alarms, power, rng_of
from tests.audits.planted_leaks import (
    PLANTS,
    before_events,
    caused,
    clean,
    labels_changing,
    moved_at_random,
)
from tests.calibration.in_memory import panel_of
from tests.calibration.table import BY_NAME, WORLDS
from tests.worlds import TARGET

SEED = 7100


def chances_by_hand(alert_et, cover_et, group_et, cells):
    """The chance of an alert on each cell, counted out."""
    found = []
    for e, t in cells:
        on_date = [
            sum(alert_et[f, u] for f in range(len(alert_et)) if group_et[f, u] == group_et[e, u])
            for u in range(alert_et.shape[1])
        ]
        whole = sum(n for u, n in enumerate(on_date) if cover_et[e, u])
        ok = 0 <= t < alert_et.shape[1] and cover_et[e, t] and whole
        found.append(min(1.0, alert_et[e].sum() * on_date[t] / whole) if ok else 0.0)
    return found


@given(st.integers(0, 2**32 - 1))
def test_chances_are_those_counted_by_hand(seed):
    rng = np.random.default_rng(seed)
    n_entities, n_sessions, n_groups = 5, int(rng.integers(3, 140)), int(rng.integers(1, 4))
    shape = n_entities, n_sessions
    cover_et = rng.random(shape) < 0.8
    alert_et = (rng.random(shape) < 0.3) & cover_et
    group_et = rng.integers(0, n_groups, shape).astype(np.int16)
    cells = rng.integers(0, n_entities, 20), rng.integers(-1, n_sessions + 1, 20)
    found = chances(*map(bits.pack_flags, (alert_et, cover_et)), group_et, n_groups, *cells)
    expected = chances_by_hand(alert_et, cover_et, group_et, list(zip(*cells, strict=True)))
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_chances_hold_what_an_entity_and_its_peers_dates_have():
    """Summed over an entity's covered sessions they are its alerts; a shared shock is expected."""
    rng = np.random.default_rng(1)
    alert_et = rng.random((30, 200)) < 0.02
    alert_et[:, 50] = True
    everything = np.ones((30, 200), dtype=bool)
    cells = np.repeat(np.arange(30), 200), np.tile(np.arange(200), 30)
    group = np.zeros((30, 200), dtype=np.int16)
    q = chances(bits.pack_flags(alert_et), bits.pack_flags(everything), group, 1, *cells)
    np.testing.assert_allclose(q.reshape(30, 200).sum(axis=1), alert_et.sum(axis=1), rtol=0.2)
    assert q.reshape(30, 200)[:, 50].mean() > 20 * np.median(q)


@pytest.mark.parametrize("plant", PLANTS)
def test_a_planted_leak_raises_one_alarm_that_names_it(plant):
    world = BY_NAME["rare" if "ever" in plant else "quiet"]
    panel, labels = PLANTS[plant](panel_of(world.make(SEED)), rng_of(SEED))
    (told,) = (text for text in alarms(panel, labels) if "could not have been" not in text)
    start = {"alert": "target 'upset': alerts of type 'planted'", "coverage": "coverage: on"}
    assert told.startswith(start.get(plant.split()[0], "groups: "))
    assert told.count("by chance") == ("ever have" not in told)


def test_alarms_say_the_counts_there_are():
    panel = caused(panel_of(BY_NAME["quiet"].make(SEED)), rng_of(SEED), 0, 0.3)
    (found,) = (c for c in coincidences(panel) if c.is_alarming)
    entity, session = panel.events[TARGET]
    word = panel.alert_ekw[entity, -1, session >> 6] >> (session & 63).astype(np.uint64)
    assert found.count == (word & np.uint64(1)).sum()
    assert found.n_events == entity.size
    (told,) = alarms(panel, {})
    assert f"{found.count:,} of {entity.size:,} events" in told


@pytest.mark.parametrize("name", ["quiet", "all held", "reactive, clustered", "everything"])
def test_clean_worlds_raise_none(name):
    assert false_alarms(BY_NAME[name], range(SEED, SEED + 3)) == [[], [], []]


def test_true_precursors_raise_none():
    """Three in four triggers are followed, at any of five sessions: that is no leak."""
    world = BY_NAME["rare"].make(SEED, TRUE)
    assert alarms(*clean(panel_of(world), rng_of(SEED))) == []


def test_labels_that_move_before_events_are_told_from_those_that_move_after():
    panel = panel_of(BY_NAME["rare"].make(SEED))
    early = labels_changing(panel, *before_events(panel, rng_of(SEED), 30))
    random = moved_at_random(panel, rng_of(SEED), 300)
    found = [
        foreknowledge(panel, panel.events[TARGET], label_changes(panel, of), lookback=5, horizon=5)
        for of in (early, random)
    ]
    assert found[0].count > 20 * found[0].expected
    assert found[1].p > 1e-3
    assert found[1].n_cells > 200


def test_alerts_outside_coverage_are_told_of():
    panel = panel_of(BY_NAME["coverage"].make(SEED))
    cover = panel.cover_eqw.copy()
    cover[:20] = 0
    told = alarms(replace(panel, cover_eqw=cover), {})
    assert [text for text in told if "could not have been published" in text]


def test_no_events_and_no_alerts_are_no_trouble():
    panel = panel_of(BY_NAME["quiet"].make(SEED))
    empty = np.empty(0, dtype=np.int32)
    none = replace(panel, events={TARGET: (empty, empty)})
    silent = replace(panel, alert_ekw=np.zeros_like(panel.alert_ekw))
    one = Labels(("a",), np.zeros_like(panel.peers.code_et))
    assert alarms(none, {"band": one}) == alarms(silent, {"band": one}) == []


def test_check_and_hunt_tell_the_alarms(tmp_path):
    """An alert type that is made of the events, as a study on disk."""
    world = random_world(3, coverage=False, groups="none", two_targets=False)
    copies = frozenset((e, "memo", t) for e, _, t in world.events if e in world.known)
    path = write_study(replace(world, alerts=world.alerts | copies), tmp_path, placebo=0)
    says = "alerts of type 'memo' are on the very session of"
    assert sum(says in text for text in check(path, n_workers=1).warnings) == 1
    assert sum(says in text for text in hunt(path, n_workers=1).evidence["warnings"]) == 1


@pytest.mark.slow
def test_false_alarms_are_fewer_than_one_in_a_hundred():
    found = [lines for world in WORLDS for lines in false_alarms(world, range(7200, 7210))]
    assert len(found) == 10 * len(WORLDS)
    assert sum(map(bool, found)) <= 0.01 * len(found)


@pytest.mark.slow
@pytest.mark.parametrize("plant", PLANTS)
def test_planted_leaks_are_seen(plant):
    assert power(plant, BY_NAME["rare"], range(7300, 7360)) >= 0.6
