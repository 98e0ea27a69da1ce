"""Trades on rules: returns and excursions against slow twins and published prices, tests against
`arch`, and what random walks give."""

from __future__ import annotations

import math
import sys
from dataclasses import replace
from itertools import combinations
from pathlib import Path

import naive
import numpy as np
import pandas as pd
import pytest
from arch.bootstrap import SPA, StationaryBootstrap, StepM
from scipy import stats
from tiny_worlds import FIRST_DAY, random_world, write_study
from trade_null import null_worlds

sys.path.insert(0, str(Path(__file__).parents[1] / "examples"))

from open_data import data_file

from miner import load_study
from miner.errors import OutputError, SettingsError
from miner.kernels import positions as kernels
from miner.prices import Prices
from miner.rule_book import BookRule, rule_id
from miner.seeds import stream
from miner.settings import PriceSettings, study_from_dict
from miner.trades import evaluate_trades, trade_lines, write_trades
from miner.trades.abnormal import abnormal_returns
from miner.trades.significance import (
    bootstrap_errors,
    clustered_mean,
    stationary_draws,
    step_down,
)


def prices_of(close, open_=None, high=None, low=None, volume=None) -> Prices:
    close = np.asarray(close, dtype=float)
    series = np.where(np.isnan(close), -1, 0).astype(np.int32)
    return Prices(close, open_, high, low, volume, series, {}, ())


# abnormal returns


def test_market_adjusted_returns_worked_by_hand():
    """MacKinlay (1997), the market-adjusted-return model: the company's return less the market's,
    summed over the holding period; the market here is the mean of the group's other companies."""
    close = [[100, 110, 99], [50, 51, 51], [20, 20.6, 21.63], [10, 20, 10]]
    group = np.array([[0] * 3, [0] * 3, [0] * 3, [1] * 3])
    found = abnormal_returns(prices_of(close), group)
    # day 1: +10 %, +2 %, +3 %; day 2: -10 %, 0, +5 %
    assert found.daily_et[0, 1:] == pytest.approx([0.10 - 0.025, -0.10 - 0.025])
    assert found.daily_et[2, 1:] == pytest.approx([0.03 - 0.06, 0.05 + 0.05])
    car = found.daily_et[0, 1:].sum()
    assert car == pytest.approx(-0.05)
    # alone in its group: all others are its market
    assert found.daily_et[3, 1] == pytest.approx(1.0 - 0.05)
    assert found.n_alone == 2


def test_mean_over_standard_error_is_that_of_the_published_event_study():
    """MacKinlay (1997), JEL 35:13-39: on the day of the announcement good news earn .965 % with a
    standard error of .104 %, a statistic of 9.28; bad news -.679 %, .098 %, -6.93. Thirty firms,
    each on a date of its own: then the two-way clustered error is the plain one."""
    rng = np.random.default_rng(1)
    for mean, error, statistic in ((0.965, 0.104, 9.28), (-0.679, 0.098, -6.93)):
        shape = rng.normal(size=30)
        shape = (shape - shape.mean()) / shape.std(ddof=1)
        value = mean + shape * error * math.sqrt(30)
        found = clustered_mean(value, np.arange(30), np.arange(30))
        assert found.mean == pytest.approx(mean)
        assert found.error == pytest.approx(error)
        assert found.mean / found.error == pytest.approx(statistic, abs=0.005)
        assert found.p_value == pytest.approx(stats.t.sf(statistic, 29), rel=0.05)


def two_way(value, entity, block):
    """Cameron, Gelbach & Miller (2011) in loops."""
    n, rest = len(value), value - value.mean()

    def part(keys):
        sums = {}
        for key, r in zip(keys, rest, strict=True):
            sums[key] = sums.get(key, 0.0) + r
        g = len(sums)
        return g / (g - 1) * sum(s * s for s in sums.values()) / n**2

    e, b = part(entity), part(block)
    return max(e + b - part(list(zip(entity, block, strict=True))), e, b) ** 0.5


@pytest.mark.parametrize("seed", range(5))
def test_the_clustered_error_is_that_of_the_twin(seed):
    rng = np.random.default_rng(seed)
    entity, block = rng.integers(0, 12, 80), rng.integers(0, 15, 80)
    value = rng.normal(size=12)[entity] * 0.5 + rng.normal(size=15)[block] + rng.normal(size=80)
    found = clustered_mean(value, entity, block)
    assert found.error == pytest.approx(two_way(value, entity.tolist(), block.tolist()))
    assert found.error > 1.3 * value.std() / math.sqrt(80)
    quantile = stats.t.ppf(0.975, found.n_clusters - 1)
    assert found.high - found.mean == pytest.approx(quantile * found.error)


def test_trades_on_one_date_say_as_much_as_their_correlation_lets_them():
    """Kolari & Pynnonen (2010), RFS 23:3996-4025: with a correlation r of n returns on one date the
    plain t is too large by sqrt((1 + (n-1) r) / (1 - r)): 1 / .5735 for n = 100, r = .02. With
    many dates, each a cluster, the clustered error is larger by that on average."""
    rng = np.random.default_rng(7)
    n, r, dates = 100, 0.02, 400
    value = rng.normal(size=(dates, 1)) * math.sqrt(r) + rng.normal(size=(dates, n)) * math.sqrt(
        1 - r
    )
    block = np.repeat(np.arange(dates), n)
    found = clustered_mean(value.ravel(), np.arange(dates * n), block)
    plain = value.std(ddof=1) / math.sqrt(value.size)
    # the formula's plain error is that within dates
    ratio = plain * math.sqrt(1 - r) / found.error
    assert ratio == pytest.approx(0.5735, abs=0.03)


def test_few_clusters_are_said_to_be_few_and_none_give_nothing():
    found = clustered_mean(np.array([0.1, 0.2, 0.3]), np.array([0, 1, 2]), np.array([0, 1, 1]))
    assert found.is_few
    assert found.n_clusters == 2
    assert found.low < found.mean < found.high
    alone = clustered_mean(np.array([0.1, 0.2]), np.array([0, 0]), np.array([0, 1]))
    assert math.isnan(alone.error)
    assert alone.mean == pytest.approx(0.15)
    assert math.isnan(clustered_mean(*(np.empty(0, dtype=int),) * 3).mean)


# the test over all rules tried


@pytest.fixture(scope="module")
def matrix():
    """Net returns by session of eight columns, dependent in time and with one another."""
    rng = np.random.default_rng(5)
    noise = rng.normal(size=(301, 8)) + rng.normal(size=(301, 1))
    value = 0.01 * (noise[1:] + 0.4 * noise[:-1])
    value[:, :3] += [0.004, 0.0025, 0.0018]
    value[:, 7] *= 5
    return value


BLOCK = 8


def arch_draws(n, n_draws, seed):
    """The sessions that `arch` draws with this seed."""
    drawn = StationaryBootstrap(BLOCK, np.arange(n), seed=seed).bootstrap(n_draws)
    return np.array([data[0][0] for data in drawn])


def test_the_first_step_is_the_reality_check_of_arch(matrix):
    """The largest statistic's p-value on the same draws. `arch` compares plain means and recentres
    every column for its upper p-value; with columns of one error that is the studentised test."""
    value = matrix / bootstrap_errors(matrix, BLOCK)
    for seed in (1, 2, 3):
        for shift in (0.0, -0.8, -1.6):
            shifted = value + shift
            reference = SPA(np.zeros(len(value)), -shifted, BLOCK, reps=400, seed=seed)
            reference.compute()
            p = step_down(shifted, arch_draws(len(value), 400, seed), BLOCK)
            exceed = round(p.min() * 401 - 1)
            assert exceed == round(reference.pvalues["upper"] * 400)
    assert 0.02 < p.min() < 1


def test_the_winners_are_those_of_archs_step_down(matrix):
    """Romano & Wolf (2005) as `arch` does it: the columns that beat nought at a level."""
    value = matrix / bootstrap_errors(matrix, BLOCK)
    won = set()
    for seed, size in ((1, 0.05), (2, 0.1), (3, 0.2)):
        reference = StepM(np.zeros(len(value)), -value, size, BLOCK, reps=999, seed=seed)
        reference.compute()
        p = step_down(value, arch_draws(len(value), 999, seed), BLOCK)
        assert np.flatnonzero(p <= size).tolist() == sorted(reference.superior_models)
        won |= set(np.flatnonzero(p <= size).tolist())
    assert 0 < len(won) < 8


def test_step_down_is_the_twin_in_loops(matrix):
    draws = stationary_draws(stream(3, "test"), len(matrix), BLOCK, 120)
    error = bootstrap_errors(matrix, BLOCK)
    statistic = matrix.mean(axis=0) / error
    order = sorted(range(8), key=lambda c: -statistic[c])
    expected, highest = {}, 0.0
    for i, c in enumerate(order):
        count = 0
        for draw in draws:
            drawn = (matrix[draw].mean(axis=0) - matrix.mean(axis=0)) / error
            count += max(drawn[k] for k in order[i:]) >= statistic[c]
        highest = max(highest, (1 + count) / 121)
        expected[c] = highest
    found = step_down(matrix, draws, BLOCK)
    assert found.tolist() == pytest.approx([expected[c] for c in range(8)])
    assert len(set(expected.values())) > 3


def test_bootstrap_errors_are_those_of_many_draws(matrix):
    draws = stationary_draws(stream(1, "test"), len(matrix), BLOCK, 4000)
    means = np.array([matrix[draw].mean(axis=0) for draw in draws])
    assert bootstrap_errors(matrix, BLOCK) == pytest.approx(means.std(axis=0), rel=0.05)
    few = matrix[:10]
    draws_of_few = stationary_draws(stream(2, "test"), 10, 5, 60_000)
    assert bootstrap_errors(few, 5) == pytest.approx(
        few[draws_of_few].mean(axis=1).std(axis=0), rel=0.02
    )
    run_on = (np.diff(draws, axis=1) % len(matrix) == 1).mean()
    assert run_on == pytest.approx(1 - 1 / BLOCK + 1 / BLOCK / len(matrix), abs=0.005)


def test_a_column_that_never_trades_cannot_win(matrix):
    value = np.column_stack([matrix, np.zeros(len(matrix))])
    draws = stationary_draws(stream(1, "test"), len(matrix), BLOCK, 200)
    p = step_down(value, draws, BLOCK)
    assert p[-1] == 1
    assert p[:-1] == pytest.approx(step_down(matrix, draws, BLOCK))
    assert step_down(np.zeros((9, 2)), draws[:, :9] % 9, BLOCK).tolist() == [1, 1]


# excursions and exits on real closes


def test_excursion_of_the_worst_week_of_an_index():
    """The S&P 500's week to 10 October 2008: from a close of 1099.23 to 899.22, minus 18.2 % (its
    worst week then); the low of the Friday was 839.80. Public closes, as in `arch`'s data."""
    table = pd.read_csv(data_file("arch", "data/sp500/sp500.csv.gz"))
    at = int(np.flatnonzero(table["Date"] == "10/3/2008")[0])
    bars = {
        name: table[name].to_numpy(dtype=float)[None, :]
        for name in ("Open", "High", "Low", "Close")
    }
    assert bars["Close"][0, at] == pytest.approx(1099.23, abs=0.005)
    where = np.array([0]), np.array([at]), np.array([at + 5]), np.array([False]), np.array([False])
    entry = bars["Close"][:, at]
    down = kernels.worst(*where, 1, entry, bars["Low"], bars["Open"])
    assert down[0] == pytest.approx(839.80 / 1099.23 - 1, abs=1e-5)
    closes = kernels.worst(*where, 1, entry, bars["Close"], bars["Open"])
    assert closes[0] == pytest.approx(-0.182, abs=0.0005)
    short = kernels.worst(*where, -1, entry, bars["High"], bars["Open"])
    assert short[0] == min(0.0, -(bars["High"][0, at + 1 : at + 6].max() / 1099.23 - 1))
    # left at Friday's open, the low of that day was not seen
    opened = kernels.worst(*where[:4], np.array([True]), 1, entry, bars["Low"], bars["Open"])
    seen = min(bars["Low"][0, at + 1 : at + 5].min(), bars["Open"][0, at + 5])
    assert opened[0] == pytest.approx(seen / 1099.23 - 1)


# whole evaluations


def write_prices(
    folder, world, seed, *, jump=0.06, columns="open,high,low,close,volume", hole=True
):
    """Bars for a tiny world: random walks that jump on the session of an event; some missing."""
    rng = np.random.default_rng(seed)
    n = world.n_sessions
    names = list(world.known)[:-1]  # one company has no price
    rows = []
    for e in names:
        move = rng.normal(0, 0.01, n)
        for f, _, t in world.events:
            if f == e:
                move[t] += jump
        close = 30 * np.exp(np.cumsum(move))
        before = np.concatenate([[30], close[:-1]])
        open_ = before * np.exp(rng.normal(0, 0.003, n))
        for t in range(n):
            if hole and (rng.random() < 0.03 or (e == names[1] and t > n - 12)):
                continue
            high, low = max(open_[t], close[t]) * 1.01, min(open_[t], close[t]) * 0.99
            rows.append((e, t, open_[t], high, low, close[t], int(rng.integers(1000, 9000))))
    table = pd.DataFrame(rows, columns=["entity", "t", "open", "high", "low", "close", "volume"])
    table["date"] = [(pd.Timestamp(FIRST_DAY) + pd.Timedelta(days=t)).date() for t in table["t"]]
    kept = ["entity", "date", *columns.split(",")]
    table[kept].to_csv(folder / "prices.csv", index=False)
    return table


def study_with(folder, **keys):
    text = (folder / "study.toml").read_text().split("\n[prices]")[0]
    lines = ['source = "prices.csv"', *(f"{k} = {v}" for k, v in keys.items())]
    (folder / "study.toml").write_text(text + "\n[prices]\n" + "\n".join(lines) + "\n")
    return load_study(folder / "study.toml")


def book_rules(world, combos=(("delay", "gap"), ("memo",)), strata=("all",)):
    windows = {"lookback": world.lookback, "horizon": world.horizon, "rest": world.rest}
    rules = []
    for stratum in strata:
        for combination in combos:
            keys = {"target": "upset", "stratum": stratum, "combination": combination, **windows}
            rules.append(BookRule(id=rule_id(**keys), **keys))
    return rules


@pytest.fixture
def traded(tmp_path):
    world = random_world(6, groups="peers", coverage=False, two_targets=False, fades=False)
    write_study(world, tmp_path)
    bars = write_prices(tmp_path, world, 6)
    return tmp_path, world, bars


def of(table, **values):
    """The rows with these values."""
    return table[np.logical_and.reduce([table[key] == value for key, value in values.items()])]


def session_of(date):
    """Session of a date in a tiny world."""
    return (pd.Timestamp(date) - pd.Timestamp(FIRST_DAY)).days


def twin_trades(world, bars, rule, first, last, sign, exit_):
    """Every trade in loops over dictionaries: entity, trigger, entry, exit, gross, worst."""
    close = {(e, t): c for e, t, c in bars[["entity", "t", "close"]].itertuples(index=False)}
    open_ = {(e, t): c for e, t, c in bars[["entity", "t", "open"]].itertuples(index=False)}
    low = {
        (e, t): c
        for e, t, c in bars[["entity", "t", "low" if sign > 0 else "high"]].itertuples(index=False)
    }
    events = {(e, t) for e, _, t in world.events}

    def before(e, t):
        for s in range(t - 1, max(-1, t - 7), -1):
            if (e, s) in close:
                return close[e, s]
        return None

    def returns(kind, e, t):
        if (e, t) not in close:
            return None
        start = open_[e, t] if kind == "intraday" else before(e, t)
        stop = open_[e, t] if kind == "overnight" else close[e, t]
        return None if start is None else stop / start - 1

    def abnormal(kind, e, t):
        peers = [
            f
            for f in world.known
            if f != e and naive.peer_at(world, f, t) == naive.peer_at(world, e, t)
        ]
        found = [r for f in peers if (r := returns(kind, f, t)) is not None]
        if not found:
            found = [r for f in world.known if f != e and (r := returns(kind, f, t)) is not None]
        return (returns(kind, e, t) or 0.0) - (sum(found) / len(found) if found else 0.0)

    trades = []
    cells = naive.eligible_triggers(world, ("upset", rule.stratum), (first, last), rule.combination)
    for e, t in cells:
        if (e, t + 1) not in close:
            continue
        leave, at_open = t + world.horizon, False
        if exit_ == "event":
            hits = [s for s in range(t + 1, leave) if (e, s) in events]
            if hits:
                leave, at_open = hits[0] + 1, True
        planned = leave
        while (e, leave) not in close:
            leave -= 1
        at_open = at_open and leave == planned
        gross = abnormal("intraday", e, t + 1) if not (at_open and leave == t + 1) else 0.0
        for s in range(t + 2, leave + 1):
            gross += abnormal("overnight" if at_open and s == leave else "daily", e, s)
        entry = open_[e, t + 1]
        seen = [open_[e, s] if at_open and s == leave else low[e, s]
                for s in range(t + 1, leave + 1) if (e, s) in close]  # fmt: skip
        worst = min([0.0, *(sign * (p / entry - 1) for p in seen)])
        trades.append((e, t, t + 1, leave, sign * gross, worst))
    return trades


@pytest.mark.parametrize("seed", [6, 11])
@pytest.mark.parametrize(("exit_", "direction"), [("horizon", "long"), ("event", "short")])
def test_every_trade_is_the_twins(tmp_path, seed, exit_, direction):
    world = random_world(seed, groups="peers", coverage=False, two_targets=False, fades=False)
    write_study(world, tmp_path)
    bars = write_prices(tmp_path, world, seed)
    study = study_with(tmp_path, exit=f'"{exit_}"', costs_bps=7, slippage_bps=1)
    rules = book_rules(world)
    found = evaluate_trades(rules, study, direction=direction, n_draws=50)
    sign = 1 if direction == "long" else -1
    parts = {
        "discovery": (0, world.discovery_end),
        "holdout": (world.holdout_start, world.n_sessions - 1),
    }
    n_all = 0
    for rule in rules:
        for part, (first, last) in parts.items():
            twin = twin_trades(world, bars, rule, first, last, sign, exit_)
            mine = of(found.trades, rule=rule.id, part=part)
            columns = ["entity", "trigger", "entry", "exit"]
            rows = [
                (e, *(session_of(date) for date in dates))
                for e, *dates in mine[columns].itertuples(index=False)
            ]
            assert rows == [row[:4] for row in twin]
            assert mine["gross"].tolist() == pytest.approx([row[4] for row in twin], abs=1e-7)
            assert mine["worst"].tolist() == pytest.approx([row[5] for row in twin], abs=1e-7)
            assert mine["net"].tolist() == pytest.approx([row[4] - 16e-4 for row in twin], abs=1e-7)
            n_all += len(twin)
            row = of(found.rules, rule=rule.id, part=part).iloc[0]
            assert row["trades"] == len(twin)
            if twin:
                net = np.array([r[4] for r in twin]) - 16e-4
                assert row["mean_net"] == pytest.approx(net.mean(), abs=1e-7)
                assert row["median_net"] == pytest.approx(np.median(net), abs=1e-7)
                assert row["share_positive"] == pytest.approx((net > 0).mean())
                assert row["worst_excursion"] == pytest.approx(min(r[5] for r in twin), abs=1e-7)
                blocks = [t // world.horizon for _, t, *_ in twin]
                if len({e for e, *_ in twin}) > 2 and len(set(blocks)) > 2:
                    error = two_way(net, [e for e, *_ in twin], blocks)
                    assert row["error"] == pytest.approx(error, rel=1e-5)
    assert n_all > 40


def test_curve_time_in_market_and_overlap_are_recounted(traded):
    folder, world, _ = traded
    study = study_with(folder)
    rule = book_rules(world)[0]
    found = evaluate_trades([rule], study, n_draws=50)
    for part in ("discovery", "holdout"):
        trades = of(found.trades, part=part)
        curve = of(found.curve, part=part).set_index("date")
        held = dict.fromkeys(curve.index, 0)
        for entry, leave in trades[["entry", "exit"]].itertuples(index=False):
            for date in pd.date_range(entry, leave).strftime("%Y-%m-%d"):
                held[date] += 1
        assert curve["open"].tolist() == list(held.values())
        row = of(found.rules, part=part).iloc[0]
        assert row["most_open"] == max(held.values()) > 0
        assert row["time_in_market"] == pytest.approx(np.mean([n > 0 for n in held.values()]))
        assert row["total_net"] == pytest.approx(curve["cumulative_net"].iloc[-1])
        # what positions earn together is what they earn one by one
        assert (curve["net"] * curve["open"]).sum() == pytest.approx(trades["net"].sum())
        assert (trades["turnover_share"] > 0).all()
    assert found.n_tried == {"discovery": 1, "holdout": 1}


def test_break_even_is_where_the_mean_is_nought(traded):
    folder, world, _ = traded
    rule = book_rules(world)[0]
    first = evaluate_trades([rule], study_with(folder), n_draws=50).rules.iloc[0]
    assert first["break_even_bps"] > 10
    keys = {"costs_bps": float(first["break_even_bps"]), "slippage_bps": 0}
    again = evaluate_trades([rule], study_with(folder, **keys), n_draws=50).rules.iloc[0]
    assert again["mean_net"] == pytest.approx(0, abs=1e-12)
    assert again["mean_gross"] == pytest.approx(first["mean_gross"])


def test_later_prices_change_no_trade_that_is_over(traded):
    """Prices from a session on are drawn anew: trades left before it stay as they are."""
    folder, world, _ = traded
    study = study_with(folder)
    rules = book_rules(world)
    one = evaluate_trades(rules, study, n_draws=50).trades
    table = pd.read_csv(folder / "prices.csv", keep_default_na=False)
    cut = str((pd.Timestamp(FIRST_DAY) + pd.Timedelta(days=70)).date())
    later = table["date"] >= cut
    columns = ["open", "high", "low", "close"]
    factor = np.exp(np.random.default_rng(2).normal(0, 0.05, int(later.sum())))
    table.loc[later, columns] = table.loc[later, columns].mul(factor, axis=0)
    table.to_csv(folder / "prices.csv", index=False)
    two = evaluate_trades(rules, study, n_draws=50).trades
    before = [t[t["exit"] < cut].reset_index(drop=True) for t in (one, two)]
    assert len(before[0]) > 15
    pd.testing.assert_frame_equal(before[0], before[1])
    assert not one["gross"].equals(two["gross"])


def test_without_opens_the_close_is_the_entry(traded):
    folder, world, _ = traded
    write_prices(folder, world, 6, columns="close")
    if world.horizon < 2:
        world = replace(world, horizon=2)
    rules = book_rules(world)
    found = evaluate_trades(rules, study_with(folder), n_draws=50)
    prices = pd.read_csv(folder / "prices.csv", keep_default_na=False).set_index(
        ["entity", "date"]
    )["close"]
    trades = found.trades
    assert len(trades) > 20
    assert trades["entry_price"].tolist() == pytest.approx(
        [prices[e, d] for e, d in trades[["entity", "entry"]].itertuples(index=False)]
    )
    assert found.rules["median_turnover_share"].isna().all()
    short = [rules[0].model_copy(update={"horizon": 1})]
    with pytest.raises(SettingsError, match="add a column open"):
        evaluate_trades(short, study_with(folder), n_draws=50)


def test_companies_without_prices_are_counted_and_stale_exits_told_of(traded):
    folder, world, _ = traded
    found = evaluate_trades(book_rules(world), study_with(folder), n_draws=50)
    assert found.rules["unpriced"].sum() > 0
    assert (found.rules["triggers"] == found.rules["trades"] + found.rules["unpriced"]).all()
    assert found.rules["stale_exits"].sum() == found.trades["is_stale"].sum() > 0
    assert any("1 of 13 entities have no price" in w for w in found.warnings)


def test_all_that_was_tried_makes_the_test_stricter(traded):
    folder, world, _ = traded
    study = study_with(folder)
    rules = book_rules(world, combos=[("delay", "gap"), ("halt",), ("memo",)])
    types = ("delay", "gap", "halt", "memo", "spike")
    tried = book_rules(world, combos=[c for k in (1, 2) for c in combinations(types, k)])
    alone = evaluate_trades(rules, study, n_draws=400)
    among = evaluate_trades(rules, study, tried=tried, n_draws=400)
    assert among.n_tried == {"discovery": len(tried), "holdout": 3}
    one, all_ = (
        t.rules.set_index(["rule", "part"])["p_all_tried"].unstack() for t in (alone, among)
    )
    assert (one["discovery"] <= all_["discovery"]).all()
    assert (one["discovery"] < all_["discovery"]).any()
    assert one["holdout"].equals(all_["holdout"])


def test_moves_can_be_targets_and_down_is_sold_short(traded):
    folder, *_ = traded
    keys = {"threshold": 1.0, "volatility_sessions": 20}
    rules = [
        BookRule(id=rule_id(**k), **k)
        for target in ("move up", "move down")
        for k in [{"target": target, "combination": ("delay",), "lookback": 2, "horizon": 3,
                   "rest": 3, "stratum": "all"}]
    ]  # fmt: skip
    found = evaluate_trades(rules, study_with(folder, **keys), n_draws=50).rules
    assert found["direction"].tolist() == ["long", "long", "short", "short"]
    assert found["share_with_event"].max() > 0
    up, down = found["mean_gross"][:2].to_numpy(), found["mean_gross"][2:].to_numpy()
    assert up == pytest.approx(-down)
    asked = study_with(folder, **keys, directions='{"move up" = "short"}')
    assert evaluate_trades(rules, asked, n_draws=50).rules["direction"][0] == "short"


def test_the_screen_holds_the_cautions_and_files_are_not_written_over(traded):
    folder, world, _ = traded
    found = evaluate_trades(book_rules(world), study_with(folder), n_draws=50)
    text = " ".join("\n".join(trade_lines(found)).split())
    for word in ("not advice", "compliance", "borrow", "taxes", "gap through", "licensed practice"):
        assert word in text
    assert text.count("discovery") >= 2
    write_trades(found, folder / "out")
    again = pd.read_csv(folder / "out" / "trade_rules.csv")
    assert len(again) == len(found.rules) == 4
    with pytest.raises(OutputError, match="--replace"):
        write_trades(found, folder / "out")


def test_a_study_without_prices_is_refused(tmp_path):
    tables = {"alerts": {"source": "a.csv"}, "events": {"source": "e.csv"}}
    with pytest.raises(SettingsError, match="be there to evaluate trades"):
        evaluate_trades([], study_from_dict(tables, tmp_path))


# random walks


def test_random_walks_earn_nothing_more_often_than_said():
    """The short form of reports/trades.md: fifteen rules a world, no alert knows of any price."""
    worlds = list(null_worlds(24, cost_bps=0.0, n_draws=200))
    alone = np.array([(w.p_alone <= 0.05).mean() for w in worlds])
    # 24 worlds, each a share of 15 rules: at most three standard errors above 5 %
    assert alone.mean() <= 0.05 + 3 * alone.std(ddof=1) / math.sqrt(24)
    assert sum((w.p_all <= 0.05).any() for w in worlds) <= 4  # of 24 at 5 %: more has chance .005
    held = np.concatenate([w.covered for w in worlds])
    assert held.mean() > 0.92
    means = np.concatenate([w.mean_net for w in worlds])
    assert abs(means.mean()) < 4e-4
    costly = list(null_worlds(8, cost_bps=10.0, n_draws=200))
    assert np.mean([w.mean_net.mean() for w in costly]) == pytest.approx(-20e-4, abs=6e-4)
    assert sum((w.p_alone <= 0.05).sum() for w in costly) <= 2


def test_prices_settings_have_their_defaults():
    made = PriceSettings(source="p.csv")
    assert (made.moves, made.threshold, made.epsilon, made.volatility_sessions) == (
        "extremes", 2.5, 1.0, 60,
    )  # fmt: skip
    assert (made.costs_bps, made.slippage_bps, made.exit) == (5.0, 5.0, "horizon")
    tables = {"alerts": {"source": "a.csv"}, "events": {"source": "e.csv"}}
    for key, value, text in (
        ("moves", "largest", "extremes"),
        ("threshold", 0, "be a number above 0"),
        ("epsilon", -1.0, "be a number of at least 0"),
        ("epsilon", "1", "without quotes"),
        ("costs_bps", float("inf"), "be a number of at least 0"),
        ("directions", {"x": "up"}, "long"),
        ("cost_bps", 3, "costs_bps"),
    ):
        with pytest.raises(SettingsError, match=text):
            study_from_dict({**tables, "prices": {"source": "p.csv", key: value}}, ".")
