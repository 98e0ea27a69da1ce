"""Study on open data: what would trades on rules for price moves have earned?

    python examples/daily_bar_trades.py [FOLDER]

The alerts, companies and calendar of `daily_bars.py`; the events are major price moves that the
tool finds itself, in two studies: `extremes` (from one extreme of the closes to the next, the
counter-move exceeding one volatility of 60 sessions, at least 2.5 volatilities times the square
root of the length) and `close_to_close` (one return of at least 2.5 volatilities). Each is hunted
in, made into a rule book, and traded: in at the close of the session after the trigger (these
prices have no opens), out five sessions after it, 5 + 5 basis points each way, against the mean of
the other companies.

Every change of a close by a factor of 1.8 in these prices is a real one (the largest: AAPL on
2000-09-29, minus 52 %), so the studies say `jumps = "keep"`.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from bar_rules import read_closes
from daily_bars import HORIZON, STUDY, write_tables
from open_data import new_folder, print_table, run_study, say

from miner import load_study
from miner.rule_book.making import make_rule_book
from miner.trades import evaluate_trades, trade_lines, tried_in

PRICES = """
[prices]
source = "prices.csv"
jumps = "keep"
benchmark = "all"
moves = "{moves}"
"""
MOVES = {"extremes": "extremes", "close_to_close": "close-to-close"}


def write_prices(folder: Path) -> None:
    """Write the closes as a table of entity, date, close."""
    closes = read_closes().rename_axis(index="date", columns="entity")
    long = closes.stack().dropna().rename("close").reset_index()
    long["date"] = long["date"].dt.strftime("%Y-%m-%d")
    long.to_csv(folder / "prices.csv", index=False)


def study_moves(folder: Path, name: str) -> None:
    """Hunt for one kind of moves, make the rule book, trade its rules."""
    path = folder / f"{name}.toml"
    text = STUDY.format(
        name=f"price moves, {MOVES[name]}",
        targets='["move up", "move down"]',
        groups="",
        lookback=5,
        horizon=HORIZON,
        permutations=2000,
    )
    path.write_text(text + PRICES.format(moves=MOVES[name]), encoding="utf-8")
    candidates = run_study(path)
    run = folder / f"{name}-run"
    singles = candidates[candidates["size"] == 1].sort_values(["target", "p_value"])
    columns = ["target", "combination", "triggers", "precision", "base_rate", "lift", "p_value"]
    print_table(singles[columns], "Single alerts and a move within five sessions:")
    book = make_rule_book(run, folder / f"{name}-rules.toml").book
    study = load_study(path)
    result = evaluate_trades(book, study, tried=tried_in(run, study))
    print()
    for line in trade_lines(result):
        print(line)
    read_trades(result.rules)


def main() -> None:
    """Derive the tables; hunt, make rules and trade for either kind of moves."""
    folder = new_folder("daily_bar_trades_study")
    write_tables(folder)
    write_prices(folder)
    for name in MOVES:
        study_moves(folder, name)


def read_trades(rules: pd.DataFrame) -> None:
    """Say in a sentence what the holdout's trades came to."""
    held = rules[rules["part"] == "holdout"]
    if held.empty:
        say("No rule, so nothing to trade.")
        return
    good = int((held["p_all_tried"] <= 0.05).sum())
    say(
        f"Of {len(held)} rules traded on the holdout, {int((held['mean_net'] > 0).sum())} had a "
        f"mean net return above nought, {good} of them beyond what the search among them would "
        "bring by chance (5 %)."
    )


if __name__ == "__main__":
    main()
