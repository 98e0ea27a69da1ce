"""Benchmarks: what they measure, when they say void, and counts equal to plain libraries'."""

from __future__ import annotations

import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import miner
from tests import worlds
from tests.benchmarks import __main__ as command
from tests.benchmarks import against_stack, growth, limit, miners, plain_stack, sizes
from tests.benchmarks import compare as revisions
from tests.benchmarks.answers import columns_apart, differences
from tests.benchmarks.compare import checked_out, compare
from tests.benchmarks.measure import HERE, BenchmarkError, run, where_from
from tests.benchmarks.tables import put_section

TINY = sizes.Size(
    n_entities=60,
    n_sessions=300,
    n_types=6,
    alert_rate=0.03,
    base_rate=0.06,
    min_triggers=15,
    permutations=100,
    placebo=2,
    n_planted=1,
)


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return sizes.study_of(TINY, tmp_path_factory.mktemp("worlds"))


@pytest.fixture(scope="module")
def ours(study: Path) -> miner.Hunt:
    return miner.hunt(study, study.parent / "run")


def altered(folder: Path) -> Path:
    """A checkout that hunts as this one does, with one hit more in every candidate's row.

    Its package takes one file from its own folder and all others, compiled kernels included, from
    this checkout.
    """
    package, real = folder / "miner", HERE / "miner"
    package.mkdir(parents=True)
    (package / "__init__.py").write_text(
        f"__path__ = [{str(package)!r}, {str(real)!r}]\n"
        f"exec(compile(open({str(real / '__init__.py')!r}).read(), 'miner', 'exec'))\n"
    )
    source = (real / "candidates.py").read_text(encoding="utf-8")
    (package / "candidates.py").write_text(
        f"{source}\n\n_as_it_was = candidates_table\n\n\n"
        "def candidates_table(*given, **named):\n"
        "    table = _as_it_was(*given, **named)\n"
        "    return table.assign(hits=table['hits'] + 1)\n"
    )
    return folder


def test_plain_libraries_count_as_the_hunt_does(study, ours):
    stack, funnel, spent = plain_stack.hunt(study, 400)
    (margins,) = ours.record["margins"]
    assert set(spent) > {"reading", "triggers", "draws"}
    assert all(value >= 0 for value in spent.values())
    assert funnel["family"] > 30
    assert funnel["proposed"] > 30
    assert stack["hits"].sum() > 100
    sizes_of = margins["family"], margins["proposed"]
    assert against_stack.unequal(ours.candidates, *sizes_of, stack, funnel) == []

    # the same null in kind: the mean of its draws is what the closed form expects
    both = ours.candidates.merge(stack, on="combination", suffixes=("", "_stack"))
    ratio = both["expected_hits_stack"].sum() / both["expected_hits"].sum()
    assert abs(ratio - 1) < 0.05

    stack.loc[3, "hits"] += 1
    apart = against_stack.unequal(ours.candidates, *sizes_of, stack, funnel)
    assert apart[0] == "hits of 1 candidates"
    funnel["family"] += 1
    assert "family" in against_stack.unequal(ours.candidates, *sizes_of, stack, funnel)[0]


def test_plain_libraries_refuse_what_they_would_count_otherwise(tmp_path):
    world = worlds.make_world(1, n_entities=40, n_sessions=200, listing=0.5)
    with pytest.raises(SystemExit, match="whole for every entity"):
        plain_stack.hunt(worlds.write_world(world, tmp_path), 1)


def test_exchanged_sessions_keep_every_margin():
    rng = np.random.default_rng(5)
    cells = rng.permutation(30 * 20)[:250]
    entity, session = cells // 20, cells % 20
    order = np.argsort(entity % 3, kind="stable")
    entity, session = entity[order], session[order]
    sector = entity % 3
    drawn = plain_stack.exchanged(rng, sector, entity, session)
    assert (drawn != session).sum() > 100
    assert len(set(zip(entity.tolist(), drawn.tolist(), strict=True))) == 250
    for group in range(3):
        mine = sector == group
        assert sorted(drawn[mine]) == sorted(session[mine])


def test_rest_is_kept_between_triggers():
    market = plain_stack.Market(
        pd.DataFrame(),
        pd.DataFrame(),
        [],
        np.zeros(2),
        30,
        {"windows": {"lookback": 2, "horizon": 3, "rest": 4}},
    )
    # edges of the first entity at 0, 3, 6, 9, 20 and of the second at 0, 5, 28
    cells = np.array([0, 1, 3, 6, 9, 20, 21, 30, 35, 58])
    assert plain_stack.triggers(market, cells).tolist() == [6, 20, 35]


def test_answers_differ_only_beyond_rounding(ours, tmp_path):
    first, second = ours.folder, tmp_path / "other"
    shutil.copytree(first, second)
    assert differences(first, second) == []

    table = pd.read_csv(first / "candidates.csv", dtype=str, keep_default_na=False)

    def write(column: str, value: str) -> list[str]:
        changed = table.copy()
        changed.loc[2, column] = value
        changed.to_csv(second / "candidates.csv", index=False)
        return differences(first, second)

    p = float(table["p_value"][2])
    assert write("p_value", repr(p * (1 + 1e-11))) == []
    (said,) = write("p_value", repr(p * (1 + 1e-7)))
    assert said.startswith("candidates.csv: p_value differs in 1 of")
    assert "row 3" in said
    assert write("verdict", "who knows")[0].startswith("candidates.csv: verdict differs")
    assert write("q_value", "")[0].startswith("candidates.csv: q_value differs")

    table.iloc[1:].to_csv(second / "candidates.csv", index=False)
    assert "rows and" in differences(first, second)[0]
    table.assign(extra="1").to_csv(second / "candidates.csv", index=False)
    assert differences(first, second) == []
    assert columns_apart(first, second) == ["extra"]
    table.drop(columns="hits").to_csv(second / "candidates.csv", index=False)
    assert "no column hits" in differences(first, second)[0]


def test_a_process_is_measured_alone(tmp_path):
    held = np.ones(300_000_000, dtype=np.uint8)  # not in the peak of what is started
    small = run([sys.executable, "-c", "print('here')"], cwd=tmp_path)
    large = run([sys.executable, "-c", "a = b'x' * 200_000_000; print(len(a))"], cwd=tmp_path)
    assert held.size == 300_000_000
    assert small.log == "here\n"
    assert 0 < small.peak < 100_000_000
    assert 200_000_000 < large.peak < 300_000_000
    assert run([sys.executable, "-c", "raise SystemExit(7)"]).status == 7
    cut = run([sys.executable, "-c", "import time; time.sleep(60)"], limit=0.5)
    assert cut.is_cut
    assert cut.status != 0


def test_another_package_is_not_measured_in_place_of_a_checkout(tmp_path):
    assert where_from(HERE) == HERE / "miner"
    with pytest.raises(BenchmarkError, match="another package answers there"):
        where_from(tmp_path)


def test_miners_find_the_same_itemsets(study):
    for given in (
        miners.window_table(study),
        miners.dense_table(200, 30),
        miners.sparse_table(2_000, 60),
    ):
        found = {}
        for name in filter(miners.has, miners.MINERS):
            call, read = miners.MINERS[name](given)
            found[name] = miners.digest(read(call()))
        assert len(found) >= 4
        (n_itemsets, _), *others = set(found.values())
        assert n_itemsets > 20
        assert not others


def test_growth_is_read_off_points():
    points = [
        growth.Point(
            n, {"a": 0.1 * n, "b": 0.02 * n**2, growth.WHOLE: 0.1 * n + 0.02 * n**2}, 1.0, n, 5, 5
        )
        for n in (4, 8, 16)
    ]
    assert growth.slope(points, [p.seconds["a"] for p in points]) == pytest.approx(1)
    assert growth.slope(points, [p.seconds["b"] for p in points]) == pytest.approx(2)
    assert "b, power 2.00 from 4 to 8" in growth.first_to_bend(points)
    straight = [
        replace(p, seconds={"a": p.seconds["a"], growth.WHOLE: p.seconds["a"]}) for p in points
    ]
    assert growth.first_to_bend(straight) == "no stage grows faster than its count"
    assert "no stage" in growth.text("entities", straight, [])


def test_bytes_to_move_are_counted_from_the_run(study, ours):
    hunted = type("H", (), {"record": ours.record, "folder": ours.folder})
    moved = limit.bytes_to_move(hunted, study)
    assert moved["alerts as bits, written and read"] == 2 * 60 * 6 * 5 * 8
    n_triggers = ours.candidates["triggers"].sum()
    assert moved["triggers, written and read"] == 16 * n_triggers
    assert moved["hits in drawn worlds, one bit a trigger and world, read"] == n_triggers * 102 // 8


def test_sections_are_replaced_in_place(tmp_path):
    report = tmp_path / "speed.md"
    report.write_text("# Speed\n")
    put_section(report, "one", "first")
    put_section(report, "two", "second")
    put_section(report, "one", "third")
    text = report.read_text()
    assert text.startswith("# Speed\n")
    assert "first" not in text
    assert text.index("third") < text.index("second")
    assert text.count("<!-- benchmark: one -->") == 1


@pytest.mark.slow
def test_a_changed_answer_voids_the_speed(study, tmp_path):
    same = compare(study, [HERE, HERE], tmp_path / "same", repeats=1)
    assert same.void is None
    assert same.hunts[0][0].record["counts"]["rules"] == 1
    changed = compare(study, [HERE, altered(tmp_path / "altered")], tmp_path / "runs", repeats=1)
    assert changed.void is not None
    assert changed.void.startswith("void: answers differ: rules.csv: hits differs in 1 of 1 rows")
    assert "candidates.csv: hits differs" in changed.void


@pytest.mark.slow
def test_the_quick_preset_runs(tmp_path, capsys):
    report = tmp_path / "speed.md"
    assert command.main(["--repeats", "1", "--no-warm-up", "--report", str(report)]) == 0
    said = capsys.readouterr().out
    assert "**whole run**" in said
    assert "| searching |" in said
    assert said.strip() in report.read_text()


def test_a_revision_that_does_not_exist_is_said(capsys):
    assert command.main(["--against", "no-such-revision"]) == 2
    assert "--against: no-such-revision must be a revision" in capsys.readouterr().err


def test_a_revision_is_taken_as_it_was(tmp_path, monkeypatch):
    def git(*words: str) -> str:
        who = ["-c", "user.name=a", "-c", "user.email=a@example.org", "-c", "commit.gpgsign=false"]
        return subprocess.run(
            ["git", *who, *words], cwd=tmp_path, check=True, capture_output=True, text=True
        ).stdout

    git("init", "-q")
    (tmp_path / "a.txt").write_text("before")
    git("add", "a.txt")
    git("commit", "-q", "-m", "one")
    (tmp_path / "a.txt").write_text("after")
    monkeypatch.setattr(revisions, "HERE", tmp_path)
    with checked_out("HEAD") as (name, folder):
        assert (folder / "a.txt").read_text() == "before"
        assert git("rev-parse", "HEAD").startswith(name)
    assert not folder.exists()
    assert (tmp_path / "a.txt").read_text() == "after"
    assert git("worktree", "list").count("\n") == 1
