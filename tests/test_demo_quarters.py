"""The four quarters after the demo's hunt: what was written, recounted, and what reviews say."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from miner import load_study
from miner.assemble import assemble
from miner.demo import quarters as played
from miner.demo.cast import ALERT_KINDS, REDEFINED, REDEFINED_FACTOR, REDEFINED_FROM
from miner.demo.later import QUARTERS, write_later
from miner.demo.scenario import DEFAULT_SEED, TARGET, write_demo
from miner.review import review
from miner.review.outcomes import closed_triggers
from miner.review.quarters import quarters_of
from miner.rule_book import BookRule, RuleBook, rule_id, write_rule_book
from miner.rule_book.records import RunOrigin

HOLDOUT = ("2022Q3", "2022Q4", "2023Q1", "2023Q2", "2023Q3", "2023Q4")


def rule_of(truth, fate, **findings):
    types = tuple(sorted(fate.types))
    return BookRule(
        id=rule_id(TARGET, fate.stratum, types, 5, 5, 5), target=TARGET, stratum=fate.stratum,
        combination=types, lookback=5, horizon=5, rest=5, run="hunt", **findings,
    )  # fmt: skip


@pytest.fixture(scope="module")
def later(tmp_path_factory):
    """The demo with its four quarters, and the closed triggers of the fates by quarter."""
    folder = tmp_path_factory.mktemp("demo")
    write_demo(folder, DEFAULT_SEED)
    truth = write_later(folder, DEFAULT_SEED)
    inputs = assemble(load_study(truth.study))
    quarters = [q for q in quarters_of(inputs.calendar.dates) if q.name >= HOLDOUT[0]]
    rules = [rule_of(truth, fate) for fate in truth.fates]
    closed = closed_triggers(inputs.panel, rules, quarters, settle=0)
    names = np.array([q.name for q in quarters])
    frames = [
        pd.DataFrame({"quarter": names[c.quarter], "hit": c.is_hit, "rate": c.rate}) for c in closed
    ]
    return SimpleNamespace(folder=folder, truth=truth, inputs=inputs, frames=frames)


@pytest.fixture(scope="module")
def year(later):
    """Reviews of a book of the four rules, their promises those of the hunt's holdout."""
    rules = []
    for fate, frame in zip(later.truth.fates, later.frames, strict=True):
        held = frame[frame["quarter"].isin(HOLDOUT)]
        means = {"precision": float(held["hit"].mean()), "expected": float(held["rate"].mean())}
        rules.append(rule_of(later.truth, fate, **means))
    origin = RunOrigin(
        study="demo", version="0", discovery_to="2022-06-16", holdout_from="2022-07-01",
        holdout_to="2023-12-29", rules_sha256="0" * 64,
    )  # fmt: skip
    book = later.folder / "four.toml"
    sessions = {"calendar": "weekdays"}
    made = RuleBook(format=1, sessions=sessions, run={"hunt": origin}, rule=tuple(rules))
    write_rule_book(made, book)
    reviews = [
        review(book, later.truth.study, quarter, later.folder / "four.db", accept=True, who="demo",
               with_hunt=False)
        for quarter in QUARTERS
    ]  # fmt: skip
    return played.Year(later.truth, tuple(reviews))


def test_what_was_there_before_stays_as_it_was(later):
    before, after = (
        pd.read_parquet(folder / "alerts.parquet")
        for folder in (later.folder, later.folder / "later")
    )
    assert len(after) > 1.1 * len(before)
    pd.testing.assert_frame_equal(after.iloc[: len(before)], before)
    assert after["time"].iloc[len(before) :].min() >= "2023-12-29"
    old = (later.folder / "events.csv").read_bytes()
    new = (later.folder / "later" / "events.csv").read_bytes()
    assert new.startswith(old)
    assert len(new) > 1.1 * len(old)


def test_companies_come_and_go_and_keep_their_names(later):
    before, after = (
        pd.read_csv(folder / "groups.csv", keep_default_na=False)
        for folder in (later.folder, later.folder / "later")
    )
    old, new = set(before["entity"]), set(after["entity"])
    assert old < new
    listed = after[after["entity"].isin(new - old)]
    assert len(new - old) == 40
    assert (listed.groupby("entity")["start"].min() >= "2024-01-15").all()
    gone = after["end"][after["end"] > "2024-01-01"]
    assert len(gone) > 20
    sector = after.groupby("entity")["sector"].nunique()
    assert (sector == 1).all()
    delisted = before.groupby("entity")["end"].max()
    delisted = delisted[(delisted != "") & (delisted < "2023-12-29")]
    last = after.groupby("entity")["end"].max()
    assert (last[delisted.index] == delisted).sum() > 100


def test_planted_sets_come_as_often_as_before(later):
    for fate, frame in zip(later.truth.fates, later.frames, strict=True):
        count = frame["quarter"].value_counts()
        before = count[list(HOLDOUT)].mean()
        now = count[list(QUARTERS)].mean()
        assert before > 9, fate
        assert 0.7 < now / before < 1.6, fate


def test_hits_fall_as_the_fates_say(later):
    for fate, frame in zip(later.truth.fates, later.frames, strict=True):
        mine = frame[frame["quarter"].isin(QUARTERS)]
        share = mine.groupby("quarter")["hit"].mean()
        for quarter, precision in zip(QUARTERS, fate.precisions, strict=True):
            assert abs(share[quarter] - precision) < 0.17, (fate, quarter)
    by_name = dict(zip((fate.name for fate in later.truth.fates), later.frames, strict=True))
    decaying = by_name["decays slowly"].groupby("quarter")["hit"].mean()
    assert decaying["2024Q4"] < 0.06 < decaying[list(HOLDOUT)].mean() - 0.06
    dying = by_name["dies at once"]
    assert dying[dying["quarter"].isin(QUARTERS)]["hit"].mean() < 0.08


def test_one_alert_is_redefined_and_no_other(later):
    panel, log = later.inputs.panel, later.inputs.alerts
    dates = later.inputs.calendar.dates
    change = int(np.searchsorted(dates, np.datetime64(REDEFINED_FROM)))
    year_before = int(np.searchsorted(dates, np.datetime64("2023-05-06")))
    for kind in ALERT_KINDS:
        session = log.session[log.type == panel.type_names.index(kind.name)]
        rate = (session >= change).sum() / (len(dates) - change)
        before = ((session >= year_before) & (session < change)).sum() / (change - year_before)
        wanted = REDEFINED_FACTOR if kind.name == REDEFINED else 1.0
        assert 0.75 < rate / before / wanted < 1.25, kind.name


def test_the_review_does_the_right_thing_each_time(year):
    told = {fate.name: played.proposals(year, fate) for fate in year.truth.fates}
    assert told["holds"] == ("keep",) * 4
    assert told["decays slowly"] == ("keep", "watch", "retire", "retired")
    assert told["dies at once"] == ("retire", "retired", "retired", "retired")
    assert [one.endswith("!") for one in told["an alert is redefined"]] == [False, True, True, True]
    for name, (_, is_right) in played.RIGHT.items():
        assert is_right(told[name]), name
    marked = {rule.name for one in year.reviews for rule in one.rules if rule.marks}
    assert marked == {"loan chatter + quiet bid"}


def test_the_summary_sets_fate_beside_proposal(year):
    told = "\n".join(played.year_lines(year))
    assert told.count("  as it should") == 4
    assert "loan chatter + stake creep (mid): dies at once, so to be retired soon" in told
    assert "Of 4 rules, 2 were retired." in " ".join(told.split())
    assert all(len(line) <= 100 for line in told.splitlines())


@pytest.mark.parametrize(
    ("name", "wrong"),
    [
        ("holds", ("keep", "watch", "keep", "keep")),
        ("decays slowly", ("keep", "keep", "keep", "retire")),
        ("decays slowly", ("watch", "watch", "watch", "keep")),
        ("dies at once", ("watch", "watch", "watch", "retire")),
        ("an alert is redefined", ("keep", "keep", "keep!", "keep!")),
    ],
)
def test_what_is_wrong_is_not_called_right(name, wrong):
    assert not played.RIGHT[name][1](wrong)


def test_same_seed_writes_the_same_bytes(later, tmp_path):
    for name in ("alerts.parquet", "events.csv"):
        (tmp_path / name).write_bytes((later.folder / name).read_bytes())
    write_later(tmp_path, DEFAULT_SEED)
    written = sorted(path.name for path in (tmp_path / "later").iterdir())
    assert written == [
        "alerts.parquet", "coverage.csv", "events.csv", "groups.csv", "study.toml", "truth.json",
    ]  # fmt: skip
    for name in written:
        again = (tmp_path / "later" / name).read_bytes()
        assert again == (later.folder / "later" / name).read_bytes(), name
