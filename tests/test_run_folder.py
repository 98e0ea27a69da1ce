"""A run's folder: what is in it, and that it is whole or not there and never overwritten."""

import csv
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tiny_worlds import random_world, write_study

from miner import Hunt, hunt, placing, run_folder
from miner.columns import CANDIDATE_COLUMNS
from miner.errors import OutputError

COLUMNS = [
    *("target", "stratum", "combination", "size", "triggers", "hits", "precision"),
    *("precision_low", "precision_high", "base_rate", "expected_hits", "lift", "p_value"),
    *("q_value", "p_own_timing", "rule_order", "sharpens", "explained_by", "holdout_triggers"),
    *("holdout_hits", "holdout_precision", "holdout_low", "holdout_high", "holdout_base_rate"),
    *("holdout_expected_hits", "holdout_p_value", "verdict"),
]


@pytest.fixture(scope="module")
def result(tmp_path_factory) -> Hunt:
    folder = tmp_path_factory.mktemp("study")
    return hunt(write_study(random_world(3), folder, permutations=50), folder / "run")


def listing(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_tables_have_their_columns_in_order(result):
    for name in ("candidates.csv", "rules.csv"):
        with (result.folder / name).open(newline="", encoding="utf-8") as file:
            head, *rows = csv.reader(file)
        assert head == COLUMNS
        assert len(rows) == len(result.candidates if name[0] == "c" else result.rules) > 0
    assert pd.read_parquet(result.folder / "candidates.parquet").columns.tolist() == COLUMNS


def test_csv_and_parquet_hold_the_result(result):
    pd.testing.assert_frame_equal(
        pd.read_parquet(result.folder / "candidates.parquet"), result.candidates
    )
    written = pd.read_csv(result.folder / "candidates.csv")
    for name, kind in CANDIDATE_COLUMNS.items():
        if kind == "text":
            assert written[name].fillna("").tolist() == result.candidates[name].tolist()
        else:
            found = result.candidates[name].astype("float64")
            np.testing.assert_allclose(written[name], found, rtol=1e-9)


def test_rules_are_the_candidates_with_an_order_in_that_order(result):
    rules = result.candidates.dropna(subset="rule_order").sort_values("rule_order")
    assert rules["rule_order"].tolist() == list(range(1, len(rules) + 1))
    pd.testing.assert_frame_equal(rules.reset_index(drop=True), result.rules)
    no_rule = result.candidates[result.candidates["rule_order"].isna()]
    assert no_rule[[c for c in COLUMNS if c.startswith("holdout")]].isna().all(axis=None)
    assert set(no_rule["verdict"]) == {"explained", "not significant"}
    assert set(rules["verdict"]) <= {"confirmed", "refuted", "underpowered"}


def test_the_record_tells_what_went_in_and_what_came_out(result):
    record = json.loads((result.folder / "run.json").read_text(encoding="utf-8"))
    assert {"settings", "versions", "inputs", "counts", "placebo", "seconds"} <= set(record)
    assert record["settings"]["testing"]["seed"] == 7
    assert all(len(digest) == 64 for digest in record["inputs"].values())
    counts = record["counts"]
    assert counts["candidates"] == len(result.candidates) <= counts["family"]
    assert counts["rules"] == len(result.rules)
    assert counts["confirmed"] == (result.rules["verdict"] == "confirmed").sum()
    passed = ~result.candidates["verdict"].eq("not significant") & result.candidates["q_value"].le(
        0.05
    )
    assert counts["passed"]["bh"] == passed.sum()
    assert counts["tables"]["alerts"]["used"] > counts["tables"]["events"]["used"] > 0
    assert record["placebo"]["worlds"] == 1
    assert record["split"]["embargo"] >= 2


def test_a_folder_that_exists_is_refused_and_left(result, tmp_path):
    kept = tmp_path / "kept"
    run_folder.write(result, kept)
    (kept / "note.txt").write_text("mine")
    before = {path.name: path.read_bytes() for path in kept.iterdir()}
    with pytest.raises(OutputError, match=r"must not exist yet.*--replace"):
        run_folder.write(result, kept)
    with pytest.raises(OutputError, match="must not exist yet"):
        run_folder.check_free(kept, replace=False)
    assert {path.name: path.read_bytes() for path in kept.iterdir()} == before
    assert listing(tmp_path) == ["kept"]


def test_replacing_puts_the_whole_new_folder_in_place(result, tmp_path):
    kept = tmp_path / "kept"
    run_folder.write(result, kept)
    (kept / "note.txt").write_text("of the earlier run")
    fewer = replace(result, candidates=result.candidates.head(2))
    run_folder.write(fewer, kept, replace=True)
    assert len(pd.read_csv(kept / "candidates.csv")) == 2
    assert "note.txt" not in listing(kept)
    assert listing(tmp_path) == ["kept"]


def test_only_the_folder_of_a_run_is_replaced(result, tmp_path):
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "thesis.txt").write_text("years of work")
    with pytest.raises(OutputError, match="be the folder of a run to be replaced"):
        run_folder.write(result, tmp_path / "other", replace=True)
    (tmp_path / "file").write_text("not a folder")
    for is_replaced in (False, True):
        with pytest.raises(OutputError):
            run_folder.write(result, tmp_path / "file", replace=is_replaced)
    assert listing(tmp_path / "other") == ["thesis.txt"]
    assert (tmp_path / "file").read_text() == "not a folder"


def test_a_place_that_cannot_be_written_is_refused_before_the_work(result, tmp_path):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(OutputError, match="be a folder that can be written"):
        run_folder.check_free(tmp_path / "file" / "deeper" / "run", False)


@pytest.mark.parametrize("is_replacing", [False, True])
def test_nothing_is_left_behind_when_writing_fails(result, tmp_path, monkeypatch, is_replacing):
    if is_replacing:
        run_folder.write(result, tmp_path / "run")
        before = (tmp_path / "run" / "rules.csv").read_bytes()

    def full_disk(*args, **kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(run_folder.json, "dumps", full_disk)
    with pytest.raises(OutputError, match="No space left on device"):
        run_folder.write(result, tmp_path / "run", replace=is_replacing)
    assert listing(tmp_path) == (["run"] if is_replacing else [])
    if is_replacing:
        assert (tmp_path / "run" / "rules.csv").read_bytes() == before


def test_a_fault_while_swapping_brings_the_old_folder_back(result, tmp_path, monkeypatch):
    """Where folders cannot change places: the last step fails after the old one was moved away."""
    run_folder.write(result, tmp_path / "run")
    monkeypatch.setattr(placing, "_exchange", lambda made, target: False)
    rename, calls = Path.rename, []

    def second_fails(self, target):
        calls.append(target)
        if len(calls) == 2:
            raise OSError(5, "Input/output error")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", second_fails)
    with pytest.raises(OutputError, match="Input/output error"):
        run_folder.write(result, tmp_path / "run", replace=True)
    assert listing(tmp_path) == ["run"]
    assert "run.json" in listing(tmp_path / "run")


def test_a_new_folder_has_the_usual_rights(result, tmp_path):
    (tmp_path / "usual").mkdir()
    run_folder.write(result, tmp_path / "deep" / "run")
    assert (tmp_path / "deep" / "run").stat().st_mode == (tmp_path / "usual").stat().st_mode
