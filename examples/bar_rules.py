"""The daily bars that two installed packages carry, and alerts drawn from them by fixed rules.

Hands on `read_closes`, `read_bars`, `close_alerts`, `bar_alerts` and `coverage_rows`. The rules
are put in words in `daily_bars.py`. Tables are sessions x companies throughout.
"""

from __future__ import annotations

import pandas as pd
from open_data import data_file

TRAILING_SESSIONS = 250
UNUSUAL_SHARE = 0.05
HORIZON = 5
BAR_COMPANIES = ["AAPL", "GOOG", "IBM", "MSFT"]


def read_closes() -> pd.DataFrame:
    """Adjusted closes, sessions x companies; NaN where a company has none."""
    closes = pd.read_csv(
        data_file("skfolio", "datasets/data/sp500_dataset.csv.gz"),
        index_col="Date",
        parse_dates=["Date"],
    )
    # Its price stands still until the company's listing in 1990; only trading starts a history.
    is_traded = (closes["RRC"] != closes["RRC"].iloc[0]).cummax()
    closes["RRC"] = closes["RRC"].where(is_traded)
    bars = read_bars()
    for company in ("GOOG", "IBM"):
        closes[company] = bars["adjusted close"][company]
    return closes


def read_bars() -> dict[str, pd.DataFrame]:
    """Open, high, low, adjusted close and volume, each sessions x companies with bars."""
    rows = pd.read_csv(data_file("bokeh_sampledata", "_data/stocks.csv.gz"), parse_dates=["Date"])
    rows = rows[rows["Ticker"].isin(BAR_COMPANIES)]
    wide = rows.pivot(index="Date", columns="Ticker")
    names = {"Open": "open", "High": "high", "Low": "low", "Close": "close", "Volume": "volume"}
    names["Adj Close"] = "adjusted close"
    return {short: wide[long] for long, short in names.items()}


def unusual(amounts: pd.DataFrame) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Where an amount is unusual, and where there are enough sessions before it to tell.

    The limit is the 13th largest amount of the 250 sessions before, an amount that occurred and
    no interpolation: equal amounts then compare as equal.
    """
    trailing = amounts.shift(1).rolling(TRAILING_SESSIONS)
    limits = trailing.quantile(1 - UNUSUAL_SHARE, interpolation="higher")
    is_known = limits.notna() & amounts.notna()
    return (amounts > limits) & is_known, is_known


def streak(is_moving: pd.DataFrame, n_sessions: int = 4) -> pd.DataFrame:
    """Sessions that complete a run of `n_sessions` (the fifth in a row is no second streak)."""
    is_complete = ~is_moving.shift(n_sessions, fill_value=False)
    for back in range(n_sessions):
        is_complete &= is_moving.shift(back, fill_value=False)
    return is_complete


def close_alerts(closes: pd.DataFrame) -> tuple[dict[str, pd.DataFrame], pd.DataFrame]:
    """Alerts of the rules that need closes only, and where all of them can be asked."""
    change = closes.pct_change(fill_method=None)
    is_big, is_known = unusual(change.abs())
    is_big_week, is_week_known = unusual(closes.pct_change(5, fill_method=None).abs())
    before = closes.shift(1).rolling(60)
    alerts = {
        "big rise": is_big & (change > 0),
        "big fall": is_big & (change < 0),
        "big week": is_big_week,
        "up streak": streak(change > 0),
        "down streak": streak(change < 0),
        "60-session high": closes > before.max(),
        "60-session low": closes < before.min(),
    }
    return alerts, is_known & is_week_known


def bar_alerts(bars: dict[str, pd.DataFrame]) -> tuple[dict[str, pd.DataFrame], pd.DataFrame]:
    """Alerts of the rules that need more than closes, and where all of them can be asked."""
    adjustment = bars["adjusted close"] / bars["close"]
    close_before = bars["adjusted close"].shift(1)
    amounts = {
        "gap": (bars["open"] * adjustment / close_before - 1).abs(),
        "wide range": (bars["high"] - bars["low"]) * adjustment / close_before,
        "turnover burst": bars["close"] * bars["volume"],
    }
    alerts = {}
    is_known = bars["close"].notna()
    for kind, amount in amounts.items():
        alerts[kind], is_kind_known = unusual(amount)
        is_known &= is_kind_known
    return alerts, is_known


def coverage_rows(is_known: pd.DataFrame, kinds: list[str]) -> pd.DataFrame:
    """One row per company and type, from the first known session to `HORIZON` before the last.

    The last sessions are left out because the data end there, not the company: what followed
    them is unknown, and counting it as "no event" would be wrong.
    """
    rows = []
    for company in is_known.columns:
        dates = is_known.index[is_known[company]]
        start, end = dates[0].date().isoformat(), dates[-1 - HORIZON].date().isoformat()
        rows += [(company, kind, start, end) for kind in kinds]
    return pd.DataFrame(rows, columns=["entity", "type", "start", "end"])
