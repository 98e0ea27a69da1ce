"""What the report shows beyond the tables: slow twins, planted profiles, one whole run."""

import json
from collections import Counter
from itertools import pairwise

import numpy as np
import pytest
from report_fixtures import made_up_run
from worlds import Plant, make_world, write_world

from miner import load_study
from miner.assemble import assemble
from miner.candidates import candidates_table
from miner.evidence import gather
from miner.evidence.arrivals import arrivals
from miner.evidence.hits_null import hits_null
from miner.evidence.lead_times import (
    events_caught,
    lead_times,
    months_judged,
    share_caught,
    workload,
)
from miner.evidence.profiles import REACH, event_rates, profile, timing
from miner.evidence.rule_facts import latest_triggers
from miner.evidence.tables import in_stratum, with_rows, within
from miner.evidence.together import MOST_ARRIVALS, together
from miner.holdout import judge_holdout
from miner.hunting import split_sessions
from miner.kernels import profiles as kernels
from miner.panel import (
    Labels,
    Panel,
    Spans,
    distinct_events,
    label_sessions,
    pack_alerts,
    pack_coverage,
)
from miner.search import search
from miner.time_split import Segment, discovery_slice, holdout_slice
from miner.triggers import find_triggers
from miner.units import make_case, make_unit

WINDOWS = {"lookback": 5, "horizon": 5, "rest": 5}


def pairs(entity, session):
    return list(zip(entity.tolist(), session.tolist(), strict=True))


# --- lead times, load, events caught -------------------------------------------------------------


def test_lead_times_and_events_caught_are_those_of_a_search_event_by_event(case_of):
    case = case_of(3, n_entities=60, n_sessions=300, base_rate=0.15, busy_names=1.0, listing=0.3)
    events = set(pairs(*case.events))
    horizon = case.unit.horizon
    n_leads = 0
    for row in range(0, len(case.unit.triggers.combos), 7):
        calls = pairs(*case.unit.triggers.of(row))
        leads = [
            next((d for d in range(1, horizon + 1) if (e, t + d) in events), None) for e, t in calls
        ]
        expected = [lead for lead in leads if lead is not None]
        assert lead_times(case, row).tolist() == expected
        assert len(expected) == case.hits_c[row]
        called = {(e, t + d) for e, t in calls for d in range(1, horizon + 1)}
        caught = [event in called for event in pairs(*case.events)]
        assert events_caught(case, [row]).tolist() == caught
        assert share_caught(case, row) == pytest.approx(np.mean(caught))
        n_leads += len(expected)
    assert n_leads > 100
    both = events_caught(case, [0, 7])
    assert both.tolist() == (events_caught(case, [0]) | events_caught(case, [7])).tolist()


def test_a_repeated_trigger_inside_the_horizon_has_its_own_first_event():
    lead = kernels.sessions_to_event(
        np.array([0, 0, 0, 1, 3], np.int32),
        np.array([1, 3, 9, 4, 0], np.int32),
        np.array([0, 0, 1, 2], np.int32),
        np.array([3, 6, 4, 9], np.int32),
    )
    # an event on the trigger's own session is not after it
    assert lead.tolist() == [2, 3, -1, -1, -1]


def test_workload_is_triggers_over_months(case_of):
    case = case_of(3, n_entities=60, n_sessions=370)
    dates = np.datetime64("2020-01-01") + np.arange(370)
    # judged from session 4 to 364: 361 days
    assert months_judged(case, dates) == pytest.approx(361 / (365.25 / 12))
    n = case.unit.triggers.count_c[2]
    assert workload(case, 2, dates) == pytest.approx(n / (361 / (365.25 / 12)))


# --- the law of hits -----------------------------------------------------------------------------


def convolved(rates):
    chance = np.ones(1)
    for q in rates:
        chance = np.convolve(chance, [1 - q, q])
    return chance


@pytest.mark.parametrize("n", [1, 2, 7, 60, 900])
def test_the_law_of_hits_is_that_of_adding_trial_by_trial(n):
    rates = np.random.default_rng(n).beta(0.5, 2, n)
    null = hits_null(rates, 3)
    whole = convolved(rates)
    shown = whole[null.first : null.first + null.width * null.chance.size]
    sums = [shown[i : i + null.width].sum() for i in range(0, shown.size, null.width)]
    assert null.chance == pytest.approx(sums, abs=1e-12)
    assert null.chance.sum() > 1 - 1e-5
    assert null.expected == pytest.approx(rates.sum())
    assert null.chance.size <= 120


def test_the_law_of_hits_without_triggers_is_certain():
    null = hits_null(np.empty(0), 0)
    assert (null.first, null.chance.tolist()) == (0, [1.0])


@pytest.mark.parametrize("rate", [0.001, 0.02, 0.3, 0.97])
@pytest.mark.parametrize("n", [3, 200, 3000])
def test_quantiles_are_exact_and_the_smooth_form_is_within_one(n, rate):
    rates = np.random.default_rng(n).beta(2, 2 * (1 / rate - 1), n)
    below = np.cumsum(convolved(rates))
    levels = np.array([0.025, 0.5, 0.975])
    exact = np.searchsorted(below, levels - 1e-13)
    assert kernels.quantiles(rates, levels).tolist() == exact.tolist()
    v = rates * (1 - rates)
    if v.sum() >= kernels.FINE_VARIANCE:
        moments = rates.sum(), v.sum(), (v * (1 - 2 * rates)).sum()
        smooth = [kernels.least_reaching(level, *moments, n) for level in levels]
        assert np.abs(np.array(smooth) - exact).max() <= 1
        value = [kernels.refined_normal(x, *moments) for x in exact]
        assert value == pytest.approx(below[exact], abs=0.003)


# --- profiles ------------------------------------------------------------------------------------


def test_rates_of_events_hold_every_entity_and_every_peer_session(case_of):
    case = case_of(5, n_entities=80, n_sessions=250, busy_names=1.0, sector_shocks=1.0, listing=0.4)
    rates = event_rates(case)
    slot_et = case.unit.slot_et
    is_open = slot_et >= 0
    assert (np.isfinite(rates.rate_et) == is_open).all()
    assert 0 < (~is_open).sum() < is_open.size
    entity, session = case.events
    assert rates.is_event_et.sum() == entity.size > 200
    by_entity = np.nansum(rates.rate_et, axis=1)
    assert by_entity == pytest.approx(np.bincount(entity, minlength=by_entity.size), rel=1e-8)
    for g in range(len(case.unit.segment.panel.peers.names)):
        expected = np.where(slot_et == g, rates.rate_et, 0).sum(axis=0)
        seen = np.bincount(session[slot_et[entity, session] == g], minlength=expected.size)
        assert expected == pytest.approx(seen, rel=1e-8, abs=1e-8)


def test_a_profile_is_that_of_a_walk_trigger_by_trigger(case_of):
    case = case_of(4, n_entities=50, n_sessions=160, base_rate=0.2, busy_names=1.0, listing=0.4)
    rates = event_rates(case)
    events = set(pairs(*case.events))
    row = 3
    calls = pairs(*case.unit.triggers.of(row))
    found = profile(rates, *case.unit.triggers.of(row), case.unit.horizon)
    n_short = 0
    for i, k in enumerate(range(-REACH, REACH + 1)):
        cells = [
            (e, t + k)
            for e, t in calls
            if 0 <= t + k < 160 and np.isfinite(rates.rate_et[e, t + k])
        ]
        q = [rates.rate_et[cell] for cell in cells]
        below = np.cumsum(convolved(q))
        assert found.n[i] == len(cells)
        assert found.events[i] == sum(cell in events for cell in cells)
        assert found.expected[i] == pytest.approx(sum(q))
        assert found.low[i] == np.searchsorted(below, 0.025 - 1e-13)
        assert found.high[i] == np.searchsorted(below, 0.975 - 1e-13)
        n_short += len(cells) < len(calls)
    assert n_short > 5
    for side, offsets in ((found.before, range(-5, 0)), (found.after, range(1, 6))):
        cells = [
            (e, t + k)
            for e, t in calls
            for k in offsets
            if 0 <= t + k < 160 and np.isfinite(rates.rate_et[e, t + k])
        ]
        seen = sum(cell in events for cell in cells)
        assert side[0] == seen > 0
        chance = convolved([rates.rate_et[cell] for cell in cells])
        assert side[1] == pytest.approx(sum(rates.rate_et[cell] for cell in cells))
        assert side[2] == pytest.approx(chance[seen:].sum(), abs=1e-3)


def planted_panel(seed, shocks):
    """Three types: one 3 sessions before half of its events, one 2 after events, one of neither;
    with ``shocks``, a fourth drawn with the events from shared bad days."""
    rng = np.random.default_rng(seed)
    n_entities, n_sessions = 400, 500
    level = np.exp(rng.normal(0, 1.0 if shocks else 0.0, n_sessions))
    level /= level.mean()

    def draw(rate):
        return np.nonzero(rng.random((n_entities, n_sessions)) < rate * level)

    events = draw(0.004)
    calls = draw(0.002)
    early = (rng.random(calls[0].size) < 0.5) & (calls[1] + 3 < n_sessions)
    follows = (
        np.concatenate([events[0], calls[0][early]]),
        np.concatenate([events[1], calls[1][early] + 3]),
    )
    late = (rng.random(follows[0].size) < 0.4) & (follows[1] + 2 < n_sessions)
    types = [
        calls,
        (follows[0][late], follows[1][late] + 2),
        draw(0.003),
        draw(0.006),
    ]
    entity, session = (np.concatenate([t[i] for t in types]).astype(np.int32) for i in (0, 1))
    kind = np.repeat(np.arange(4), [t[0].size for t in types]).astype(np.int32)
    names = ("before", "after", "noise", "shared")
    return Panel(
        tuple(f"e{e}" for e in range(n_entities)),
        names,
        n_sessions,
        pack_alerts(entity, kind, session, n_entities, 4, n_sessions),
        {"upset": distinct_events(*(x.astype(np.int32) for x in follows))},
        *pack_coverage(None, n_entities, names, n_sessions),
        None,
        Labels(("",), np.zeros((n_entities, n_sessions), dtype=np.int16)),
    )


def whole_case(panel, combos):
    segment = Segment(panel, 0, panel.n_sessions - 1)
    table = find_triggers(segment, combos, None, **WINDOWS)
    unit = make_unit(segment, "all", None, table, **WINDOWS)
    return make_case("upset", unit, panel.events["upset"])


@pytest.mark.parametrize("shocks", [False, True])
def test_planted_profiles_are_recovered(shocks):
    case = whole_case(planted_panel(11, shocks), [(k,) for k in range(4)])
    rates = event_rates(case)
    found = [profile(rates, *case.unit.triggers.of(k), 5) for k in range(4)]
    rate = [p.events / p.n for p in found]
    before, after, noise, shared = found
    # half of the first type's alerts have their event three sessions later, and nowhere else
    assert np.argmax(rate[0]) - REACH == 3
    assert rate[0][REACH + 3] == pytest.approx(0.5, abs=0.06)
    # the second comes two sessions after events: they show before it
    assert np.argmax(rate[1]) - REACH == -2
    assert rate[1][REACH - 2] > 0.9
    for one, k in ((before, 3), (after, -2)):
        others = np.delete(np.arange(2 * REACH + 1), REACH + k)
        assert (one.events <= one.high)[others].mean() > 0.9
    for one in (noise, shared):
        is_outside = (one.events < one.low) | (one.events > one.high)
        assert is_outside.sum() <= 6  # two or fewer of 41 on average, by the discreteness
    level = 0.05 / 8
    assert [timing(p, level) for p in found] == ["precedes", "follows", "neither", "neither"]
    if shocks:
        # the null moves with the shared days; a flat one would be far below
        assert shared.expected[REACH] / shared.n[REACH] > 1.5 * rates.is_event_et.mean()


def test_the_band_of_noise_is_left_at_its_level():
    outside = []
    for seed in range(12):
        case = whole_case(planted_panel(100 + seed, True), [(2,), (3,)])
        rates = event_rates(case)
        for row in (0, 1):
            one = profile(rates, *case.unit.triggers.of(row), 5)
            outside.append(((one.events < one.low) | (one.events > one.high)).mean())
    # discrete, so at most 5 % on average; well above 0, or the band would say nothing
    assert 0.01 < np.mean(outside) < 0.06


def test_timing_tells_four_ways():
    case = whole_case(planted_panel(11, False), [(0,)])
    made = profile(event_rates(case), *case.unit.triggers.of(0), 5)

    def told(before, after):
        return timing(type(made)(*[made.n] * 5, (0, 0.0, before), (0, 0.0, after)), 0.01)

    assert [told(1, 0.001), told(0.001, 1), told(0, 0), told(0.5, 0.02)] == [
        "precedes",
        "follows",
        "both",
        "neither",
    ]


# --- arrivals ------------------------------------------------------------------------------------


def test_arrivals_are_those_of_looking_day_by_day(case_of):
    case = case_of(6, n_entities=80, n_sessions=300, clustered_alerts=1.0)
    panel = case.unit.segment.panel
    row = next(r for r, c in enumerate(case.unit.triggers.combos) if len(c) == 3)
    combo = case.unit.triggers.combos[row]
    entity, session = case.unit.triggers.of(row)
    is_hit = np.arange(entity.size) % 3 == 0
    found = arrivals(panel.alert_ekw, entity, session, is_hit, combo, 5)

    def alerted(e, k, t):
        return int(panel.alert_ekw[e, k, t // 64]) >> (t % 64) & 1

    ages, orders = [], Counter()
    for (e, t), hit in zip(pairs(entity, session), is_hit, strict=True):
        age = {k: max(d for d in range(5) if alerted(e, k, t - d)) for k in combo}
        ages.append([age[k] for k in combo])
        order = tuple(
            tuple(k for k in combo if age[k] == a) for a in sorted(set(age.values()), reverse=True)
        )
        orders[order] += np.array([1, hit])
    expected = sorted(((o, *map(int, n)) for o, n in orders.items()), key=lambda x: (-x[1], x[0]))
    assert len(expected) > 6
    assert list(found.orders) == expected[:6]
    assert found.other == tuple(int(sum(x[i] for x in expected[6:])) for i in (1, 2))
    assert found.median_age == tuple(np.median(ages, axis=0))
    assert found.completes == pytest.approx((np.array(ages) == 0).mean(axis=0))
    assert arrivals(panel.alert_ekw, entity[:0], session[:0], is_hit[:0], combo, 5).orders == ()


# --- types together ------------------------------------------------------------------------------


def test_types_together_are_counted_and_expected_arrival_by_arrival():
    panel = planted_panel(2, True)
    case = whole_case(panel, [(k,) for k in range(4)])
    singles = case.unit.triggers
    found = together(panel, singles, 7, n_workers=2)
    is_on = np.zeros((4, 400, 500), dtype=bool)
    for e in range(400):
        for k in range(4):
            word = int.from_bytes(panel.alert_ekw[e, k].tobytes(), "little")
            for t in range(500):
                is_on[k, e, t] = any(word >> s & 1 for s in range(max(0, t - 6), t + 1))
    for a in range(4):
        is_whole = singles.of(a)[1] >= 6  # the look-back lies inside the calendar
        entity, session = (x[is_whole] for x in singles.of(a))
        assert found.arrivals[a].tolist() == [entity.size] * 4
        assert found.seen[a].tolist() == [int(is_on[b][entity, session].sum()) for b in range(4)]
        assert found.seen[a, a] == entity.size
    assert np.isnan(np.diag(found.ratio)).all()
    # the second type comes two sessions after events, half of the first's three sessions later
    ratio, excess = found.ratio, found.excess
    assert ratio[1, 0] > 3
    assert excess[1, 0] > 10
    for a, b in ((2, 3), (3, 2), (2, 0), (0, 2)):
        assert abs(excess[a, b]) < 4
        assert 0.6 < ratio[a, b] < 1.5


def test_a_type_that_is_not_covered_is_no_companion_and_busy_days_are_none():
    rng = np.random.default_rng(4)
    n_entities, n_sessions = 1500, 300
    busy = rng.random((2, 1, n_sessions)) < 0.1
    draw = [
        np.nonzero(rng.random((n_entities, n_sessions)) < np.where(busy[0], 0.08, 0.002))
        for _ in range(2)
    ]
    names = ("a", "b")
    half = np.arange(0, n_entities, 2)
    spans = Spans(
        np.concatenate([np.arange(n_entities), half]),
        np.zeros(n_entities + half.size, dtype=int),
        np.full(n_entities + half.size, n_sessions - 1),
        np.repeat([0, 1], [n_entities, half.size]),
        names,
    )
    entity, session = (np.concatenate([d[i] for d in draw]).astype(np.int32) for i in (0, 1))
    kind = np.repeat([0, 1], [d[0].size for d in draw]).astype(np.int32)
    panel = Panel(
        tuple(map(str, range(n_entities))),
        names,
        n_sessions,
        pack_alerts(entity, kind, session, n_entities, 2, n_sessions),
        {},
        *pack_coverage(spans, n_entities, names, n_sessions),
        None,
        Labels(("",), np.zeros((n_entities, n_sessions), dtype=np.int16)),
    )
    singles = find_triggers(Segment(panel, 0, n_sessions - 1), [(0,), (1,)], None, **WINDOWS)
    found = together(panel, singles, 5)
    where = singles.of(0)[0]
    assert found.arrivals[0, 1] == (where % 2 == 0).sum() < where.size
    assert found.ratio[0, 1] == pytest.approx(1, abs=0.2)
    # without the null's days it would look like company
    share_on = found.seen[1, 0] / found.arrivals[1, 0]
    assert share_on > 1.7 * (1 - (1 - 0.1 * 0.08 - 0.9 * 0.002) ** 5)


def test_many_arrivals_are_thinned_evenly(monkeypatch):
    panel = planted_panel(2, False)
    singles = whole_case(panel, [(k,) for k in range(4)]).unit.triggers
    whole = together(panel, singles, 5)
    monkeypatch.setattr("miner.evidence.together.MOST_ARRIVALS", 100)
    some = together(panel, singles, 5)
    steps = [-(-n // 100) for n in singles.count_c]
    assert [int(n) for n in some.arrivals[:, 0]] == [
        -(-n // step) for n, step in zip(singles.count_c, steps, strict=True)
    ]
    assert min(steps) > 1
    assert some.ratio[1, 0] == pytest.approx(whole.ratio[1, 0], rel=0.4)
    assert MOST_ARRIVALS >= 20_000


# --- cuts of tables, latest triggers -------------------------------------------------------------


def test_cuts_of_a_table_keep_its_rows(case_of):
    case = case_of(3, n_entities=40, n_sessions=200)
    table = case.unit.triggers
    rows = [5, 0, 2]
    cut = with_rows(table, rows)
    assert cut.combos == tuple(table.combos[row] for row in rows)
    late = within(table, table.session > 100)
    for i, row in enumerate(rows):
        assert pairs(*cut.of(i)) == pairs(*table.of(row))
        assert pairs(*late.of(row)) == [(e, t) for e, t in pairs(*table.of(row)) if t > 100]
    panel = case.unit.segment.panel
    spans = Spans(np.arange(40), np.zeros(40, int), np.full(40, 199), np.arange(40) % 2, ("x", "y"))
    labelled = Panel(
        *(
            getattr(panel, field)
            for field in (
                "entity_names",
                "type_names",
                "n_sessions",
                "alert_ekw",
                "events",
                "cover_eqw",
                "class_k",
            )
        ),
        label_sessions(spans, 40, 200),
        panel.peers,
    )
    assert in_stratum(table, labelled, None) is table
    odd = in_stratum(table, labelled, 1)
    assert pairs(*odd.of(0)) == [(e, t) for e, t in pairs(*table.of(0)) if e % 2]


def test_latest_triggers_and_what_is_still_open():
    panel = planted_panel(11, False)
    last = panel.n_sessions - 1
    table = find_triggers(Segment(panel, 0, last), [(2,)], None, **WINDOWS | {"horizon": 0})
    found = latest_triggers(panel, *table.of(0), "upset", 5)
    events = set(pairs(*panel.events["upset"]))
    told = sorted(pairs(*table.of(0)), key=lambda c: (-c[1], c[0]))[:20]
    assert [(x.entity, x.session) for x in found] == told
    for x in found:
        wait = next((d for d in range(1, 6) if (x.entity, x.session + d) in events), 0)
        assert x.wait == wait
        assert x.is_open == (not wait and x.session + 5 > last)
    assert {x.is_open for x in found} == {True, False}


# --- a whole run ---------------------------------------------------------------------------------

PLANTS = (
    Plant((0, 1), 0.6, 200),
    Plant((2, 3, 4), 0.7, 150),
    Plant((5, 6), 0.5, 90, stratum="mid"),
)


@pytest.fixture(scope="module")
def hunted(tmp_path_factory):
    """The pieces of a hunt, as ``gather`` takes them."""
    folder = tmp_path_factory.mktemp("hunted")
    world = make_world(
        8, n_entities=250, n_sessions=700, alerts_per_type=2500, base_rate=0.04, busy_names=0.5,
        sector_shocks=0.5, planted=PLANTS,
    )  # fmt: skip
    study = load_study(
        write_world(
            world,
            folder,
            strata=True,
            settings={"testing": {"permutations": 0, "placebo": 0}, "holdout": {"share": 0.35}},
        )
    )
    inputs = assemble(study)
    last, first = split_sessions(inputs)
    found = search(discovery_slice(inputs.panel, last), inputs.targets, study)
    late = holdout_slice(inputs.panel, first, inputs.panel.n_sessions - 1)
    outcomes = judge_holdout(late, found.chosen(), alpha=0.05, **study.windows.model_dump())
    candidates = candidates_table(found, outcomes)
    return found, outcomes, candidates, inputs.panel, inputs.calendar.dates, study, first


def gathered(hunted, **options):
    *pieces, first = hunted
    return gather(*pieces, holdout_first=first, **options)


@pytest.fixture(scope="module")
def evidence(hunted):
    return gathered(hunted, warnings=("mind this",)).as_dict()


def test_a_runs_evidence_agrees_with_its_tables(hunted, evidence):
    _, outcomes, candidates, *_ = hunted
    rules = candidates[candidates["rule_order"].notna()].sort_values("rule_order")
    assert len(rules) == len(evidence["rules"]) >= 3
    strata_seen = set()
    for row, facts, outcome in zip(rules.itertuples(), evidence["rules"], outcomes, strict=True):
        early, late = facts["null"]["discovery"], facts["null"]["holdout"]
        assert (early["triggers"], early["hits"]) == (row.triggers, row.hits)
        assert early["expected"] == pytest.approx(row.expected_hits, rel=1e-5)
        assert (late["triggers"], late["hits"]) == (outcome.triggers, outcome.hits)
        assert late["expected"] == pytest.approx(outcome.expected, rel=1e-5)
        parts = facts["parts"]
        assert len(parts) == 2**row.size - 1
        assert " + ".join(parts[-1]["types"]) == row.combination
        assert (parts[-1]["triggers"], parts[-1]["hits"]) == (row.triggers, row.hits)
        assert parts[-1]["low"] == pytest.approx(row.precision_low, rel=1e-4)
        for part in parts[:-1]:
            same = candidates.query(
                "stratum == @row.stratum and combination == @name",
                local_dict={"name": " + ".join(part["types"]), "row": row},
            )
            for other in same.itertuples():
                assert (part["triggers"], part["hits"]) == (other.triggers, other.hits)
        strata = {s["name"]: s for s in facts["strata"]}
        assert set(strata) == {"small", "mid", "large"}
        held = [s["holdout"] for s in strata.values() if s["holdout"]]
        assert sum(h["triggers"] for h in held) == outcome.triggers
        assert sum(h["hits"] for h in held) == outcome.hits
        if row.stratum != "all":
            assert len(held) == 1
            assert strata[row.stratum]["discovery"]["triggers"] == row.triggers
        strata_seen.add(row.stratum)
        assert facts["load"]["triggers"] >= row.triggers + outcome.triggers
        assert sum(facts["lead"]["counts"]) >= row.hits + outcome.hits
        assert facts["profile"]["discovery"]["after"]["events"] >= row.hits
        assert len(facts["latest"]) == 20
        assert [x["date"] for x in facts["latest"]] == sorted(
            (x["date"] for x in facts["latest"]), reverse=True
        )
        assert (
            sum(o["triggers"] for o in facts["arrivals"]["orders"]) + facts["arrivals"]["other"][0]
            == facts["load"]["triggers"]
        )
    assert {"all"} < strata_seen


def test_confirmed_rules_together_count_each_call_once(hunted, evidence):
    _, outcomes, *_ = hunted
    (load,) = evidence["loads"]
    held = [
        facts
        for facts, outcome in zip(evidence["rules"], outcomes, strict=True)
        if outcome.verdict == "confirmed"
    ]
    assert load["rules"] == len(held) >= 2
    each = [facts["load"]["triggers"] for facts in held]
    assert max(each) < load["triggers"] < sum(each)
    assert (
        load["share_caught"]
        >= max(f["load"]["share_caught"] * f["load"]["events"] / load["events"] for f in held)
        - 1e-6
    )


def test_single_types_and_pairs_of_a_run(hunted, evidence):
    *_, panel, _, _, _ = hunted
    n_types = len(panel.type_names)
    assert len(evidence["profiles"]) == n_types
    precede = {p["type"] for p in evidence["profiles"] if p["timing"] == "precedes"}
    assert {0, 1, 2, 3, 4} <= precede <= {0, 1, 2, 3, 4, 5, 6}
    ratio = np.array(evidence["together"]["ratio"], dtype=float)
    excess = np.array(evidence["together"]["excess"], dtype=float)
    for combo in (plant.combination for plant in PLANTS):
        for a, b in pairwise(combo):
            assert ratio[a, b] > 1.1
            assert excess[a, b] > 4
    free = excess[7:, 7:][~np.eye(n_types - 7, dtype=bool)]
    assert np.abs(free).max() < 4


def test_evidence_is_plain_and_the_same_for_any_number_of_workers(hunted, evidence):
    text = json.dumps(evidence, allow_nan=False)
    assert json.loads(text) == evidence
    again = gathered(hunted, warnings=("mind this",), n_workers=3).as_dict()
    assert json.dumps(again) == text
    assert evidence["warnings"] == ["mind this"]


def shape(value):
    """What a JSON value is made of: keys, and the shapes that stand in lists."""
    if isinstance(value, dict):
        return {key: shape(item) for key, item in value.items()}
    if isinstance(value, list):
        return [shape(value[0])] if value else []
    return type(value) if isinstance(value, str) else float


def test_the_made_up_run_of_the_reports_tests_has_this_shape(evidence, tmp_path):
    made_up_run(tmp_path)
    made_up = json.loads((tmp_path / "evidence.json").read_text(encoding="utf-8"))
    for facts in (*made_up["rules"], *evidence["rules"]):
        for stratum in facts["strata"]:
            stratum["holdout"] = None
    assert shape(made_up) == shape(evidence)


def test_where_the_nulls_part_is_counted(hunted):
    _, _, candidates, *_ = hunted
    turned = candidates.copy()
    turned["p_own_timing"] = 1.0
    found = gathered((*hunted[:2], turned, *hunted[3:]))
    passed = int((turned["q_value"] <= 0.05).sum())
    assert passed > 5
    assert found.disagreement.margins_only == passed
    assert found.disagreement.own_timing_only == 0


def test_a_hunt_without_rules_has_evidence_too(tmp_path):
    world = make_world(1, n_entities=60, n_sessions=300, alerts_per_type=600, n_types=5)
    study = load_study(
        write_world(world, tmp_path, settings={"testing": {"permutations": 0, "placebo": 0}})
    )
    inputs = assemble(study)
    last, first = split_sessions(inputs)
    found = search(discovery_slice(inputs.panel, last), inputs.targets, study)
    assert not found.chosen()
    made = gather(
        found, [], candidates_table(found, []), inputs.panel, inputs.calendar.dates, study,
        holdout_first=first,
    ).as_dict()  # fmt: skip
    assert made["rules"] == made["loads"] == []
    assert len(made["profiles"]) == 5
    json.dumps(made, allow_nan=False)
