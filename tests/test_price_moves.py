"""Prices as they are read and placed, and moves cut from them, against slow twins and oracles."""

from __future__ import annotations

import sqlite3
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

sys.path.insert(0, str(Path(__file__).parents[1] / "examples"))

from bar_rules import read_bars
from open_data import data_file

from miner.errors import TableError
from miner.kernels import moves as kernels
from miner.price_moves import (
    MOVE_DOWN,
    MOVE_UP,
    find_moves,
    move_events,
    moves_summary,
    moves_table,
)
from miner.prices import Prices, place_prices
from miner.read_tables import PriceTable, read_prices
from miner.session_calendar import build_calendar
from miner.settings import PriceSettings, study_from_dict

# A small series worked out by enumeration: what each epsilon makes of it.
RETURNS = [0.02, 0.01, -0.005, 0.02, -0.03, -0.01, 0.004, -0.02, 0.05, 0.01, -0.012, 0.03]
ORACLE = {
    0.01: [(4, 0.045), (4, -0.056), (2, 0.06), (1, -0.012), (1, 0.03)],
    0.02: [(4, 0.045), (4, -0.056), (4, 0.078)],
}
RUNS = [2, 1, 1, 2, 1, 1, 2, 1, 1]


def cut(returns, epsilon):
    return kernels.moves(np.asarray(returns, dtype=float), np.full(len(returns), float(epsilon)))


@pytest.mark.parametrize("epsilon", ORACLE)
def test_epsilon_moves_of_the_worked_series(epsilon):
    start, stop, known, size = cut(RETURNS, epsilon)
    assert (stop - start).tolist() == [length for length, _ in ORACLE[epsilon]]
    assert size.tolist() == pytest.approx([total for _, total in ORACLE[epsilon]])
    assert start.tolist() == [0, *stop[:-1]]
    assert known[-1] == -1
    assert (known[:-1] >= stop[:-1]).all()


def test_with_epsilon_zero_moves_are_runs_of_one_sign():
    start, stop, _, _ = cut(RETURNS, 0)
    assert (stop - start).tolist() == RUNS


def twin(returns, epsilon):
    """Moves by the definition, each extreme sought by looking at every later session."""
    moves, i, n = [], 0, len(returns)
    while i < n and returns[i] == 0:
        i += 1
    while i < n:
        sign = 1 if returns[i] > 0 else -1
        level = [sign * sum(returns[i : j + 1]) for j in range(i, n)]
        end = None
        for j in range(len(level)):
            if max(level[: j + 1]) - level[j] > epsilon[i]:
                end = i + j
                break
        seen = level if end is None else level[: end - i]
        top = max(k for k, x in enumerate(seen) if x == max(seen))
        moves.append((i, i + top + 1, -1 if end is None else end, sign * seen[top]))
        if end is None:
            break
        i += top + 1
    return moves


@given(
    st.lists(st.integers(-4, 4), min_size=1, max_size=40),
    st.lists(st.integers(0, 7), min_size=40, max_size=40),
)
def test_moves_are_those_of_the_twin(returns, epsilon):
    """Whole numbers, so that sums are exact and ties are ties; every start has its own epsilon."""
    found = kernels.moves(np.array(returns, dtype=float), np.array(epsilon[: len(returns)], float))
    assert list(zip(*(part.tolist() for part in found), strict=True)) == twin(returns, epsilon)


@given(st.integers(0, 10**6), st.integers(2, 30))
def test_volatility_is_that_of_the_returns_before(seed, window):
    returns = np.random.default_rng(seed).normal(size=50)
    found = kernels.trailing_volatility(returns, window)
    assert np.isnan(found[:window]).all()
    for i in range(window, 50):
        assert found[i] == pytest.approx(returns[i - window : i].std(ddof=1))


def prices_of(close_et, series_et=None) -> Prices:
    close_et = np.asarray(close_et, dtype=float)
    if series_et is None:
        series_et = np.where(np.isnan(close_et), -1, 0).astype(np.int32)
    return Prices(close_et, None, None, None, None, series_et, {}, ())


def walk(seed, n=600, sd=0.02, n_entities=3):
    rng = np.random.default_rng(seed)
    return 50 * np.exp(np.cumsum(rng.normal(0, sd, (n_entities, n)), axis=1))


def settings(**keys) -> PriceSettings:
    return PriceSettings(source="p.csv", **keys)


def rows(moves):
    names = ("entity", "start", "end", "known", "size", "volatility")
    return list(zip(*(getattr(moves, name).tolist() for name in names), strict=True))


def test_a_move_is_known_once_it_is_over_and_nothing_later_changes_it():
    close_et = walk(3)
    whole = find_moves(prices_of(close_et), settings(threshold=1.5))
    assert len(whole.start) > 60
    assert (whole.start <= whole.end).all()
    assert (whole.end < whole.known).all()
    for stop in (200, 333, 599):
        rng = np.random.default_rng(stop)
        later = close_et.copy()
        later[:, stop:] *= np.exp(rng.normal(0, 0.05, later[:, stop:].shape))
        for other in (later[:, :stop], later):
            found = find_moves(prices_of(other), settings(threshold=1.5))
            known_by_then = [row for row in rows(found) if row[3] < stop]
            assert known_by_then == [row for row in rows(whole) if row[3] < stop]


def test_a_major_move_is_one_by_its_own_numbers():
    close_et = walk(4)
    keys = {"threshold": 2.0, "epsilon": 1.5, "volatility_sessions": 40}
    moves = find_moves(prices_of(close_et), settings(**keys))
    assert len(moves.start) > 20
    log = np.log(close_et)
    for e, start, end, known, size, volatility in rows(moves):
        before = np.diff(log[e, start - 41 : start])
        assert volatility == pytest.approx(before.std(ddof=1))
        assert size == pytest.approx(log[e, end] - log[e, start - 1])
        assert abs(size) >= 2.0 * volatility * np.sqrt(end - start + 1)
        sign = np.sign(size)
        path = sign * (log[e, start - 1 : end + 1] - log[e, start - 1])
        assert path.min() >= -1.5 * volatility - 1e-12  # no larger counter-move inside
        assert path[-1] == pytest.approx(path.max())
        counter = path[-1] - sign * (log[e, end + 1 : known + 1] - log[e, start - 1])
        assert counter[-1] > 1.5 * volatility
        assert (counter[:-1] <= 1.5 * volatility).all()


@pytest.mark.parametrize("threshold", [0.3, 1.5, 2.5])
def test_the_major_moves_are_all_those_of_the_twin(threshold):
    """Every inner move that is large enough, and no other: in loops from the definition."""
    close_et = walk(9, n=260)
    expected, unfinished = [], 0
    for e, close in enumerate(close_et):
        returns = np.diff(np.log(close))
        volatility = [
            returns[i - 20 : i].std(ddof=1) if i >= 20 else np.nan for i in range(returns.size)
        ]
        moves = twin(returns[20:], volatility[20:])
        for number, (start, stop, known, size) in enumerate(moves):
            limit = threshold * volatility[start + 20] * (stop - start) ** 0.5
            if number == 0 or abs(size) < limit:
                continue
            if known < 0:
                unfinished += 1
            else:
                expected.append((e, start + 21, stop + 20, known + 21))
    keys = {"threshold": threshold, "volatility_sessions": 20}
    found = find_moves(prices_of(close_et), settings(**keys))
    assert [row[:4] for row in rows(found)] == expected
    assert found.n_unfinished == unfinished
    assert len(expected) > 5


def test_up_and_down_are_mirror_images_and_the_price_level_does_not_matter():
    close_et = walk(5)
    one = find_moves(prices_of(close_et), settings())
    other = find_moves(prices_of(7 / close_et), settings())
    assert one.start.tolist() == other.start.tolist() != []
    assert one.size == pytest.approx(-other.size)
    events, known = move_events(one)
    mirrored, _ = move_events(other)
    assert events[MOVE_UP][1].tolist() == mirrored[MOVE_DOWN][1].tolist() != []
    assert known[MOVE_UP].size == events[MOVE_UP][0].size
    assert events[MOVE_UP][0].dtype == events[MOVE_UP][1].dtype == np.int32


def test_close_to_close_moves_are_single_returns():
    close_et = walk(6)
    moves = find_moves(prices_of(close_et), settings(moves="close-to-close", threshold=2.0))
    returns = np.diff(np.log(close_et), axis=1)
    expected = [
        (e, i + 1)
        for e in range(3)
        for i in range(60, returns.shape[1])
        if abs(returns[e, i]) >= 2.0 * returns[e, i - 60 : i].std(ddof=1)
    ]
    assert list(zip(moves.entity.tolist(), moves.start.tolist(), strict=True)) == expected
    assert len(expected) > 50
    assert (moves.start == moves.known).all()
    assert moves_summary(moves)[MOVE_UP]["share_of_one_session"] == 1.0


def test_a_series_that_starts_anew_has_no_memory_and_one_that_stands_still_no_moves():
    close_et = walk(7, n=300, n_entities=1)
    series_et = np.zeros(close_et.shape, dtype=np.int32)
    series_et[0, 150:] = 1
    broken = find_moves(prices_of(close_et, series_et), settings(threshold=1.5))
    second = find_moves(prices_of(close_et[:, 150:]), settings(threshold=1.5))
    later = [row for row in rows(broken) if row[1] >= 150]
    assert [(s - 150, e - 150, k - 150) for _, s, e, k, _, _ in later] == [
        (s, e, k) for _, s, e, k, _, _ in rows(second)
    ]
    assert later
    still = np.full((1, 200), 10.0)
    still[0, 100:] = 11.0
    assert rows(find_moves(prices_of(still), settings())) == []


def test_returns_over_missing_sessions_belong_to_the_session_that_ends_them():
    close_et = walk(8, n=400, n_entities=1)
    whole = find_moves(prices_of(close_et), settings(threshold=1.5))
    gappy = np.insert(close_et, [200, 200, 200], np.nan, axis=1)
    series_et = np.where(np.isnan(gappy), -1, 0).astype(np.int32)
    found = find_moves(prices_of(gappy, series_et), settings(threshold=1.5))
    moved = {(s + 3 * (s >= 200), e + 3 * (e >= 200)) for _, s, e, *_ in rows(whole)}
    # a move over the gap is longer in sessions and may no longer be major
    across = {(s, e) for s, e in moved if s < 200 <= e}
    assert moved - across == {(s, e) for _, s, e, *_ in rows(found)} - across
    assert len(moved - across) > 10


@pytest.mark.parametrize("name", ["sp500", "nasdaq", "AAPL", "GOOG", "IBM", "MSFT"])
def test_moves_of_real_series_are_as_long_as_they_were_measured_to_be(name):
    """Stylised facts: same-sign runs of daily returns are as long as a coin's (half of length 1,
    mean 2); lengths with epsilon of 1 and 3 volatilities of 60 sessions as measured on these
    series. Cont (2001), Quant. Finance 1:223, for the absence of linear correlation behind it."""
    if name in ("sp500", "nasdaq"):
        table = pd.read_csv(data_file("arch", f"data/{name}/{name}.csv.gz"))
        close = table["Adj Close"].to_numpy(dtype=float)
    else:
        close = read_bars()["adjusted close"][name].dropna().to_numpy(dtype=float)
    returns = np.diff(np.log(close))
    volatility = kernels.trailing_volatility(returns, 60)

    def lengths(epsilon_i):
        start, stop, known, _ = kernels.moves(returns, epsilon_i)
        assert start.size > 50
        return (stop - start)[known >= 0]

    runs = lengths(np.zeros(returns.size))
    assert 0.47 <= (runs == 1).mean() <= 0.55
    assert 1.8 <= runs.mean() <= 2.1
    one, three = lengths(volatility), lengths(3 * volatility)
    assert 0.54 <= (one <= 5).mean() <= 0.72
    assert 3 <= np.median(one) <= 5
    assert 0.31 <= (three <= 10).mean() <= 0.52
    assert 10 <= np.median(three) <= 18


def test_alerts_from_the_same_prices_precede_extremes_even_in_a_random_walk():
    """The caution of the module, put to the test: a new low is no news of a move up, and yet half
    as many again or more follow it, since a move up starts at a low. Close-to-close moves have
    little or nothing of that (own simulation)."""
    rng = np.random.default_rng(1)
    close_et = 50 * np.exp(np.cumsum(rng.normal(0, 0.02, (12, 6000)), axis=1))
    before = pd.DataFrame(close_et.T).shift(1).rolling(60).min().to_numpy().T
    is_low, is_asked = close_et < before, ~np.isnan(before)
    lift = {}
    for how in ("extremes", "close-to-close"):
        moves = find_moves(prices_of(close_et), settings(moves=how))
        events, _ = move_events(moves)
        is_window = np.zeros(close_et.shape, dtype=bool)
        for e, s in zip(*events[MOVE_UP], strict=True):
            is_window[e, max(0, s - 5) : s] = True
        lift[how] = is_window[is_low].mean() / is_window[is_asked].mean()
    assert 1.4 < lift["extremes"] < 2.2
    assert 0.9 < lift["close-to-close"] < lift["extremes"] - 0.3


# reading and placing


HEADER = "entity,date,close,volume"


def study(folder, text=None, **keys):
    if text is not None:
        (folder / "p.csv").write_text(text, encoding="utf-8")
    tables = {"alerts": {"source": "a.csv"}, "events": {"source": "e.csv"}}
    sessions = {"start": "2020-01-01", "end": "2020-03-31"}
    return study_from_dict(
        {**tables, "prices": {"source": "p.csv", **keys}, "sessions": sessions}, folder
    )


def placed(made, names=("a", "b")) -> Prices:
    table = read_prices(made)
    return place_prices(table, names, build_calendar(made, 0, 0), made.prices)


def refused(made) -> str:
    with pytest.raises(TableError) as caught:
        placed(made)
    return str(caught.value)


def lines(*rows_of, header=HEADER) -> str:
    return "\n".join([header, *rows_of]) + "\n"


def test_rows_come_to_lie_on_their_sessions(tmp_path):
    made = study(
        tmp_path,
        lines("b,2020-01-03,11,", "a,2020-01-02,10,500", "a,2020-01-03,1.05e1,0",
              "a,2020-01-04,99,1", "a,2019-12-31,9,1", "c,2020-01-02,5,1"),
    )  # fmt: skip
    prices = placed(made)
    assert prices.close_et.shape == (2, 65)
    assert prices.close_et[0, :3].tolist()[1:] == [10.0, 10.5]
    assert prices.close_et[1, 2] == 11.0
    assert np.isnan(prices.close_et).sum() == 2 * 65 - 3
    assert prices.volume_et[0, 1:3].tolist() == [500.0, 0.0]
    assert np.isnan(prices.volume_et[1, 2])
    assert prices.open_et is prices.high_et is prices.low_et is None
    assert prices.series_et[0, :4].tolist() == [-1, 0, 0, -1]
    assert prices.counts == {
        "rows": 6, "unreadable": 0, "not a session": 2, "unknown entity": 1, "used": 3, "jumps": 0,
    }  # fmt: skip
    assert any("no session" in warning for warning in prices.warnings)


def test_parquet_and_a_database_hold_the_same_prices(tmp_path):
    frame = pd.DataFrame(
        {
            "entity": ["a", "a", "b"],
            "date": pd.to_datetime(["2020-01-02", "2020-01-03", "2020-01-02"]),
            "close": [10.25, 10.5, 3.0],
            "open": [10.0, np.nan, 3.0],
            "volume": [100, 200, 300],
        }
    )
    frame.to_parquet(tmp_path / "p.parquet")
    with sqlite3.connect(tmp_path / "p.db") as connection:
        text = frame.assign(date=frame["date"].dt.strftime("%Y-%m-%d"))
        text.to_sql("bars", connection, index=False)
    csv = frame.assign(date=frame["date"].dt.strftime("%Y-%m-%d")).to_csv(index=False)
    found = [
        placed(study(tmp_path, csv)),
        placed(study(tmp_path, source="p.parquet")),
        placed(study(tmp_path, source="sqlite:///p.db", query="select * from bars")),
    ]
    for other in found[1:]:
        np.testing.assert_array_equal(found[0].close_et, other.close_et)
        np.testing.assert_array_equal(found[0].open_et, other.open_et)
        np.testing.assert_array_equal(found[0].volume_et, other.volume_et)
    assert np.isfinite(found[0].close_et).sum() == 3


@pytest.mark.parametrize(
    ("row", "text"),
    [
        ("a,2020-01-02,0,1", 'row 1, column close: "0" is not above zero'),
        ("a,2020-01-02,-3,1", 'row 1, column close: "-3" is not above zero'),
        ("a,2020-01-02,,1", 'row 1, column close: "" is no number'),
        ("a,2020-01-02,nan,1", 'row 1, column close: "nan" is no number'),
        ('a,2020-01-02,"1,000",1', 'row 1, column close: "1,000" is no number'),
        ("a,2020-01-02,1,-5", 'row 1, column volume: "-5" is below zero'),
        ("a,2020-01-02,1,many", 'row 1, column volume: "many" is no number'),
        ("a,someday,1,5", 'row 1, column date: "someday" is no date'),
        (",2020-01-02,1,5", 'row 1, column entity: "" is empty'),
    ],
)
def test_a_row_that_is_no_bar_is_named(tmp_path, row, text):
    assert text in refused(study(tmp_path, lines(row)))
    aside = study(tmp_path, lines(row, "a,2020-01-03,2,5"), bad_rows="set-aside")
    assert len(read_prices(aside).set_aside) == 1
    assert placed(aside).counts["used"] == 1


def test_high_and_low_hold_open_and_close(tmp_path):
    header = "entity,date,open,high,low,close"
    text = refused(study(tmp_path, lines("a,2020-01-02,5,5.5,4,6", header=header)))
    assert 'column high: "5.5" is below open or close' in text
    text = refused(study(tmp_path, lines("a,2020-01-02,5,7,5.5,6", header=header)))
    assert 'column low: "5.5" is above open or close' in text
    good = study(tmp_path, lines("a,2020-01-02,5,7,4,6", "a,2020-01-03,,,,6", header=header))
    assert placed(good).high_et[0, 1] == 7.0


def test_two_rows_for_one_date_are_refused(tmp_path):
    text = refused(study(tmp_path, lines("a,2020-01-02,5,1", "a,2020-01-02,6,1")))
    assert "be one for an entity and date; got 2 for a on 2020-01-02" in text


def test_what_looks_like_a_split_is_refused_broken_or_kept(tmp_path):
    text = lines("a,2020-01-02,10,1", "a,2020-01-03,5,1", "a,2020-01-06,5.2,1")
    found = refused(study(tmp_path, text))
    assert "a, 2020-01-03: 10 to 5" in found
    assert 'jumps = "break"' in found
    kept, broken = (placed(study(tmp_path, text, jumps=how)) for how in ("keep", "break"))
    assert kept.counts["jumps"] == broken.counts["jumps"] == 1
    assert kept.series_et[0, 1:4].tolist() == [0, 0, 0]
    assert broken.series_et[0, 1:4].tolist() == [0, 1, 1]


def test_a_long_gap_breaks_a_series_and_a_short_one_does_not(tmp_path):
    days = pd.bdate_range("2020-01-01", "2020-03-31").strftime("%Y-%m-%d")
    text = lines(*(f"a,{day},{5 + i % 3},1" for i, day in enumerate(days) if i not in (10, 11, 12)))
    for gap, last in ((3, 0), (2, 1)):
        prices = placed(study(tmp_path, text, largest_gap=gap))
        assert prices.series_et[0, 9:14].tolist() == [0, -1, -1, -1, last]


def test_survivors_and_companies_without_prices_are_told_of():
    made = study_from_dict(
        {
            "alerts": {"source": "a"}, "events": {"source": "e"}, "prices": {"source": "p"},
            "sessions": {"start": "2019-01-01", "end": "2020-12-31"},
        },
        ".",
    )  # fmt: skip
    calendar = build_calendar(made, 0, 0)
    names = tuple(f"n{i:02d}" for i in range(25))
    n = len(calendar)

    def table(last_of_first):
        counts = [last_of_first, *[n] * 23]
        entity = np.repeat(np.arange(24, dtype=np.int32), counts)
        date = np.concatenate([calendar.dates[:count] for count in counts])
        empty = pd.DataFrame()
        return PriceTable(entity, names[:24], date, {"close": np.full(date.size, 5.0)}, date.size,
                          empty, {})  # fmt: skip

    all_survive = place_prices(table(n), names, calendar, made.prices).warnings
    assert "1 of 25 entities have no price" in all_survive[0]
    assert "survivors only" in all_survive[1]
    one_leaves = place_prices(table(n - 100), names, calendar, made.prices).warnings
    assert not any("survivors" in warning for warning in one_leaves)


def test_the_table_of_moves_reads_as_dates_and_simple_returns():
    close_et = walk(3)
    moves = find_moves(prices_of(close_et), settings())
    dates = np.datetime64("2020-01-01") + np.arange(600)
    table = moves_table(moves, ["x", "y", "z"], dates)
    assert len(table) == len(moves.start) > 10
    row = table.iloc[0]
    e = "xyz".index(row["entity"])
    at = [int((np.datetime64(row[c]) - dates[0]).astype(int)) for c in ("start", "end")]
    assert row["size"] == pytest.approx(close_et[e, at[1]] / close_et[e, at[0] - 1] - 1)
    assert (table["scaled_size"] >= 2.5).all()
    assert row["sessions"] == at[1] - at[0] + 1
    summary = moves_summary(moves)
    assert summary[MOVE_UP]["events"] + summary[MOVE_DOWN]["events"] == len(table)
    columns = ("entity", "start", "end", "known", "size", "volatility")
    none = replace(moves, **{name: getattr(moves, name)[:0] for name in columns})
    assert moves_summary(none)[MOVE_UP] == {
        "events": 0, "share_of_one_session": None, "median_sessions": None, "median_size": None,
    }  # fmt: skip
