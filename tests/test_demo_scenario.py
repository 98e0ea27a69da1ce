"""The demo and the test worlds, recounted from what they hand on, by other means than made them."""

import json
import re
import tomllib
from dataclasses import fields
from itertools import combinations
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import binom
from worlds import BANDS, TARGET, Plant, make_world, write_world

from miner.demo.scenario import DEFAULT_SEED, HOLDOUT_START, write_demo
from miner.demo.stamps import local_stamps, weekdays, written_stamps
from miner.demo.world_parts import company_names, planting_slots

LOOKBACK = HORIZON = REST = 5
CALENDAR = pd.bdate_range("2019-01-02", "2023-12-29")
CLOSES = (CALENDAR + pd.Timedelta("16:30:00")).tz_localize("Europe/London")


def session_of(text):
    """First session whose close is at or after each stamp; len(CALENDAR) after the last."""
    text = pd.Series(text)
    has_offset = text.str.len() > 19
    naive = pd.DatetimeIndex(pd.to_datetime(text[~has_offset])).tz_localize("Europe/London")
    stamp = pd.Series(pd.NaT, text.index, dtype="datetime64[ns, UTC]")
    stamp[~has_offset] = naive.tz_convert("UTC")
    stamp[has_offset] = pd.to_datetime(text[has_offset], utc=True)
    return CLOSES.tz_convert("UTC").searchsorted(pd.DatetimeIndex(stamp))


def spans(table, codes, n_sessions, first_day=CALENDAR[0], days=CALENDAR):
    """Entity code and half-open sessions of the rows of a dated table."""
    start = days.searchsorted(pd.to_datetime(table["start"]).fillna(first_day))
    stop = days.searchsorted(pd.to_datetime(table["end"]).fillna(days[-1]), side="right")
    assert (start < stop).all()
    assert stop.max() <= n_sessions
    return table["entity"].map(codes).to_numpy(), start, stop


def triggers(is_on):
    """Entity and session of each rising edge at least REST after the last kept one."""
    before = np.zeros_like(is_on)
    before[:, 1:] = is_on[:, :-1]
    kept = []
    last_entity, last_session = -1, 0
    for entity, session in np.argwhere(is_on & ~before).tolist():
        if entity != last_entity or session - last_session >= REST:
            kept.append((entity, session))
            last_entity, last_session = entity, session
    return np.array(kept, dtype=int).reshape(-1, 2).T


def kept_on(is_alert, lookback=LOOKBACK):
    is_on = is_alert.copy()
    for lag in range(1, lookback):
        is_on[..., lag:] |= is_alert[..., :-lag]
    return is_on


def followed(is_event, horizon=HORIZON):
    is_followed = np.zeros_like(is_event)
    for lag in range(1, horizon + 1):
        is_followed[:, :-lag] |= is_event[:, lag:]
    return is_followed


def cells(shape, *codes):
    grid = np.zeros(shape, dtype=bool)
    grid[codes] = True
    return grid


@pytest.fixture(scope="module", params=[DEFAULT_SEED, 1])
def demo(request, tmp_path_factory):
    """The demo read back from its files, as grids over (type,) company and session."""
    folder = tmp_path_factory.mktemp("demo")
    truth = write_demo(folder, seed=request.param)
    alerts = pd.read_parquet(folder / "alerts.parquet")
    events, groups, coverage = (
        pd.read_csv(
            folder / f"{name}.csv", keep_default_na=False, na_values={"start": "", "end": ""}
        )
        for name in ("events", "groups", "coverage")
    )
    names = pd.unique(groups["entity"])
    types = sorted(set(coverage["type"]))
    codes, kinds = pd.Series(range(len(names)), names), pd.Series(range(len(types)), types)
    shape = len(names), len(CALENDAR)

    alerts["session"] = session_of(alerts["time"])
    events["session"] = session_of(events["time"])
    known = alerts[alerts["entity"].isin(names) & (alerts["session"] < len(CALENDAR))]
    code = known["type"].map(kinds), known["entity"].map(codes), known["session"]
    target = events[events["type"] == truth.target]

    is_covered = np.zeros((len(types), *shape), dtype=bool)
    kind = coverage["type"].map(kinds)
    for k, e, start, stop in zip(kind, *spans(coverage, codes, shape[1]), strict=True):
        is_covered[k, e, start:stop] = True
    band = np.full(shape, "", dtype="U5")
    for name, e, start, stop in zip(
        groups["size_band"], *spans(groups, codes, shape[1]), strict=True
    ):
        assert (band[e, start:stop] == "").all(), "spells of one company must not overlap"
        band[e, start:stop] = name
    return SimpleNamespace(
        folder=folder, truth=truth, alerts=alerts, events=events, groups=groups, known=known,
        coverage=coverage, names=names, types=types, shape=shape, band=band, is_covered=is_covered,
        is_alert=cells((len(types), *shape), *(c.to_numpy() for c in code)),
        is_followed=followed(
            cells(shape, target["entity"].map(codes).to_numpy(), target["session"].to_numpy())
        ),
        sector=groups.groupby("entity")["sector"].first()[names].to_numpy(),
        holdout=int(CALENDAR.searchsorted(pd.Timestamp(HOLDOUT_START))),
    )  # fmt: skip


def eligible(demo, combination, segment, stratum="all"):
    """Entity and session of a combination's triggers, its types as one text or a list."""
    types = combination.split(" + ") if isinstance(combination, str) else list(combination)
    kinds = [demo.types.index(name) for name in types]
    entity, session = triggers(kept_on(demo.is_alert[kinds]).all(axis=0))
    is_kept = demo.is_covered[kinds][:, entity, session].all(axis=0)
    low, high = {
        "discovery": (LOOKBACK - 1, demo.holdout - 11 - HORIZON),
        "holdout": (demo.holdout, demo.shape[1] - 1 - HORIZON),
        "all": (LOOKBACK - 1, demo.shape[1] - 1 - HORIZON),
    }[segment]
    is_kept &= (session >= low) & (session <= high)
    if stratum != "all":
        is_kept &= demo.band[entity, session] == stratum
    return entity[is_kept], session[is_kept]


def planted(demo, kind):
    (found,) = (p for p in demo.truth.planted if p.kind == kind)
    return found


def test_same_seed_writes_the_same_bytes(demo, tmp_path):
    again, other = tmp_path / "again", tmp_path / "other"
    write_demo(again, seed=demo.truth.seed)
    write_demo(other, seed=demo.truth.seed + 1)
    written = sorted(path.name for path in demo.folder.iterdir())
    assert written == [
        "alerts.parquet",
        "coverage.csv",
        "events.csv",
        "groups.csv",
        "prices.parquet",
        "study.toml",
        "truth.json",
    ]
    for name in written:
        assert (again / name).read_bytes() == (demo.folder / name).read_bytes(), name
    assert (other / "alerts.parquet").read_bytes() != (demo.folder / "alerts.parquet").read_bytes()


def test_tables_have_the_columns_a_study_reads(demo):
    assert list(demo.alerts.columns[:3]) == ["entity", "time", "type"]
    assert list(demo.events.columns[:3]) == ["entity", "time", "type"]
    assert list(demo.groups.columns) == ["entity", "start", "end", "size_band", "sector"]
    assert list(demo.coverage.columns) == ["entity", "type", "start", "end"]
    study = tomllib.loads((demo.folder / "study.toml").read_text())
    for section in ("alerts", "events", "groups", "coverage"):
        assert (demo.folder / study[section]["source"]).is_file()
    assert study["events"]["targets"] == ["approach"]
    assert study["sessions"] == {
        "calendar": "weekdays", "close": "16:30", "timezone": "Europe/London",
        "start": "2019-01-02", "end": "2023-12-29",
    }  # fmt: skip
    assert study["windows"] == {"lookback": LOOKBACK, "horizon": HORIZON}
    assert 0.28 < 1 - demo.holdout / demo.shape[1] < 0.32


def test_log_has_the_blemishes_of_a_real_one(demo):
    assert 300_000 < len(demo.alerts) < 500_000
    assert len(demo.types) == 12
    assert ((demo.alerts["session"] == len(CALENDAR)).sum()) == 60
    assert (~demo.alerts["entity"].isin(demo.names)).sum() == 45
    assert demo.alerts[["entity", "time", "type"]].duplicated().sum() >= 100
    assert 0.25 < (demo.alerts["time"].str.len() > 19).mean() < 0.35
    naive = pd.to_datetime(demo.alerts["time"][demo.alerts["time"].str.len() == 19])
    assert (naive.dt.day_of_week > 4).mean() > 0.01
    is_late = (naive.dt.hour * 60 + naive.dt.minute > 16 * 60 + 30) & (naive.dt.day_of_week < 5)
    assert 0.08 < is_late.mean() < 0.16
    assert set(demo.events["type"]) == {"approach", "withdrawal"}
    assert demo.events["session"].max() < len(CALENDAR)


def test_names_are_invented(demo):
    syllables = re.compile(r"[A-Z][a-z]{5,11} [A-Z][a-z]{2,5}")
    assert len(demo.names) == 1200
    assert all(syllables.fullmatch(name) for name in demo.names)
    assert 8 <= len(set(demo.sector)) <= 12
    assert all(re.fullmatch(r"[a-z]+ [a-z]+", name) for name in [*demo.types, *set(demo.sector)])


def test_coverage_and_groups_agree_with_the_logs(demo):
    kind = np.searchsorted(demo.types, demo.known["type"])
    entity = demo.known["entity"].map(pd.Series(range(len(demo.names)), demo.names))
    assert demo.is_covered[kind, entity, demo.known["session"]].all()
    is_listed = demo.is_covered.any(axis=0)
    assert ((demo.band != "") == is_listed).all()
    target_entity = demo.events["entity"].map(pd.Series(range(len(demo.names)), demo.names))
    assert is_listed[target_entity, demo.events["session"]].all()

    flicker, counsel = (demo.types.index(n) for n in ("screen flicker", "counsel retained"))
    assert (demo.is_covered[flicker] == np.isin(demo.band, ["mid", "large"])).all()
    year_two = CALENDAR >= "2020-01-02"
    assert (demo.is_covered[counsel] == is_listed & year_two).all()
    n_bands = demo.groups.groupby("entity")["size_band"].nunique()
    assert 0.1 < (n_bands > 1).mean() < 0.4
    assert 0.05 < 1 - is_listed[:, 0].mean() < 0.25
    assert 0.05 < 1 - is_listed[:, -1].mean() < 0.25


def test_truth_file_spells_the_plants_as_a_hunt_does(demo):
    truth = json.loads((demo.folder / "truth.json").read_text())
    assert [p["combination"] for p in truth["planted"]] == [
        p.combination for p in demo.truth.planted
    ]
    assert truth["decoy"] == demo.truth.decoy
    for text in [truth["decoy"], *(p["combination"] for p in truth["planted"])]:
        types = text.split(" + ")
        assert types == sorted(types)
        assert set(types) <= set(demo.types)
    assert {p["stratum"] for p in truth["planted"]} == {"all", "mid"}


def test_plants_show_at_their_wanted_counts_and_precisions(demo):
    base = demo.is_followed[demo.is_covered.any(axis=0)].mean()
    assert 0.015 < base < 0.03
    assert len(demo.truth.planted) == 6
    for plant in demo.truth.planted:
        entity, session = eligible(demo, plant.combination, "all", plant.stratum)
        # Chance adds triggers to those planted; sets at the calendar's ends may be cut off.
        assert 0.95 * plant.sets < entity.size < 1.4 * plant.sets + 10, plant
        is_alive = (session >= CALENDAR.searchsorted(plant.first)) & (
            session <= CALENDAR.searchsorted(plant.last)
        )
        precision = demo.is_followed[entity, session][is_alive].mean()
        assert abs(precision - plant.precision) < 0.08, plant

        low, high = (40, 70) if plant.kind == "sharpening triple" else (80, 500)
        for segment in ("discovery", "holdout"):
            entity, session = eligible(demo, plant.combination, segment, plant.stratum)
            hits = int(demo.is_followed[entity, session].sum())
            p = binom.sf(hits - 1, entity.size, 2 * base)
            if segment == "discovery":
                assert low <= entity.size <= high, plant
            assert (p < 1e-6) != (plant.kind == "dying pair" and segment == "holdout"), plant


def test_no_pair_of_the_triple_works_without_the_third(demo):
    triple = planted(demo, "triple").combination
    entity, session = eligible(demo, triple, "all")
    is_near = cells(demo.shape, entity, session)
    is_near = followed(is_near) | kept_on(is_near, HORIZON + 1)
    for pair in combinations(triple.split(" + "), 2):
        entity, session = eligible(demo, pair, "discovery")
        is_alone = ~is_near[entity, session]
        assert is_alone.sum() > 150
        assert demo.is_followed[entity, session][is_alone].mean() < 0.06


def test_rare_triple_sharpens_its_pair_and_band_pair_keeps_to_its_band(demo):
    def precision(combination, stratum="all"):
        return demo.is_followed[eligible(demo, combination, "all", stratum)].mean()

    pair, triple = planted(demo, "common pair"), planted(demo, "sharpening triple")
    assert set(pair.combination.split(" + ")) < set(triple.combination.split(" + "))
    assert 0.14 < precision(pair.combination) < 0.23
    assert 0.45 < precision(triple.combination) < 0.65
    band_pair = planted(demo, "band pair")
    assert precision(band_pair.combination, band_pair.stratum) > 0.25
    assert precision(band_pair.combination, "small") < 0.07
    assert precision(band_pair.combination, "large") < 0.07


def margins_fit(is_followed, is_open, group):
    """Odds u_e v_gt whose expected row and column sums over open cells are the observed ones."""
    rows = (is_followed & is_open).sum(axis=1)
    u = rows / np.maximum(is_open.sum(axis=1), 1)
    v = np.ones((group.max() + 1, is_open.shape[1]))
    columns = np.array([(is_followed & is_open)[group == g].sum(axis=0) for g in range(len(v))])
    for _ in range(15):
        for g in range(len(v)):
            own = u[group == g][:, None]
            reach = (is_open[group == g] * own / (1 + own * v[g])).sum(axis=0)
            v[g] = np.divide(columns[g], reach, out=np.zeros_like(reach), where=reach > 0)
        reach = (is_open * v[group] / (1 + u[:, None] * v[group])).sum(axis=1)
        u = np.divide(rows, reach, out=np.zeros_like(reach), where=reach > 0)
    odds = u[:, None] * v[group]
    q = odds / (1 + odds)
    assert np.abs((q * is_open).sum(axis=1) - rows).max() < 0.2
    return q


def test_decoy_fools_a_plain_shuffle_but_not_the_margins(demo):
    stop = demo.holdout - 10
    is_open = demo.is_covered.any(axis=0)
    is_open[:, : LOOKBACK - 1] = is_open[:, stop - HORIZON :] = False
    q = margins_fit(demo.is_followed, is_open, np.unique(demo.sector, return_inverse=True)[1])

    def excess(combination):
        at = eligible(demo, combination, "discovery")
        return (demo.is_followed[at].sum() - q[at].sum()) / np.sqrt((q[at] * (1 - q[at])).sum())

    assert abs(excess(demo.truth.decoy)) < 3
    for plant in demo.truth.planted:
        assert excess(plant.combination) > 8, plant

    # The same alerts, each on a random session of its company's life: the seed is fixed.
    rng = np.random.default_rng(0)
    kinds = [demo.types.index(name) for name in demo.truth.decoy.split(" + ")]
    life = demo.is_covered.any(axis=0)[:, :stop]
    start, length = life.argmax(axis=1), life.sum(axis=1)
    shuffled = []
    for _ in range(4):
        is_alert = np.zeros((2, *life.shape), dtype=bool)
        for i, k in enumerate(kinds):
            entity, _ = np.nonzero(demo.is_alert[k, :, :stop])
            session = start[entity] + (rng.random(entity.size) * length[entity]).astype(int)
            is_alert[i, entity, session] = True
        entity, session = triggers(kept_on(is_alert).all(axis=0))
        is_kept = is_open[entity, session]
        shuffled.append(demo.is_followed[entity, session][is_kept].mean())
    at = eligible(demo, demo.truth.decoy, "discovery")
    assert at[0].size > 2000
    spread = np.sqrt(np.mean(shuffled) / at[0].size)
    assert demo.is_followed[at].mean() > max(shuffled) + 8 * spread


def test_stamps_belong_to_the_sessions_they_were_written_for():
    rng = np.random.default_rng(3)
    assert (pd.DatetimeIndex(weekdays()) == CALENDAR).all()
    session = np.repeat(np.arange(len(CALENDAR)), 8)
    text, instant = written_stamps(rng, local_stamps(rng, session, weekdays(), 0.3), 0.5)
    assert {t[19:] for t in text} == {"", "+00:00", "+01:00", "-05:00", "+09:00"}
    assert (session_of(text) == session).all()
    assert (session_of(np.strings.add(instant.astype(str), "+00:00")) == session).all()


def test_asking_for_too_much_says_what_there_is():
    rng = np.random.default_rng(0)
    with pytest.raises(ValueError, match=r"`n_names` must lie in 0\.\.\d+; got 100000000"):
        company_names(rng, 100_000_000)
    slots = planting_slots(rng, np.array([0]), np.array([100]), LOOKBACK, HORIZON)
    with pytest.raises(ValueError, match=r"at most the \d free slots; got 50"):
        slots.take(rng, 50, slots.is_free)


DRIVERS = {
    "season": "session",
    "market_shocks": "session",
    "sector_shocks": "sector",
    "busy_names": "entity",
    "busy_spell": "spell",
}


def counts(world, entity, session, by):
    """Points by session, sector and session, entity, or entity and block of 30 sessions."""
    n_entities, n_sessions = len(world.entity_names), world.n_sessions
    code, size = {
        "session": (session, n_sessions),
        "sector": (
            world.sector[entity] * n_sessions + session,
            len(world.sector_names) * n_sessions,
        ),
        "entity": (entity, n_entities),
        "spell": (entity * (n_sessions // 30) + session // 30, n_entities * (n_sessions // 30)),
    }[by]
    return np.bincount(code, minlength=size)


def alike(world, by):
    """Correlation of the counts of alerts and of events."""
    return np.corrcoef(
        counts(world, world.alert_entity, world.alert_session, by),
        counts(world, world.event_entity, world.event_session, by),
    )[0, 1]


def test_worlds_depend_on_the_seed_alone():
    settings = dict.fromkeys([*DRIVERS, "listing", "type_coverage", "reactive_alerts"], 0.5)
    plants = (Plant((0, 1), 0.4, 20),)
    one, two, other = (make_world(seed, planted=plants, **settings) for seed in (4, 4, 5))
    for field in fields(one):
        first, second = getattr(one, field.name), getattr(two, field.name)
        assert np.array_equal(first, second), field.name
        if isinstance(first, np.ndarray) and field.name != "is_published":
            assert first.dtype == np.int32, field.name
    assert not np.array_equal(one.alert_session, other.alert_session)


@pytest.mark.parametrize("driver", DRIVERS)
def test_every_driver_confounds_alerts_and_events(driver):
    by = DRIVERS[driver]
    off, half, on = (make_world(11, n_entities=400, **{driver: s}) for s in (0.0, 0.5, 1.0))
    assert abs(alike(off, by)) < 0.15
    assert alike(on, by) > 0.4
    assert alike(off, by) < alike(half, by) < alike(on, by) + 0.1


def after_events(world, kinds):
    """Share of the alerts of these types in the session of an event or the four after it."""
    shape = len(world.entity_names), world.n_sessions
    is_after = kept_on(cells(shape, world.event_entity, world.event_session))
    chosen = np.isin(world.alert_type, kinds)
    return is_after[world.alert_entity[chosen], world.alert_session[chosen]].mean()


def test_reactive_alerts_follow_events_and_move_none():
    off, on = (make_world(5, reactive_alerts=s) for s in (0.0, 1.0))
    assert np.array_equal(off.event_session, on.event_session)
    assert after_events(off, [9, 10, 11]) < 0.08
    assert after_events(on, [9, 10, 11]) > 0.5
    assert after_events(on, range(9)) < 0.08


@pytest.mark.parametrize("kind", ["alert", "event"])
def test_clustering_brings_points_of_one_entity_closer(kind):
    def near_share(strength):
        world = make_world(6, **{f"clustered_{kind}s": strength})
        row = getattr(world, f"{kind}_entity").astype(int)
        if kind == "alert":
            row = row * len(world.type_names) + world.alert_type
        session = getattr(world, f"{kind}_session")
        return ((row[1:] == row[:-1]) & (session[1:] - session[:-1] <= 6)).mean()

    assert near_share(1.0) > 1.8 * near_share(0.0) > 0


@pytest.mark.parametrize("base_rate", [0.02, 0.1])
@pytest.mark.parametrize("strength", [0.0, 0.7])
def test_worlds_keep_to_their_base_rate_and_to_what_is_listed(base_rate, strength):
    names = [*DRIVERS, "listing", "type_coverage", "clustered_alerts", "clustered_events"]
    world = make_world(8, n_entities=600, base_rate=base_rate, **dict.fromkeys(names, strength))
    shape = len(world.entity_names), world.n_sessions
    session = np.arange(world.n_sessions)
    is_listed = session >= world.listed_from[:, None]
    is_listed &= session < world.listed_to[:, None]
    assert is_listed.all() == (strength == 0)
    is_followed = followed(cells(shape, world.event_entity, world.event_session))
    assert is_followed[is_listed].mean() == pytest.approx(base_rate, rel=0.15)

    assert is_listed[world.alert_entity, world.alert_session].all()
    assert is_listed[world.event_entity, world.event_session].all()
    assert world.is_published[world.alert_entity, world.alert_type].all()
    assert (world.alert_session >= world.published_from[world.alert_type]).all()
    rows = np.array([world.alert_entity, world.alert_type, world.alert_session])
    assert np.unique(rows, axis=1).shape == rows.shape


def test_world_plants_work_where_and_while_they_should():
    plants = (
        Plant((0, 1), 0.5, 300, life=(0.0, 0.5)),
        Plant((2, 3, 4), 0.6, 200, stratum="mid"),
    )
    world = make_world(9, n_entities=600, alerts_per_type=600, planted=plants, base_rate=0.02)
    shape = len(world.entity_names), world.n_sessions
    is_alert = cells((12, *shape), world.alert_type, world.alert_entity, world.alert_session)
    is_followed = followed(cells(shape, world.event_entity, world.event_session))

    entity, session = triggers(kept_on(is_alert[[0, 1]]).all(axis=0))
    is_early = session < world.n_sessions // 2
    assert 300 <= entity.size < 330
    assert is_followed[entity, session][is_early].mean() == pytest.approx(0.5, abs=0.08)
    assert is_followed[entity, session][~is_early].mean() < 0.08

    entity, session = triggers(kept_on(is_alert[[2, 3, 4]]).all(axis=0))
    is_mid = world.band[entity] == BANDS.index("mid")
    assert 200 <= is_mid.sum() < 210
    assert 300 < (~is_mid).sum() < 500
    assert is_followed[entity, session][is_mid].mean() == pytest.approx(0.6, abs=0.06)
    assert is_followed[entity, session][~is_mid].mean() < 0.08


def test_written_world_reads_back_as_it_was(tmp_path):
    world = make_world(2, listing=0.5, type_coverage=0.6, n_entities=80)
    study = write_world(world, tmp_path, strata=True, settings={"mining": {"max_size": 2}})
    settings = tomllib.loads(study.read_text())
    assert settings["groups"] == {
        "source": "groups.csv", "strata": "size_band", "pooled": True, "peers": "sector",
    }  # fmt: skip
    assert settings["mining"] == {"max_size": 2}
    days = pd.date_range(settings["sessions"]["start"], settings["sessions"]["end"])
    assert len(days) == world.n_sessions

    names = np.array(world.entity_names)
    alerts, events = (pd.read_parquet(tmp_path / f"{n}.parquet") for n in ("alerts", "events"))
    assert (alerts["entity"] == names[world.alert_entity]).all()
    assert (alerts["type"] == np.array(world.type_names)[world.alert_type]).all()
    assert (days.searchsorted(alerts["time"].dt.normalize()) == world.alert_session).all()
    assert (events["entity"] == names[world.event_entity]).all()
    assert (days.searchsorted(events["time"].dt.normalize()) == world.event_session).all()
    assert set(events["type"]) == {TARGET}

    groups = pd.read_csv(tmp_path / "groups.csv")
    assert (groups["sector"] == np.array(world.sector_names)[world.sector]).all()
    coverage = pd.read_csv(tmp_path / "coverage.csv")
    assert coverage["start"].isna().any()
    assert coverage["end"].notna().any()
    codes = pd.Series(range(len(names)), names)
    found = np.zeros((80, 12, world.n_sessions), dtype=bool)
    kind = np.searchsorted(world.type_names, coverage["type"])
    for k, e, start, stop in zip(
        kind, *spans(coverage, codes, world.n_sessions, days[0], days), strict=True
    ):
        found[e, k, start:stop] = True
    session = np.arange(world.n_sessions)
    wanted = world.is_published[:, :, None] & (session >= world.published_from[:, None])
    wanted &= (session >= world.listed_from[:, None, None]) & (
        session < world.listed_to[:, None, None]
    )
    assert (found == wanted).all()
    assert not found.all()


def test_unknown_sectors_leave_no_groups_file(tmp_path):
    study = write_world(make_world(2, n_entities=20, sectors_known=False), tmp_path)
    settings = tomllib.loads(study.read_text())
    assert "groups" not in settings
    assert not (tmp_path / "groups.csv").exists()
    coverage = pd.read_csv(tmp_path / "coverage.csv")
    assert len(coverage) == 20
    assert coverage["type"].isna().all()
