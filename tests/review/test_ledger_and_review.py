"""What the ledger does to a review: nothing is counted twice, first records stand, two at once."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from dataclasses import replace
from typing import Any

import pytest

from miner.errors import LedgerError, SettingsError
from miner.ledger import open_ledger
from miner.review import Review
from miner.review.engine import set_statuses
from miner.review.words import review_lines
from miner.rule_book import read_rule_book, write_rule_book
from tests.review.desk import Desk, make_desk, rule, session, small_world


@pytest.fixture
def desk(tmp_path) -> Desk:
    rules = [rule("a", "b", note="ask Ida"), rule("c"), rule("d", status="retired")]
    return make_desk(tmp_path, small_world(5), rules)


def entries(desk: Desk, kind: str | None = None, **more: Any) -> list:
    with open_ledger(desk.ledger, read_only=True) as ledger:
        assert ledger.verify().broken is None
        return list(ledger.entries(kinds=None if kind is None else [kind], **more))


def numbers(result: Review) -> dict[str, Any]:
    """A review without what depends on when and where it was made."""
    said = result.as_dict()
    for key in ("entries", "ledger", "book", "who", "why"):
        said.pop(key)
    for one in said["rules"]:
        for line in one["quarters"]:
            line.pop("source")
    return said


def flat(result: Review) -> str:
    """The screen of a review, a line a sentence."""
    return "\n".join(review_lines(result)).replace("\n              ", " ")


def test_a_second_review_of_a_quarter_adds_nothing(desk):
    first = desk.review("2021Q2")
    before = entries(desk)
    second = desk.review("2021Q2", who="bob")
    assert entries(desk) == before
    assert first.entries == (1, len(before))
    assert second.entries is None
    assert numbers(second) == numbers(first)
    assert {line.source for one in second.rules for line in one.quarters} == {"ledger"}
    assert {line.source for one in first.rules for line in one.quarters} == {"now"}


def test_quarter_by_quarter_comes_to_the_same_as_all_at_once(desk, tmp_path):
    for quarter in ("2021Q1", "2021Q2", "2021Q3"):
        step = desk.review(quarter)
    at_once = desk.review("2021Q3", ledger=tmp_path / "other.sqlite")
    assert numbers(step) == numbers(at_once)
    outcomes = entries(desk, "outcome")
    keys = {(e.rule, e.body["entity"], e.body["session"]) for e in outcomes}
    assert len(keys) == len(outcomes) == sum(len(one.triggers) for one in step.rules) > 100


def test_an_old_quarter_is_reviewed_as_it_would_have_been_then(desk, tmp_path):
    then = desk.review("2021Q2", ledger=tmp_path / "other.sqlite")
    desk.review("2021Q4")
    assert numbers(desk.review("2021Q2")) == numbers(then)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (
            "UPDATE ledger_entries SET who = 'bob' WHERE number = 2",
            "`entry 2` must be as it was",
        ),
        (
            "DELETE FROM ledger_entries WHERE number = 3",
            "`entry 3` must be .* got missing",
        ),
    ],
)
def test_nothing_is_built_on_a_ledger_that_was_changed(desk, change, words):
    desk.review("2021Q1")
    before = len(entries(desk))
    with closing(sqlite3.connect(desk.ledger)) as connection, connection:
        triggers = connection.execute("SELECT name FROM sqlite_master WHERE type = 'trigger'")
        for (name,) in triggers.fetchall():
            connection.execute(f"DROP TRIGGER {name}")
        assert connection.execute(change).rowcount == 1
        left = connection.execute("SELECT count(*) FROM ledger_entries").fetchone()
    with pytest.raises(LedgerError, match=words):
        desk.review("2021Q2", output=desk.folder / "out")
    assert not (desk.folder / "out").exists()
    with closing(sqlite3.connect(desk.ledger)) as connection:
        assert connection.execute("SELECT count(*) FROM ledger_entries").fetchone() == left
    assert left[0] in (before, before - 1)


def test_who_and_why_are_entered(desk):
    desk.review("2021Q1", who="ida", why="board meeting")
    assert {(e.who, e.why) for e in entries(desk)} == {("ida", "board meeting")}


def test_every_outcome_and_every_proposal_is_on_record(desk):
    result = desk.review("2021Q2")
    with open_ledger(desk.ledger, read_only=True) as ledger:
        for one in result.rules:
            life = ledger.life(one.id)
            assert [e.kind for e in life].count("rule") == 1
            assert sum(e.kind == "outcome" for e in life) == len(one.triggers)
            (said,) = (e.body for e in life if e.kind == "review")
            assert said["proposed"] == one.status
            assert said["reasons"] == list(one.reasons)
            assert said["e_promise"] == one.broken.e
            assert said["looked_at"] == ["2021Q1", "2021Q2"]
    assert not entries(desk, "decision")


def test_a_revised_log_is_told_and_the_first_record_stands(tmp_path):
    world = small_world(5)
    desk = make_desk(tmp_path, world, [rule("a", "b")])
    before = desk.review("2021Q2")
    (pair,) = before.rules
    late = [t for t in pair.triggers if t.quarter == "2021Q2"]
    hit, miss = next(t for t in late if t.hit), next(t for t in late if not t.hit)
    gone = next(t for t in late if t.entity not in (hit.entity, miss.entity))
    s = session(hit.session)
    events = {e for e in world.events if not (e[0] == hit.entity and s < e[2] <= s + 4)}
    events.add((miss.entity, "upset", session(miss.session) + 2))
    g = session(gone.session)
    alerts = {a for a in world.alerts if not (a[0] == gone.entity and g - 4 <= a[2] <= g + 2)}
    make_desk(
        tmp_path,
        replace(world, events=frozenset(events), alerts=frozenset(alerts)),
        [rule("a", "b")],
    )
    after = desk.review("2021Q2")
    (now,) = after.rules
    assert now.triggers == pair.triggers
    assert now.broken == pair.broken
    (revision,) = now.revisions
    assert revision.quarter == "2021Q2"
    assert revision.vanished >= 1
    assert revision.changed >= 2
    assert any("the log was revised: 2021Q2" in reason for reason in now.reasons)
    # the review that says so is new, its evidence is not
    kinds = [e.kind for e in entries(desk)][after.entries[0] - 1 :]
    assert kinds == ["review"]


def test_accepting_writes_the_decisions_and_the_book(tmp_path):
    dead = small_world(4, hold=0.05)
    rules = [rule("a", "b", note="ask Ida"), rule("a", "c", "d", status="candidate")]
    desk = make_desk(tmp_path, dead, rules)
    proposed = desk.review("2021Q4")
    assert read_rule_book(desk.book).rule[0].status == "live"
    assert [one.status for one in proposed.rules] == ["retire", "too early"]
    assert [one.status_after for one in proposed.rules] == ["live", "candidate"]
    done = desk.review("2021Q4", accept=True, who="ida", why="as proposed")
    assert [one.status_after for one in done.rules] == ["retired", "candidate"]
    book = read_rule_book(desk.book)
    assert [r.status for r in book.rule] == ["retired", "candidate"]
    assert book.rule[0].note == "ask Ida"
    (decision,) = entries(desk, "decision")
    assert (decision.rule, decision.quarter) == (rules[0].id, "2021Q4")
    assert (decision.body["before"], decision.body["after"]) == ("live", "retired")
    assert (decision.who, decision.why) == ("ida", "as proposed")
    again = desk.review("2021Q4", accept=True)
    assert again.entries is None
    assert again.retired == ()
    assert next((o.status_before, o.status_after) for o in again.rules) == ("live", "retired")
    assert again.rules[0].settled.startswith("already decided by ida on 20")
    assert "nothing to carry out: already decided by ida on" in flat(again)
    assert "Carried out   " + rules[0].id + " retired" in flat(done)
    assert "--accept would set" not in flat(desk.review("2021Q4"))
    following = desk.review("2021Q4", accept=True, ledger=tmp_path / "another.sqlite")
    assert [one.id for one in following.retired] == [rules[0].id]


def test_an_older_quarter_does_not_undo_what_a_later_one_decided(tmp_path):
    rules = [rule("a", "b"), rule("c")]
    desk = make_desk(tmp_path, small_world(4, hold=0.05), rules, min_triggers=5)
    late = desk.review("2021Q4", accept=True, who="ida")
    assert late.rules[1].status_after == "retired"
    decisions = entries(desk, "decision")
    early = desk.review("2021Q1", accept=True, who="bob")
    pair = early.rules[1]
    assert (pair.status_before, pair.status) == ("live", "watch")
    assert pair.settled == "decided on 2021Q4 already: left as it is"
    assert any("decided on 2021Q4 already" in warning for warning in early.warnings)
    assert any("2021Q4 was reviewed already" in warning for warning in early.warnings)
    assert read_rule_book(desk.book).rule[1].status == "retired"
    assert [e for e in entries(desk, "decision") if e.rule == pair.id] == decisions[1:]


def test_a_dry_run_enters_nothing(desk):
    dry = desk.review("2021Q2", dry_run=True)
    assert not desk.ledger.exists()
    assert dry.unrecorded == "a dry run: nothing recorded"
    assert "Ledger        a dry run: nothing recorded" in flat(dry)
    wet = desk.review("2021Q2")
    assert dry.rules == wet.rules
    before = entries(desk)
    assert f"{len(before)} entries recorded in" in flat(wet)
    assert desk.review("2021Q3", dry_run=True, with_hunt=True).hunt is not None
    assert entries(desk) == before
    with pytest.raises(SettingsError, match="either accepted or a dry run"):
        desk.review("2021Q3", dry_run=True, accept=True)


def test_before_any_adoption_nothing_is_entered(tmp_path):
    desk = make_desk(tmp_path, small_world(5), [rule("a", "b")], held_to="2021-06-30")
    early = desk.review("2021Q2", with_hunt=True, accept=True)
    assert early.entries is None
    assert early.hunt is None
    assert "no rule of the book was adopted yet (first: 2021-07-01)" in flat(early)
    assert entries(desk) == []
    assert desk.review("2021Q3").entries is not None


def test_a_study_that_no_rule_fits_is_refused(tmp_path):
    rules = [rule("a", "kite", target="merger"), rule("a", "kite")]
    desk = make_desk(tmp_path, small_world(5), rules)
    with pytest.raises(SettingsError) as error:
        desk.review("2021Q2")
    assert 'does not know target "merger", alert type "kite"' in str(error.value)
    assert not desk.ledger.exists()


def test_a_status_that_people_changed_meanwhile_is_theirs(desk):
    book = read_rule_book(desk.book)
    first, second, third = book.rule
    changed = (first.model_copy(update={"status": "watch"}), second, third)
    write_rule_book(book.model_copy(update={"rule": changed}), desk.book, replace=True)
    set_statuses(desk.book, {first.id: ("live", "retired"), second.id: ("live", "watch")})
    assert [r.status for r in read_rule_book(desk.book).rule] == ["watch", "watch", "retired"]


def test_a_book_that_cannot_be_written_leaves_no_decision(tmp_path, monkeypatch):
    desk = make_desk(tmp_path, small_world(4, hold=0.05), [rule("a", "b")])

    def refuse(*args: Any, **more: Any) -> None:
        raise OSError("no space")

    monkeypatch.setattr("miner.review.engine.write_rule_book", refuse)
    with pytest.raises(OSError, match="no space"):
        desk.review("2021Q4", accept=True)
    assert entries(desk) == []


def test_a_rule_by_hand_counts_from_the_quarter_of_its_first_review(tmp_path):
    desk = make_desk(tmp_path, small_world(5), [rule("a", "b", run=None)])
    first = desk.review("2021Q2")
    (one,) = first.rules
    assert one.adopted == "2021-04-01"
    assert min(t.session for t in one.triggers) >= "2021-04-01"
    assert any("written by hand" in warning for warning in first.warnings)
    second = desk.review("2021Q3")
    assert second.rules[0].adopted == "2021-04-01"
    assert [line.quarter for line in second.rules[0].quarters] == ["2021Q2", "2021Q3"]
    (early,) = desk.review("2021Q1").rules
    assert early.status == "too early"
    assert early.since is None
    assert "after this quarter" in early.reasons[0]


def test_another_promise_is_told(desk):
    desk.review("2021Q1")
    book = read_rule_book(desk.book)
    lower = (book.rule[0].model_copy(update={"precision": 0.2}), *book.rule[1:])
    write_rule_book(book.model_copy(update={"rule": lower}), desk.book, replace=True)
    after = desk.review("2021Q2")
    assert any("the book promises 0.2, the ledger says 0.5" in w for w in after.warnings)
    assert len(entries(desk, "rule")) == 3
    assert after.rules[0].keep_above == pytest.approx(0.2 * after.keep_share)


def test_a_rule_of_what_the_study_does_not_know_has_no_triggers(tmp_path):
    desk = make_desk(tmp_path, small_world(5), [rule("a", "no such type"), rule("b", "c")])
    result = desk.review("2021Q2")
    lost = result.rules[0]
    assert (lost.since.triggers, lost.status) == (0, "too early")
    assert "no such type is not in the log" in lost.marks
    words = 'the study does not know the alert type "no such type" by the quarter\'s end'
    assert sum(words in warning for warning in result.warnings) == 1
    assert result.rules[1].since.triggers > 0


def test_a_study_that_begins_later_goes_on_from_the_ledger(tmp_path):
    """Quarters before the study's sessions are the ledger's; one it only sees a part of is not
    computed, and without a ledger that is said."""
    desk = make_desk(tmp_path, small_world(5), [rule("a", "b")])
    whole = desk.review("2021Q4", ledger=tmp_path / "whole.sqlite")
    desk.review("2021Q2")
    path = desk.folder / "study.toml"
    text = path.read_text().replace('start = "2021-01-01"', 'start = "2021-05-20"')
    path.write_text(text.replace('start = "2021-08-29"', 'start = "2021-11-01"'))
    later = desk.review("2021Q4")
    (before, now) = whole.rules[0], later.rules[0]
    assert [line.quarter for line in now.quarters] == ["2021Q1", "2021Q2", "2021Q3", "2021Q4"]
    assert [t[:5] for t in now.triggers] == [t[:5] for t in before.triggers]
    assert any("before the study's first session, 2021-05-20" in w for w in later.warnings)
    alone = desk.review("2021Q4", ledger=tmp_path / "alone.sqlite")
    assert [line.quarter for line in alone.rules[0].quarters] == ["2021Q3", "2021Q4"]
    assert any("neither in the study's sessions nor in the ledger" in w for w in alone.warnings)
