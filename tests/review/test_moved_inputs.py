"""Inputs that moved: planted changes are seen, and quiet inputs are left alone."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from miner import load_study
from miner.assemble import assemble
from miner.review.cutting import cut_inputs
from miner.review.moved_inputs import hour_noise, hour_shift, moved_inputs
from miner.review.quarters import quarter_to_review
from miner.review.records import MovedInputs, TypeChange
from miner.review.type_quarters import quantile_hour

NAMES = [f"n{i:02d}" for i in range(20)]
START = np.datetime64("2022-01-01")
QUARTER = "2023Q2"
CHANGE = int((np.datetime64("2023-04-01") - START).astype(int))  # its first session
N_SESSIONS = CHANGE + 91


def rows_of(rng: np.random.Generator, kind: str, rate: float, hour: int = 11) -> list[tuple]:
    """(entity, session, hour, type) rows of a type that comes at a steady rate."""
    found = np.argwhere(rng.random((len(NAMES), N_SESSIONS)) < rate)
    return [(NAMES[e], int(t), hour + int(rng.integers(0, 4)), kind) for e, t in found]


@pytest.fixture(scope="module")
def moved(tmp_path_factory) -> MovedInputs:
    """A log in which one type each halves, comes later, stops, begins, loses its companion."""
    rng = np.random.default_rng(8)
    steady = rows_of(rng, "steady", 0.08)
    alerts = list(steady)
    halved = rows_of(rng, "halved", 0.2)
    cut = CHANGE + 14
    alerts += [row for row in halved if row[1] < cut or rng.random() < 0.4]
    alerts += [(e, t, h + 3 * (t >= CHANGE), k) for e, t, h, k in rows_of(rng, "later", 0.08, 9)]
    alerts += [row for row in rows_of(rng, "stopped", 0.05) if row[1] < CHANGE]
    alerts += [row for row in rows_of(rng, "fresh", 0.05) if row[1] >= CHANGE + 20]
    paired = rows_of(rng, "paired", 0.08)
    alerts += paired
    alerts += [(e, t, h, "follower") for e, t, h, _ in paired if t < CHANGE or rng.random() < 0.2]
    alerts += [(e, t, h, "follower") for e, t, h, _ in rows_of(rng, "", 0.03)]
    quiet, late = NAMES[3], NAMES[5]
    alerts = [
        row
        for row in alerts
        if not (row[0] == quiet and row[1] >= CHANGE) and not (row[0] == late and row[1] < CHANGE)
    ]
    return look(tmp_path_factory.mktemp("moved"), alerts)


def look(folder: Path, alerts: list[tuple], tables: str = "") -> MovedInputs:
    """Write a log, read it again and look for what moved."""
    lines = [f"{e},{START + t} {h:02d}:30,{k}" for e, t, h, k in alerts]
    (folder / "alerts.csv").write_text("entity,time,type\n" + "\n".join(lines) + "\n")
    events = [f"{name},{START + 40} 12:00,upset" for name in NAMES[:3]]
    (folder / "events.csv").write_text("entity,time,type\n" + "\n".join(events) + "\n")
    (folder / "study.toml").write_text(
        f'[alerts]\nsource = "alerts.csv"\n[events]\nsource = "events.csv"\n{tables}'
        f'[sessions]\ncalendar = "daily"\nstart = "{START}"\nend = "{START + N_SESSIONS - 1}"\n'
    )
    study = load_study(folder / "study.toml")
    inputs = assemble(study)
    quarter = quarter_to_review(QUARTER, study, inputs.calendar)
    return moved_inputs(cut_inputs(inputs, quarter.last + 1), quarter)


def change_of(moved: MovedInputs, kind: str, name: str) -> TypeChange:
    (found,) = [c for c in moved.changes if c.kind == kind and c.type == name]
    return found


def test_a_type_that_comes_less_often_is_seen_where_it_changed(moved):
    change = change_of(moved, "level", "halved")
    assert change.p_adjusted <= 0.05
    assert change.ratio == pytest.approx(0.4, abs=0.12)
    off = np.datetime64(change.since) - (START + CHANGE + 14)
    assert abs(off.astype(int)) <= 14


def test_types_that_begin_and_stop(moved):
    fresh, stopped = change_of(moved, "new", "fresh"), change_of(moved, "vanished", "stopped")
    assert str(START + CHANGE + 20) <= fresh.since <= str(START + CHANGE + 25)
    assert stopped.since == str(START + CHANGE)


def test_other_hours_and_other_companions(moved):
    change = change_of(moved, "hour", "later")
    assert "instead of" in change.words
    assert "with follower" in change_of(moved, "companions", "paired").words


def test_what_did_not_move_is_not_told(moved):
    assert not [c for c in moved.changes if c.type == "steady"]
    assert not [c for c in moved.changes if c.kind == "coverage"]
    assert {c.type for c in moved.changes if c.kind == "hour"} == {"later"}


def test_who_joined_and_who_left(moved):
    found = {(c.entity, c.change) for c in moved.entities}
    assert found == {(NAMES[3], "left"), (NAMES[5], "joined")}
    assert {c.basis for c in moved.entities} == {"log"}


def test_the_table_counts_what_is_in_the_log(moved):
    assert moved.quarters[-1] == QUARTER
    assert len(moved.quarters) == 6
    rows = {(row.type, row.quarter): row for row in moved.types}
    assert len(rows) == 7 * 6
    stopped = rows["stopped", QUARTER]
    assert (stopped.alerts, stopped.hour, stopped.companion) == (0, None, None)
    later, before = rows["later", QUARTER], rows["later", "2023Q1"]
    assert later.hour - before.hour == pytest.approx(3, abs=1)
    assert later.hour_shift > 0.6
    assert before.hour_shift < 0.2
    paired = rows["paired", "2023Q1"]
    assert (paired.companion, round(paired.companion_share, 9)) == ("follower", 1.0)
    assert rows["paired", QUARTER].companion_before == pytest.approx(1.0)
    assert rows["steady", "2022Q2"].covered == len(NAMES)


def test_coverage_is_what_the_table_says(tmp_path):
    rng = np.random.default_rng(2)
    rows = rows_of(rng, "steady", 0.08)
    day = START + CHANGE + 30
    lines = ["entity,start,end", *(f"{name},," for name in NAMES[:12])]
    lines += [f"{name},{day}," for name in NAMES[12:18]]
    lines += [f"{name},,{day}" for name in NAMES[18:]]
    (tmp_path / "coverage.csv").write_text("\n".join(lines) + "\n")
    moved = look(tmp_path, rows, '[coverage]\nsource = "coverage.csv"\n')
    found = {(c.entity, c.change, c.date, c.basis) for c in moved.entities}
    assert found == {(name, "joined", str(day), "coverage") for name in NAMES[12:18]} | {
        (name, "left", str(day + 1), "coverage") for name in NAMES[18:]
    }
    covered = {row.quarter: row.covered for row in moved.types}
    assert covered["2023Q1"] == 14
    assert covered[QUARTER] == pytest.approx(12 + 6 * 61 / 91 + 2 * 31 / 91)
    assert not [c for c in moved.changes if c.kind == "level"]


def test_a_short_and_a_tiny_log_are_no_fault(tmp_path):
    moved = look(tmp_path, [(NAMES[0], CHANGE - 3, 11, "steady"), (NAMES[1], CHANGE, 11, "b")])
    assert not [c for c in moved.changes if c.kind != "new"]
    assert moved.types_tested == 0


def test_hours():
    now, then = np.zeros(96, dtype=int), np.zeros(96, dtype=int)
    now[40:44], then[40:44] = 25, [100, 0, 0, 0]
    assert hour_shift(now, then) == 0  # within the hour
    then[40:48] = 25
    assert hour_shift(now, then) == 0.5
    assert hour_shift(now, np.zeros(96, dtype=int)) is None
    assert quantile_hour(now, 0.5) == pytest.approx(10.5)
    rng = np.random.default_rng(0)
    drawn = [
        hour_shift(*(np.bincount(rng.integers(0, 96, n), minlength=96) for n in (60, 200)))
        for _ in range(400)
    ]
    assert np.mean(drawn) < hour_noise(60, 200)
