"""Scanning day by day finds exactly the hunt's triggers, and never looks beyond its day."""

from __future__ import annotations

import csv
import datetime as dt
import io
import json
from collections import Counter
from dataclasses import replace
from itertools import combinations

import numpy as np
import pandas as pd
import pytest

from miner import load_study
from miner import scan as scan_module
from miner.assemble import assemble
from miner.errors import InputError, SettingsError, TableError
from miner.read_tables import read_log
from miner.rule_book import RuleBook, read_rule_book, rule_id, write_rule_book
from miner.rule_book.records import BookRule
from miner.rule_cases import combo_of, stratum_code
from miner.scan import scan
from miner.scan_output import scan_csv, scan_json, scan_lines
from miner.session_calendar import build_calendar
from miner.settings import study_from_dict
from miner.time_split import Segment
from miner.triggers import find_triggers

FIRST = dt.date(2021, 1, 1)
TYPES = ("ash", "birch", "cedar")
N_SESSIONS = 70


def day(t: int) -> str:
    return (FIRST + dt.timedelta(days=t)).isoformat()


def sessions_on(t: int, n: int, calendar: str) -> int:
    """The day, counted from the first, of the session that is ``n`` after the one on day ``t``."""
    if calendar == "daily":
        return t + n
    return int((np.busday_offset(day(t), n) - np.datetime64(FIRST)).astype(int))


def make_rule(combination, lookback=2, horizon=3, rest=3, stratum="all", **more) -> BookRule:
    keys = {
        "target": "upset", "stratum": stratum, "combination": tuple(combination),
        "lookback": lookback, "horizon": horizon, "rest": rest,
    }  # fmt: skip
    return BookRule(id=rule_id(**keys), **keys, **more)


def make_book(rules, calendar="daily", **more) -> RuleBook:
    sessions = {"calendar": calendar, "close": "16:00:00", "timezone": "UTC", "start": day(0)}
    return RuleBook(format=1, sessions=sessions, rule=tuple(rules), **more)


@pytest.fixture(params=range(6))
def world(request, tmp_path):
    """A dense log, bands that change and coverage with holes; every rule in every stratum."""
    rng = np.random.default_rng(request.param)
    lookback = int(rng.integers(1, 5))
    calendar = ("daily", "weekdays")[request.param % 2]
    windows = lookback, int(rng.integers(1, 6)), int(rng.integers(0, 15))
    entities = [f"n{i}" for i in range(7)]
    rows = [
        (e, f"{day(t)} {rng.integers(0, 24):02d}:{rng.integers(0, 60):02d}:00", k)
        for e in entities
        for k in TYPES
        for t in range(N_SESSIONS)
        if rng.random() < rng.choice([0.08, 0.35])
    ]
    rows.append(("stranger", f"{day(30)} 12:00:00", "ash"))
    rng.shuffle(rows)
    tables = {
        "alerts": (["entity", "time", "type"], rows),
        "events": (["entity", "time", "type"], [("n0", f"{day(9)} 12:00:00", "upset")]),
        "groups": (
            ["entity", "start", "end", "band"],
            [(e, "", day(33), "low") for e in entities[:5]]
            + [(e, day(34), "", "high") for e in entities[:4]]
            + [(e, "", "", "high") for e in entities[5:]],
        ),
        "coverage": (
            ["entity", "type", "start", "end"],
            [(e, "", "", day(50)) for e in entities[:3]]
            + [(e, k, day(12), "") for e in entities[3:] for k in TYPES[: 1 + int(e[1]) % 3]]
            + [(entities[0], "ash", day(54), "")],
        ),
    }
    for name, (header, body) in tables.items():
        with (tmp_path / f"{name}.csv").open("w", newline="") as file:
            csv.writer(file).writerows([header, *body])
    (tmp_path / "study.toml").write_text(
        '[alerts]\nsource = "alerts.csv"\n[events]\nsource = "events.csv"\n'
        '[groups]\nsource = "groups.csv"\nstrata = "band"\npooled = true\n'
        '[coverage]\nsource = "coverage.csv"\n'
        f'[sessions]\ncalendar = "{calendar}"\nstart = "{day(0)}"\nend = "{day(N_SESSIONS - 1)}"\n'
        f"[windows]\nlookback = {windows[0]}\nhorizon = {windows[1]}\nrest = {windows[2]}\n"
    )
    rules = [
        make_rule(combination, *windows, stratum)
        for size in (1, 2, 3)
        for combination in combinations(TYPES, size)
        for stratum in ("all", "low", "high")
    ]
    book = make_book(
        rules,
        calendar,
        groups={"source": "groups.csv", "strata": "band", "pooled": True},
        coverage={"source": "coverage.csv"},
    )
    inputs = assemble(load_study(tmp_path / "study.toml"))
    dates = inputs.calendar.dates.astype(str).tolist()
    return tmp_path, book, hunted(inputs, rules), dates


def hunted(inputs, rules):
    """(rule, entity, session) of every trigger the hunt's kernel finds on the whole timeline."""
    panel = inputs.panel
    found = set()
    for rule in rules:
        table = find_triggers(
            Segment(panel, 0, panel.n_sessions - 1),
            [combo_of(panel, rule.combination)],
            stratum_code(panel, rule.stratum),
            lookback=rule.lookback, horizon=0, rest=rule.rest,
        )  # fmt: skip
        found |= {
            (rule.id, panel.entity_names[e], t)
            for e, t in zip(*(x.tolist() for x in table.of(0)), strict=True)
        }
    return found


@pytest.mark.parametrize("rests", [0, 3])
def test_day_by_day_is_the_hunt(world, rests, monkeypatch):
    """Also when the scan begins by reading the look-back alone and has to reach back for rests."""
    folder, book, expected, dates = world
    monkeypatch.setattr(scan_module, "RESTS", rests)
    rule = book.rule[0]
    horizon = rule.horizon
    new, reached = set(), Counter()
    index = dates.index
    for t in range(1, len(dates)):
        as_of = dt.date.fromisoformat(dates[t])
        if t + 1 < len(dates):  # the day before the next session: a Sunday, where there is one
            as_of = dt.date.fromisoformat(dates[t + 1]) - dt.timedelta(1)
        found = scan(book, folder / "alerts.csv", book_folder=folder, as_of=as_of)
        assert found.as_of == dates[t]
        hits = {(hit.rule.id, hit.entity, index(hit.session)) for hit in found.hits}
        assert hits == {x for x in expected if t - horizon < x[2] <= t}
        assert all(hit.sessions_left == index(hit.session) + horizon - t for hit in found.hits)
        new |= {(h.rule.id, h.entity, index(h.session)) for h in found.hits if h.is_new}
        first = max(0, t - max(horizon, rule.rest) - rule.lookback - rests * rule.rest)
        reached["start" if found.first_session == dates[0] else "part"] += 1
        reached["further"] += index(found.first_session) < first
    if rule.rest < 8:
        assert reached["part"] > 10
    if rests == 0 and rule.rest > 2:
        assert reached["further"] > 10
    assert new == {x for x in expected if x[2] > 0}
    assert len(new) > 40


def test_a_view_that_is_settled_tells_the_truth_from_there_on(world):
    """Wherever a view begins: if it says its triggers are settled from a session on, they are."""
    folder, book, expected, dates = world
    sections = book.within(folder) | {
        "alerts": {"source": "alerts.csv"}, "events": {"source": "none"},
    }  # fmt: skip
    sections["sessions"] |= {"end": dates[-1]}
    study = study_from_dict(sections, folder)
    reader = scan_module._Reader(
        study, read_log(study, "alerts"), build_calendar(study, 0, 0), book.rule
    )
    settled = unsettled = 0
    for first in range(len(dates) - 12):
        view = reader._view(first)
        for rule in book.rules_with(["candidate"])[::3]:  # each combination, in all strata
            alone = replace(view, rules=(rule,))
            found = {
                (rule.id, view.panel.entity_names[e], t + first)
                for e, t in zip(*(part.tolist() for part in alone.triggers(rule)), strict=True)
            }
            for start in range(rule.lookback, len(dates) - first, 5):
                if not alone.is_settled(start):
                    unsettled += 1
                    continue
                settled += 1
                later = first + start
                mine = {x for x in found if x[2] >= later}
                assert mine == {x for x in expected if x[0] == rule.id and x[2] >= later}
    assert settled > 200
    assert unsettled > 20 or book.rule[0].rest < 3


def test_nothing_after_the_day_changes_the_answer(world):
    folder, book, *_ = world
    log = pd.read_csv(folder / "alerts.csv")
    rng = np.random.default_rng(1)
    seen = [0, 0]
    for t in (9, 34, 45, 52):
        limit = f"{day(t)} 16:00:00"
        before = log[log["time"] <= limit]
        drawn = rng.integers(0, len(log), 400)
        later = log.iloc[drawn].assign(time=[f"{day(t + 1 + i % 15)} 09:00:00" for i in range(400)])
        after_close = log.iloc[drawn[:50]].assign(time=f"{day(t)} 16:00:01")
        answers = []
        for i, table in enumerate((log, before, pd.concat([later, before, after_close]))):
            path = folder / f"log{i}.csv"
            table.to_csv(path, index=False)
            found = scan(book, path, book_folder=folder, as_of=FIRST + dt.timedelta(t))
            answers.append((found.hits, found.one_short, found.as_of, found.n_alerts))
        assert answers[0] == answers[1] == answers[2]
        seen = [seen[0] + len(answers[0][0]), seen[1] + len(answers[0][1])]
    assert min(seen) > 3


def test_one_short_is_what_one_more_alert_completes(world):
    """Adding the missing alert on any session it has left for, and not after, makes the trigger."""
    folder, book, *_ = world
    log = pd.read_csv(folder / "alerts.csv")
    tried = 0
    for t in (20, 45):
        as_of = FIRST + dt.timedelta(t)
        path = folder / "cut.csv"
        before = log[log["time"] <= f"{day(t)} 16:00:00"]
        before.to_csv(path, index=False)
        short = scan(book, path, book_folder=folder, as_of=as_of).one_short
        for item in [s for s in short if s.rule.stratum == "all"][:12]:
            last = sessions_on(t, item.sessions_left, book.sessions["calendar"])
            after = sessions_on(t, item.sessions_left + 1, book.sessions["calendar"])
            rows = [[item.entity, f"{day(last)} 10:00:00", item.missing]]
            more = pd.concat([before, pd.DataFrame(rows, columns=log.columns)])
            more.to_csv(path, index=False)
            then = scan(book, path, book_folder=folder, as_of=FIRST + dt.timedelta(last))
            keys = {(h.rule.id, h.entity) for h in then.hits if h.is_new}
            is_covered_then = last <= 50 or item.entity not in ("n0", "n1", "n2")
            if is_covered_then:
                assert (item.rule.id, item.entity) in keys
                tried += 1
            too_late = [[item.entity, f"{day(after)} 10:00:00", item.missing]]
            more = pd.concat([before, pd.DataFrame(too_late, columns=log.columns)])
            more.to_csv(path, index=False)
            then = scan(book, path, book_folder=folder, as_of=FIRST + dt.timedelta(after))
            keys = {(h.rule.id, h.entity) for h in then.hits if h.is_new}
            assert (item.rule.id, item.entity) not in keys
    assert tried > 3


LOG = """entity,time,type
x,2021-03-01 10:00:00,ash
x,2021-03-01 11:00:00+01:00,ash
x,2021-03-02,birch
y,2021-03-02 17:30:00,ash
z,2021-03-03 09:00:00,birch
"""


@pytest.fixture
def small(tmp_path):
    (tmp_path / "log.csv").write_text(LOG)
    rules = [make_rule(("ash", "birch"), precision=0.4, precision_low=0.3, precision_high=0.5),
             make_rule(("ash",), rest=9, status="retired")]  # fmt: skip
    return tmp_path, make_book(rules)


def test_a_hit_tells_its_alerts_and_what_is_left(small):
    folder, book = small
    found = scan(book, folder / "log.csv", book_folder=folder)
    assert found.as_of == "2021-03-03"
    (hit,) = found.hits
    assert (hit.entity, hit.session, hit.sessions_left, hit.is_new) == ("x", "2021-03-02", 2, False)
    assert [(a.type, a.stamp) for a in hit.alerts] == [
        ("ash", "2021-03-01T10:00:00+00:00"), ("birch", "2021-03-02"),
    ]  # fmt: skip
    assert hit.past_triggers is None
    assert {(s.entity, s.missing, s.sessions_left) for s in found.one_short} == {
        ("y", "birch", 1), ("z", "ash", 1),
    }  # fmt: skip
    assert found.n_rules == 1  # the other is retired
    everything = scan(book, folder / "log.csv", book_folder=folder, statuses=("retired",))
    assert {hit.entity for hit in everything.hits} == {"x", "y"}


def test_the_log_that_begins_too_late_is_told_of(small):
    folder, book = small
    found = scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2021, 3, 2))
    assert "The log begins on 2021-03-01" in found.warnings[0]
    assert "2 alerts of later sessions" in found.warnings[1]  # one of them after the close
    rows = "".join(f"w,{day(t)} 10:00:00,ash\n" for t in range(40, 60, 5))
    (folder / "log.csv").write_text(LOG + rows)
    assert not scan(book, folder / "log.csv", book_folder=folder).warnings


def test_past_triggers_come_from_the_history_and_the_log(small):
    folder, book = small
    rule = book.rule[0].id
    (folder / "h.csv").write_text(
        "rule,entity,session,outcome\n"
        f"{rule},x,2021-01-05,hit\n{rule},x,2021-01-09,miss\n{rule},x,2021-02-28,hit\n"
        f"{rule},x,2021-04-01,hit\n{rule},y,2021-01-05,hit\n"
    )
    book = RuleBook.model_validate({**book.model_dump(), "history": {"source": "h.csv"}})
    (hit,) = scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2021, 3, 2)).hits
    # what came of the trigger of 28 February was not known on 2 March
    assert (hit.past_triggers, hit.past_hits, hit.past_open) == (3, 1, 1)
    (hit,) = scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2021, 3, 4)).hits
    assert (hit.past_triggers, hit.past_hits, hit.past_open) == (3, 2, 0)
    (folder / "h.csv").write_text("rule,entity\n1,2\n")
    with pytest.raises(TableError, match="Make the rule book again"):
        scan(book, folder / "log.csv", book_folder=folder)


def test_the_three_forms_say_the_same(small):
    folder, book = small
    found = scan(book, folder / "log.csv", book_folder=folder)
    record = json.loads(scan_json(found))
    assert record["format"] == 1
    rows = list(csv.DictReader(io.StringIO(scan_csv(found))))
    assert len(rows) == len(record["hits"]) + len(record["one_short"]) == 3
    assert rows[0]["combination"] == "ash + birch"
    assert float(rows[0]["precision"]) == record["hits"][0]["precision"] == 0.4
    assert rows[0]["alerts"] == "ash at 2021-03-01T10:00:00+00:00; birch at 2021-03-02"
    text = "\n".join(scan_lines(found))
    assert "40% (30-50)" in text
    assert "compliance" in text
    assert "x" in text
    none = scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2021, 1, 9))
    assert "Nothing has triggered" in "\n".join(scan_lines(none))


def test_wrong_input_is_refused_in_the_users_words(small):
    folder, book = small
    with pytest.raises(SettingsError, match="be after the study's start 2021-01-01"):
        scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2020, 5, 1))
    with pytest.raises(TableError, match="be a file that exists"):
        scan(book, folder / "gone.csv", book_folder=folder)
    moved = book.model_copy(update={"groups": {"source": "gone.csv", "strata": "band"}})
    with pytest.raises(InputError, match=r"gone\.csv"):
        scan(moved, folder / "log.csv", book_folder=folder)


def test_renamed_columns_come_with_the_book(small):
    folder, book = small
    (folder / "log.csv").write_text(LOG.replace("entity,time,type", "ticker,at,kind"))
    columns = {"columns": {"entity": "ticker", "time": "at", "type": "kind"}}
    book = book.model_copy(update={"alerts": columns})
    write_rule_book(book, folder / "rules.toml")
    again = read_rule_book(folder / "rules.toml")
    assert len(scan(again, folder / "log.csv", book_folder=folder).hits) == 1


def test_a_morning_without_alerts_has_nothing_to_say(small):
    folder, book = small
    (folder / "log.csv").write_text("entity,time,type\n")
    found = scan(book, folder / "log.csv", book_folder=folder, as_of=dt.date(2021, 3, 2))
    assert (found.hits, found.one_short, found.n_alerts) == ((), (), 0)
    with pytest.raises(TableError, match="got no rows"):
        scan(book, folder / "log.csv", book_folder=folder)


def test_a_book_without_rules_has_nothing_to_say(small):
    folder, book = small
    found = scan(book, folder / "log.csv", book_folder=folder, statuses=("live",))
    assert (found.hits, found.one_short, found.n_rules) == ((), (), 0)
