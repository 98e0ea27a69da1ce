"""A review of a quarter sees nothing that came later, and says so when a quarter is not over."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from miner import load_study
from miner.assemble import assemble
from miner.errors import InputError
from miner.review.cutting import cut_inputs
from miner.review.quarters import last_day, quarters_of
from tests.review.desk import N_SESSIONS, QUARTERS, make_desk, rule, small_world
from tests.review.test_ledger_and_review import numbers


@pytest.mark.parametrize("options", [{"sectors": True, "coverage": True}, {"sectors": False}])
def test_what_comes_after_the_quarter_changes_nothing(tmp_path, options):
    """Other alerts and events, other companies, another alert type and none at all."""
    world = small_world(7, **options)
    rng = np.random.default_rng(1)
    _, last = QUARTERS["2021Q3"]
    names = [*world.known, *(("new one",) if not options["sectors"] else ())]
    later = {
        (str(rng.choice(names)), str(rng.choice(["a", "b", "late type"])), int(t))
        for t in rng.integers(last + 1, N_SESSIONS, 400)
    }
    other = replace(
        world,
        alerts=frozenset({a for a in world.alerts if a[2] <= last} | later),
        events=frozenset(
            {e for e in world.events if e[2] <= last}
            | {(str(rng.choice(names)), "upset", int(t)) for t in rng.integers(last + 1, 372, 90)}
        ),
        known=tuple(sorted(names)),
    )
    results = []
    for folder, version in (("one", world), ("other", other)):
        desk = make_desk(tmp_path / folder, version, [rule("a", "b"), rule("c"), rule("a", "d")])
        results.append(desk.review("2021Q3", with_hunt=True))
    one, two = map(numbers, results)
    assert one == two
    assert len(results[0].hunt.rules) >= 3
    assert sum(r.since.triggers for r in results[0].rules) > 100
    assert numbers(desk.review("2021Q4", with_hunt=True)) != two  # there was something to see


def test_cut_inputs_know_only_what_was_there(tmp_path):
    world = small_world(7, sectors=False)
    late = {("late comer", "late type", 300), ("late comer", "a", 301)}
    world = replace(
        world,
        alerts=world.alerts | late,
        known=tuple(sorted((*world.known, "late comer"))),
    )
    make_desk(tmp_path, world, [rule("a", "b")])
    inputs = assemble(load_study(tmp_path / "study.toml"))
    cut = cut_inputs(inputs, 300)
    assert "late comer" in inputs.panel.entity_names
    assert "late comer" not in cut.panel.entity_names
    assert "late type" not in cut.panel.type_names
    assert len(cut.calendar.dates) == cut.panel.n_sessions == 300
    assert cut.alerts.session.max() < 300
    assert cut.alerts.type.max() == len(cut.panel.type_names) - 1
    later = cut_inputs(inputs, 302)
    assert later.panel.entity_names == inputs.panel.entity_names
    assert later.panel.type_names == inputs.panel.type_names


@pytest.mark.parametrize(
    ("quarter", "message"),
    [
        ("2021", '`quarter` must be a calendar quarter; got "2021". Write it as 2025Q3.'),
        ("2021Q5", "must be a calendar quarter"),
        ("2022Q1", "Quarters that can be reviewed: 2021Q1 to 2021Q4."),
        ("2020Q4", "got 2020Q4"),
    ],
)
def test_a_quarter_that_cannot_be_reviewed(tmp_path, quarter, message):
    desk = make_desk(tmp_path, small_world(5), [rule("a", "b")])
    with pytest.raises(InputError) as error:
        desk.review(quarter)
    assert message in str(error.value)
    assert not desk.ledger.exists()


def test_a_quarter_is_over_with_its_last_session(tmp_path):
    """On weekdays: 2022Q4 ends on a Friday, the log on that day or the day before."""
    head = "entity,time,type\n"
    (tmp_path / "events.csv").write_text(head + "n,2022-10-04 12:00,upset\n")
    for last, is_over in (("2022-12-30", True), ("2022-12-29", False), ("2023-01-02", True)):
        (tmp_path / "alerts.csv").write_text(head + f"n,2022-10-03 12:00,a\nn,{last} 12:00,a\n")
        (tmp_path / "study.toml").write_text(
            '[alerts]\nsource = "alerts.csv"\n[events]\nsource = "events.csv"\n'
        )
        from miner.review.quarters import has_ended

        study = load_study(tmp_path / "study.toml")
        calendar = assemble(study).calendar
        quarter = next(q for q in quarters_of(calendar.dates) if q.name == "2022Q4")
        assert has_ended(quarter, study, calendar) == is_over


def test_quarters_of_dates():
    dates = np.arange(np.datetime64("2021-12-30"), np.datetime64("2022-07-02"))
    found = [(q.name, q.first, q.last) for q in quarters_of(dates)]
    assert found == [("2021Q4", 0, 1), ("2022Q1", 2, 91), ("2022Q2", 92, 182), ("2022Q3", 183, 183)]
    assert [str(last_day(f"2024Q{q}")) for q in (1, 2, 3, 4)] == [
        "2024-03-31", "2024-06-30", "2024-09-30", "2024-12-31",
    ]  # fmt: skip
