"""Study on open data: do alerts from daily bars precede big moves, and do they tell direction?

    python examples/daily_bars.py [FOLDER]

Data (`pip install 'combination-signal-miner[examples]'`)
    skfolio: adjusted closes of 20 companies, 1990-01-02 to 2022-12-28 (package licence
    BSD-3-Clause; its authors call the file stale and for examples only). All 20 were still
    large in 2022: survivors.
    bokeh_sampledata: daily bars of AAPL, GOOG, IBM and MSFT to 2013-03-01 (public domain by its
    publisher, package licence BSD-3-Clause). FB's ten months are too few for the rules below.
    AAPL and MSFT are in both: closes from the first, the other bar columns from the second.

Rules. "Unusual" means among the largest 5 %: at most 12 of the 250 sessions before had the same
quantity as large. Today is not among the 250, so nothing is known before its time.
    big rise, big fall   unusual absolute change of the close, by its sign
    big week             unusual absolute change of the close over five sessions
    up streak            the fourth close in a row above the one before; `down streak` likewise
    60-session high      close above every close of the 60 sessions before; `60-session low` below
    gap                  unusual distance of the open from the close before   (four companies only)
    wide range           unusual distance of high from low                    (four companies only)
    turnover burst       unusual price x volume                               (four companies only)
A company is covered from its first session on which all its rules can be asked. The last three
rules have coverage of their own: no bars is not the same as no gap.

Events
    big move             a big rise or a big fall (studies `big_moves` and `big_moves_by_sector`)
    up close, down close the next close above or below the one before (study `direction`)
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from bar_rules import (
    HORIZON,
    bar_alerts,
    close_alerts,
    coverage_rows,
    read_bars,
    read_closes,
)
from open_data import new_folder, print_table, raw_ratio, run_study, say, stamps_of

VOLATILITY_ALERTS = ["big fall", "big rise", "big week", "60-session low"]
STREAK_ALERTS = ["down streak", "up streak"]
SECTORS = {
    "technology": ["AAPL", "AMD", "GOOG", "IBM", "MSFT"],
    "finance and industry": ["BAC", "GE", "JPM"],
    "energy": ["CVX", "RRC", "XOM"],
    "health": ["JNJ", "LLY", "MRK", "PFE", "UNH"],
    "consumer": ["BBY", "HD", "KO", "PEP", "PG", "WMT"],
}

STUDY = """\
[study]
name = "{name}"

[alerts]
source = "alerts.csv"

[events]
source = "events.csv"
targets = {targets}
{groups}
[coverage]
source = "coverage.csv"

[sessions]
calendar = "XNYS"
timezone = "America/New_York"
start = "1990-01-02"
end = "2022-12-28"

[windows]
lookback = {lookback}
horizon = {horizon}

[mining]
max_size = 2

[testing]
permutations = {permutations}
seed = 7

[holdout]
start = "2007-01-03"
"""
SECTOR_PEERS = """
[groups]
source = "groups.csv"
peers = "sector"
"""


def write_tables(folder: Path) -> None:
    """Write alerts, events, coverage and groups of the three studies into `folder`."""
    closes = read_closes()
    alerts, is_known = close_alerts(closes)
    more_alerts, is_more_known = bar_alerts(read_bars())
    coverage = [coverage_rows(is_known, list(alerts))]
    coverage.append(coverage_rows(is_more_known, list(more_alerts)))
    change = closes.pct_change(fill_method=None)
    events = {
        "big move": alerts["big rise"] | alerts["big fall"],
        "up close": change > 0,
        "down close": change < 0,
    }
    sectors = [(name, sector) for sector, names in SECTORS.items() for name in names]
    tables = {
        "alerts": pd.concat([stamps_of(on, kind) for kind, on in (alerts | more_alerts).items()]),
        "events": pd.concat([stamps_of(on, kind) for kind, on in events.items()]),
        "coverage": pd.concat(coverage),
        "groups": pd.DataFrame(sectors, columns=["entity", "sector"]),
    }
    for name, table in tables.items():
        table.to_csv(folder / f"{name}.csv", index=False)


def write_studies(folder: Path) -> list[Path]:
    """Write the settings files of the three studies into `folder`; their paths, in that order."""
    five = {"lookback": 5, "horizon": HORIZON, "permutations": 2000}
    big, closes = '["big move"]', '["up close", "down close"]'
    settings = {
        "big_moves": {"targets": big, "groups": "", **five},
        "big_moves_by_sector": {"targets": big, "groups": SECTOR_PEERS, **five},
        "direction": {"targets": closes, "groups": "", "lookback": 1, "horizon": 1},
    }
    # Nearly every session is an up or a down close: 2000 draws of 80,000 events take minutes, and
    # here they serve only the comparison with Westfall-Young and the placebo.
    settings["direction"]["permutations"] = 200
    paths = []
    for name, values in settings.items():
        paths.append(folder / f"{name}.toml")
        paths[-1].write_text(STUDY.format(name=name, **values), encoding="utf-8")
    return paths


def read_big_moves(market: pd.DataFrame, sector: pd.DataFrame) -> None:
    """Print how often a big move followed an alert, and how much of that the calendars explain."""
    singles = market[market["combination"].isin([*VOLATILITY_ALERTS, *STREAK_ALERTS])]
    by_sector = sector.set_index("combination")
    table = pd.DataFrame(
        {
            "alert": singles["combination"],
            "triggers": singles["triggers"],
            "precision": singles["precision"],
            "usual": singles["base_rate"],
            "times usual": raw_ratio(singles),
            "times, market days held": singles["lift"],
            "p": singles["p_value"],
            "times, sector days held": singles["combination"].map(by_sector["lift"]),
            "p in sector": singles["combination"].map(by_sector["p_value"]),
        }
    )
    print_table(table, "A big move within five sessions (1991 to 2006):")
    fall = table[table["alert"] == "big fall"].iloc[0]
    say(
        f"After a big fall another big move came {fall['times usual']:.2f} times as often as on "
        "any day. With the number of companies that have one ahead held fixed for every session "
        f"it is {fall['times, market days held']:.2f} times; with that number held fixed in each "
        f"sector, {fall['times, sector days held']:.2f}. The first step down is volatility that "
        "the market shares, the second what a sector shares; what is left is the company's own."
    )
    for title, run in (("market", market), ("sector", sector)):
        rules = run[run["rule_order"].notna()].sort_values("rule_order")
        columns = ["combination", "lift", "holdout_triggers", "holdout_precision", "verdict"]
        rules = rules[[*columns, "holdout_p_value"]]
        print_table(rules, f"Rules with {title} days held, judged on 2007 to 2022:")


def read_direction(direction: pd.DataFrame) -> None:
    """Print what streaks say about the next close, and what was confirmed at all."""
    streaks = direction[direction["combination"].isin(STREAK_ALERTS)]
    columns = ["target", "combination", "triggers", "precision", "base_rate", "lift", "p_value"]
    print_table(streaks[columns], "The next close after a streak (1991 to 2006):")
    furthest = (streaks["precision"] - streaks["base_rate"]).abs().max()
    is_rule = direction["rule_order"].notna()
    say(
        f"After a streak the next close is up or down at most {100 * furthest:.1f} percentage "
        "points more or less often than usual; with every session's number of up or down closes "
        f"held fixed the smallest of the four p-values is {streaks['p_value'].min():.2f}. Of all "
        f"alerts and pairs of them, rules for direction on discovery: {int(is_rule.sum())}; "
        f"confirmed afterwards: {int((direction['verdict'] == 'confirmed').sum())}."
    )


def main() -> None:
    """Derive the tables, hunt three times, print the plain reading."""
    folder = new_folder("daily_bars_study")
    write_tables(folder)
    market, sector, direction = (run_study(path) for path in write_studies(folder))
    read_big_moves(market, sector)
    read_direction(direction)


if __name__ == "__main__":
    main()
