"""The command: its screen, its folder, its exit codes."""

from __future__ import annotations

import json

import pandas as pd
import pytest
from click.testing import CliRunner

from miner.cli import main
from miner.errors import SettingsError
from miner.review.tables import tables
from miner.settings import study_from_dict
from tests.review.desk import Desk, make_desk, rule, small_world


@pytest.fixture
def desk(tmp_path) -> Desk:
    rules = [rule("a", "b"), rule("c", precision=None), rule("d", status="retired")]
    return make_desk(tmp_path, small_world(5), rules)


def run(desk: Desk, *options: str):
    first = [str(desk.book), str(desk.folder / "study.toml"), "--ledger", str(desk.ledger)]
    return CliRunner().invoke(main, ["review", *first, *options])


def test_the_screen_and_the_folder(desk):
    result = run(desk, "--quarter", "2021q3", "--who", "ida", "--workers", "1")
    assert result.exit_code == 0, result.output
    assert "rules.toml, 2021Q3 (2021-07-01 to 2021-09-30): 2 rules reviewed, 1 retired earlier" in (
        result.output
    )
    for words in ("Proposed", "a + b -> upset, live", "Hunt again", "Inputs", "Research, not"):
        assert words in result.output
    assert max(map(len, result.output.splitlines())) <= 100 + len(str(desk.folder))
    folder = desk.folder / "rules-2021Q3"
    said = json.loads((folder / "review.json").read_text())
    assert said["quarter"] == "2021Q3"
    names = {path.name for path in folder.iterdir()}
    assert names >= {"review.json", "rules.csv", "quarters.csv", "evidence.csv", "triggers.csv",
                     "new_rules.csv", "inputs.csv", "entities.csv", "warnings.csv"}  # fmt: skip
    rules = pd.read_csv(folder / "rules.csv")
    assert list(rules["rule"]) == [r["id"] for r in said["rules"]]
    for row, one in zip(rules.to_dict("records"), said["rules"], strict=True):
        assert row["since_triggers"] == one["since"]["triggers"] == len(one["triggers"])
        assert row["works_e"] == pytest.approx(one["works"]["e"])
        assert row["proposed"] == one["status"]
    triggers = pd.read_csv(folder / "triggers.csv")
    lines = pd.read_csv(folder / "quarters.csv")
    assert lines["triggers"].sum() == len(triggers)
    assert lines["hits"].sum() == triggers["hit"].sum()
    assert lines["expected_hits"].sum() == pytest.approx(triggers["expected"].sum())


def test_accept_and_again(desk):
    first = run(desk, "--quarter", "2021Q3", "--no-hunt")
    assert "--accept would set" in first.output
    again = run(desk, "--quarter", "2021Q3", "--no-hunt")
    assert again.exit_code == 2
    assert "--replace" in again.output
    done = run(desk, "--quarter", "2021Q3", "--no-hunt", "--replace", "--accept", "--why", "agreed")
    assert done.exit_code == 0, done.output
    assert "Carried out" in done.output
    assert "--accept would set" not in done.output


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--quarter", "2022Q1"], "have ended within the study's sessions"),
        (["--quarter", "soon"], "be a calendar quarter"),
        (["--quarter", "2021Q1", "--who", " "], "`review`: `who` must not be empty"),
        (["--quarter", "2021Q1", "--ledger", "mysql://u:secret@h/d"], "error: "),
    ],
)
def test_what_cannot_be_done_is_said_and_leaves_nothing(desk, options, words):
    result = run(desk, "--no-hunt", *options)
    assert result.exit_code == 2, result.output
    assert words in result.output
    assert "Traceback" not in result.output
    assert "secret" not in result.output
    assert not list(desk.folder.glob("rules-2*"))
    assert not desk.ledger.exists()


@pytest.mark.parametrize(
    ("key", "value", "rule"),
    [
        ("keep_share", 1.2, "be a number above 0 and at most 1"),
        ("watch_at", 1, "be a number above 1"),
        ("alpha", 0, "be a number above 0 and below 1"),
        ("hang_together", "sector", "be 'peers', 'dates', 'entity' or 'quarter'"),
        ("procedure", "lord", "be 'lord++', 'saffron' or 'addis'"),
        ("input_quarters", 1, "be a whole number of at least 2"),
    ],
)
def test_settings_that_cannot_be(key, value, rule):
    logs = {"alerts": {"source": "a.csv"}, "events": {"source": "e.csv"}}
    with pytest.raises(SettingsError) as error:
        study_from_dict({**logs, "review": {key: value}}, ".")
    assert str(error.value).startswith(f"`settings`: `[review] {key}` must {rule}")


def test_another_folder_is_not_replaced(desk):
    other = desk.folder / "precious"
    other.mkdir()
    (other / "thesis.txt").write_text("x")
    result = run(desk, "--quarter", "2021Q1", "--no-hunt", "--replace", "--output", str(other))
    assert result.exit_code == 2
    assert "be the folder of a review to be replaced" in result.output
    assert (other / "thesis.txt").read_text() == "x"
    assert not desk.ledger.exists()


def test_tables_of_an_empty_book(tmp_path):
    desk = make_desk(tmp_path, small_world(5), [rule("a", "b", status="retired")])
    result = desk.review("2021Q2")
    assert (result.rules, len(result.retired), result.entries) == ((), 1, None)
    found = tables(result)
    of_rules = ("rules", "quarters", "evidence", "triggers", "revisions", "new_rules", "workload")
    assert {name: len(found[name]) for name in of_rules} == dict.fromkeys(of_rules, 0)
    assert len(found["inputs"]) > 0
