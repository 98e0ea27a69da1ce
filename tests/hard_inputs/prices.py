"""Prices: closes that are none, bars that contradict themselves, splits, days twice."""

from __future__ import annotations

import random
from collections.abc import Callable

from .case import Group, answer, unreadable
from .folder import Folder
from .plain import ENTITIES, N_DAYS, day

GROUP = Group("Prices")
add = GROUP.add
BAR = ("entity", "date", "close", "high", "low")


def _walk() -> list[tuple[str, ...]]:
    draw = random.Random(5)
    bars: list[tuple[str, ...]] = []
    for entity in ENTITIES:
        price = 100.0
        for t in range(N_DAYS):
            price *= 1 + draw.uniform(-0.02, 0.02)
            high, low = price * 1.01, price * 0.99
            bars.append((entity, day(t), f"{price:.4f}", f"{high:.4f}", f"{low:.4f}"))
    return bars


BARS = _walk()


def prices(*changes: tuple[int, str, str], **keys: object) -> Callable[[Folder], None]:
    """Prices with some cells changed: row, column, value."""

    def write(folder: Folder) -> None:
        rows = [list(bar) for bar in BARS]
        for row, column, value in changes:
            rows[row][BAR.index(column)] = value
        folder.rows("prices.csv", rows, BAR)
        folder.set("prices", **{"source": "prices.csv"} | keys)

    return write


def split_in_two(folder: Folder, **keys: object) -> None:
    """firm00's closes halve half-way and stay so."""
    changes = [(t, c, f"{float(BARS[t][BAR.index(c)]) / 2:.4f}")
               for t in range(75, N_DAYS) for c in BAR[2:]]  # fmt: skip
    prices(*changes, **keys)(folder)


READ = {"prices": {"rows": len(BARS)}}

add("prices whose moves are off", prices(moves="off"), answer())
add("prices whose moves are targets", prices(), answer(**READ, twin=None))
add(
    "prices that are not there",
    lambda f: f.set("prices", source="prices.parquet"),
    '`[prices]`: `source` must be a file that exists; got "prices.parquet". Paths are relative '
    "to the folder of the settings, {folder}.",
)
add(
    "a close of 0",
    prices((0, "close", "0")),
    unreadable(
        'prices.csv, row 1, column close: "0" is not above zero (line 2)',
        'prices.csv, row 1, column low: "99.4867" is above open or close (line 2)',
        table="prices",
    ),
)
add(
    "a close below zero",
    prices((0, "close", "-1.5")),
    unreadable(
        'prices.csv, row 1, column close: "-1.5" is not above zero (line 2)',
        'prices.csv, row 1, column low: "99.4867" is above open or close (line 2)',
        table="prices",
    ),
)
add(
    "an empty close",
    prices((0, "close", "")),
    unreadable('prices.csv, row 1, column close: "" is no number (line 2)', table="prices"),
)
add(
    "a close with a comma",
    prices((0, "close", "1,000.5")),
    unreadable('prices.csv, row 1, column close: "1,000.5" is no number (line 2)', table="prices"),
)
add(
    "a close in words",
    prices((0, "close", "n/a")),
    unreadable('prices.csv, row 1, column close: "n/a" is no number (line 2)', table="prices"),
)
add(
    "a close that is infinite",
    prices((0, "close", "inf")),
    unreadable('prices.csv, row 1, column close: "inf" is no number (line 2)', table="prices"),
)
add(
    "a high below the close",
    prices((0, "high", "1")),
    unreadable(
        'prices.csv, row 1, column high: "1" is below open or close (line 2)', table="prices"
    ),
)
add(
    "a low above the close",
    prices((0, "low", "1e9")),
    unreadable(
        'prices.csv, row 1, column low: "1e9" is above open or close (line 2)', table="prices"
    ),
)
add(
    "a price's date with slashes",
    prices((0, "date", "01/04/2021")),
    unreadable(
        'prices.csv, row 1, column date: "01/04/2021" is no date: write dates as 2020-01-31, '
        "year first and with hyphens (line 2)",
        table="prices",
    ),
)
add(
    "two rows of one entity and date",
    prices((1, "date", day(0))),
    "`[prices]`: `rows` must be one for an entity and date; got 2 for firm00 on 2021-01-01, and "
    "1 such dates in all. Remove all but one.",
)
add(
    "a split that was not adjusted for",
    split_in_two,
    "`[prices]`: `close` must not change by a factor of 1.8 or more from one row to the next; "
    "got 1 such changes, as a split makes that was not adjusted for. Adjust the prices; or write "
    'jumps = "keep" if these are real, jumps = "break" to start a series anew at each.\n'
    "  firm00, 2021-03-17: 100.884 to 50.1491",
)
add(
    "a split that was not adjusted for, broken there",
    lambda f: split_in_two(f, jumps="break"),
    answer(**READ, twin=None),
)
add(
    "bad closes, set aside",
    prices((0, "close", "0"), (9, "close", "x"), bad_rows="set-aside"),
    answer(prices={"rows": len(BARS), "unreadable": 2}, twin=None),
)
add(
    "prices without a close",
    lambda f: (
        f.rows("prices.csv", [b[:2] for b in BARS], BAR[:2]),
        f.set("prices", source="prices.csv"),
    ),
    "`prices.csv`: `column close` must be there for table [prices]; got columns `entity`, "
    '`date`. Rename it in the file, or write columns = {close = "its name in the file"}.',
)
add(
    "prices of nobody in the logs",
    lambda f: (
        f.rows("prices.csv", [("other", *b[1:]) for b in BARS[:N_DAYS]], BAR),
        f.set("prices", source="prices.csv"),
    ),
    answer(prices={"rows": N_DAYS}, twin=None),
)
add(
    "an event type called like a move",
    lambda f: (prices()(f), f.text("events.csv", f.read("events.csv").replace("upset", "move up"))),
    "`[prices] moves`: `move up` must not be types of the event log too; got both. Rename the "
    'events, or set moves = "off".',
)
