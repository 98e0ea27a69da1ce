"""Nothing that comes after a session changes what was decided on it: hunt, scan and trades.

Each audit is shown to fail when a look-ahead of one session is put into the program.
"""

import datetime as dt
import json
from dataclasses import replace

import numpy as np
import pytest
from tiny_worlds import FIRST_DAY, random_world

from miner import hunting
from miner.session_calendar import SessionCalendar
from miner.time_split import DiscoverySlice
from miner.trades import evaluate
from tests.audits import look_ahead as audits
from tests.audits.look_ahead import CHANGES
from tests.fuzz.edge_worlds import edge_world

SEEDS = (2, 5, 11)


def world_of(seed):
    """A tiny world with a coverage table, so that who is known does not hang on the log."""
    return random_world(seed, coverage=True)


@pytest.mark.parametrize("seed", SEEDS[:2])
def test_discovery_is_the_same_whatever_comes_after_it(seed, tmp_path):
    assert audits.audit_discovery(world_of(seed), seed, tmp_path, CHANGES) > 10


@pytest.mark.parametrize("back", [0, 1, 5])
def test_a_calendar_that_ends_is_a_log_that_ends(back, tmp_path):
    world = world_of(7)
    least = world.holdout_start + world.lookback + world.horizon
    audits.audit_truncation(world, 7, tmp_path, max(least, world.n_sessions - 2 - back))


@pytest.mark.parametrize("seed", SEEDS)
def test_a_scan_sees_nothing_later_than_its_day(seed, tmp_path):
    world, rng, found = world_of(seed), np.random.default_rng(seed), 0
    for i, t in enumerate(rng.integers(20, world.n_sessions - 2, 3).tolist()):
        found += audits.audit_scan(world, t, tmp_path / str(i), seed)
    assert found > 0


@pytest.mark.parametrize("seed", SEEDS)
def test_trades_made_by_a_day_hang_on_nothing_later(seed, tmp_path):
    world = world_of(seed)
    t = (world.discovery_end, world.holdout_start + 12, world.n_sessions - 3)[seed % 3]
    assert audits.audit_trades(world, t, tmp_path, seed) > 10


@pytest.mark.parametrize("n_sessions", [60, 64, 100, 128, 129])
def test_a_short_calendar_keeps_its_holdout_when_discovery_is_cut_off(n_sessions, tmp_path):
    """Sessions are packed 64 to a word: a cut within the last word must not reach the whole."""
    world = random_world(4, coverage=False, groups="none", two_targets=False, fades=False)
    end, start = n_sessions - 26, n_sessions - 18
    cut = replace(world, n_sessions=n_sessions, discovery_end=end, holdout_start=start)
    logs = (
        frozenset(row for row in log if row[2] < n_sessions) for log in (cut.alerts, cut.events)
    )
    cut = replace(cut, **dict(zip(("alerts", "events"), logs, strict=True)))
    rules = audits.run(cut, tmp_path, fdr=0.5).rules
    assert len(rules) > 0
    assert rules["holdout_triggers"].sum() > 0
    assert rules["holdout_base_rate"].notna().all()


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(200, 240))
def test_many_discoveries_are_the_same_whatever_comes_after_them(seed, tmp_path):
    world = edge_world(seed)
    if world.coverage is None and world.strata is None and world.peers is None:
        world = world_of(seed)
    audits.audit_discovery(world, seed, tmp_path, CHANGES)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(300, 330))
def test_many_scans_and_trades_see_nothing_later(seed, tmp_path):
    world, rng = world_of(seed), np.random.default_rng(seed)
    for i, t in enumerate(rng.integers(20, world.n_sessions - 2, 4).tolist()):
        audits.audit_scan(world, t, tmp_path / f"scan {i}", seed)
        audits.audit_trades(world, t, tmp_path / f"trades {i}", seed)


# the audits fail when they should


def test_the_discovery_audit_sees_one_session_too_many(tmp_path, monkeypatch):
    def too_long(panel, last):
        return DiscoverySlice(panel.until(last + 2), 0, last + 1)

    monkeypatch.setattr(hunting, "discovery_slice", too_long)
    with pytest.raises(AssertionError):
        audits.audit_discovery(world_of(2), 2, tmp_path, ("redrawn",))


@pytest.fixture
def early(monkeypatch):
    """Every stamp counts a session earlier than it was known."""
    right = SessionCalendar.session_of

    def session_of(self, stamp_us, is_bare_date):
        session = right(self, stamp_us, is_bare_date)
        return np.where(session > 0, session - 1, session).astype(np.int32)

    monkeypatch.setattr(SessionCalendar, "session_of", session_of)


def test_the_scan_audit_sees_stamps_that_count_early(tmp_path, early):
    with pytest.raises(AssertionError):
        audits.audit_scan(world_of(2), 60, tmp_path, 2)


def test_the_discovery_audit_sees_stamps_that_count_early(tmp_path, early):
    with pytest.raises(AssertionError):
        audits.audit_discovery(world_of(2), 2, tmp_path, ("redrawn",))


def test_the_truncation_audit_sees_a_calendar_that_reads_on(tmp_path, monkeypatch):
    monkeypatch.setattr(hunting, "split_sessions", _by_all_stamps)
    with pytest.raises(AssertionError):
        audits.audit_truncation(world_of(7), 7, tmp_path, world_of(7).n_sessions - 2)


def _by_all_stamps(inputs):
    """A split that hangs on rows that lie outside the calendar."""
    n = inputs.panel.n_sessions
    later = inputs.counts["alerts"]["outside calendar"] > 0
    return int(0.5 * n) + later, int(0.7 * n)


def test_the_trades_audit_sees_returns_of_the_next_session(tmp_path, monkeypatch):
    right = evaluate.abnormal_returns

    def ahead(prices, group_et):
        found = right(prices, group_et)
        parts = ("intraday_et", "daily_et", "overnight_et")
        return replace(found, **{x: np.roll(getattr(found, x), -1, axis=1) for x in parts})

    world = world_of(2)
    exits = json.loads(audits.trades_of(world, 200, tmp_path / "all", 2)["left"])
    last = sorted(row["exit"] for row in exits)[len(exits) // 2]
    session = (dt.date.fromisoformat(last) - FIRST_DAY).days
    audits.audit_trades(world, session, tmp_path / "right", 2)
    monkeypatch.setattr(evaluate, "abnormal_returns", ahead)
    with pytest.raises(AssertionError):
        audits.audit_trades(world, session, tmp_path / "wrong", 2)
