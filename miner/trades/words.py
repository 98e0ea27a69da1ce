"""Trade tables for a terminal and as files. Formats; computes no statistic."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from pathlib import Path

import pandas as pd

from miner import placing
from miner.errors import OutputError, explain
from miner.trades.evaluate import TradeTable

WIDTH = 100
FLOATS = "%.10g"
CAUTIONS = (
    "Research, not advice: simulated trades at past prices, with assumed costs. Prices can gap "
    "through any exit. Alerts ahead of takeovers and other corporate events can reflect leaked "
    "information: involve compliance before acting on a rule. Local rules and licensed practice "
    "come first."
)


def trade_lines(result: TradeTable) -> Iterator[str]:
    """The table on a screen: under each rule a line for discovery and one for the holdout."""
    settings = result.settings
    yield from textwrap.wrap(
        f"Trades on the rules: in at the {settings['entry']} of the session after the trigger, out "
        "at the close "
        "of the horizon's last session"
        + (" or at the open after the event" if settings["exit"] == "event" else "")
        + f"; net of {settings['costs_bps']:g} + {settings['slippage_bps']:g} basis points each "
        f"way; returns less the mean of the other companies ({settings['benchmark']}).",
        WIDTH,
    )
    for warning in result.warnings:
        yield from textwrap.wrap(f"! {warning}", WIDTH, subsequent_indent="  ")
    yield ""
    header = ("", "trades", "mean net", "95% interval", "median", "won", "worst", "break-even",
              "in market", "p, all tried")  # fmt: skip
    rows: list[tuple[str, ...]] = []
    titles: list[str | None] = []
    for (_, name, target, stratum, direction), part in result.rules.groupby(
        ["rule", "combination", "target", "stratum", "direction"], sort=False
    ):
        where = "" if stratum == "all" else f" ({stratum})"
        for i, row in enumerate(part.to_dict("records")):
            titles.append(f"{name} -> {target}{where}, {direction}" if i == 0 else None)
            rows.append(
                (
                    row["part"],
                    f"{row['trades']:,}",
                    _percent(row["mean_net"]),
                    f"{_percent(row['low'])} to {_percent(row['high'])}"
                    + ("?" if row["too_few_clusters"] else ""),
                    _percent(row["median_net"]),
                    _percent(row["share_positive"], 0),
                    _percent(row["worst_excursion"], 0),
                    "-" if pd.isna(row["break_even_bps"]) else f"{row['break_even_bps']:.0f} bp",
                    _percent(row["time_in_market"], 0),
                    "-" if pd.isna(row["p_all_tried"]) else f"{row['p_all_tried']:.2g}",
                )
            )
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    yield _line(header, widths)
    for title, row in zip(titles, rows, strict=True):
        if title is not None:
            yield title
        yield _line(row, widths)
    yield ""
    if (result.rules["too_few_clusters"] & (result.rules["trades"] > 0)).any():
        yield "? under ten companies or spans of time: do not lean on the interval."
    counts = ", ".join(f"{n:,} in {part}" for part, n in result.n_tried.items())
    yield from textwrap.wrap(
        f"p, all tried: chance of so good a series of net returns from any of the rules tried "
        f"together ({counts}) if none earned anything.",
        WIDTH,
    )
    yield from textwrap.wrap(result.not_covered, WIDTH)
    yield from textwrap.wrap(CAUTIONS, WIDTH)


def write_trades(result: TradeTable, folder: str | Path, *, replace: bool = False) -> None:
    """Write ``trade_rules.csv``, ``trades.csv`` and ``trade_curve.csv`` into a folder.

    Raises
    ------
    OutputError : one of them is there and may not be replaced, or the folder cannot be written
    """
    folder = Path(folder)
    files = {
        "trade_rules.csv": result.rules,
        "trades.csv": result.trades,
        "trade_curve.csv": result.curve,
    }
    there = [name for name in files if (folder / name).exists()]
    if there and not replace:
        raise OutputError(
            explain(
                "output",
                str(folder / there[0]),
                "not exist yet",
                "a file that does",
                "Name another folder, or allow replacing it: --replace, in Python replace=True.",
            )
        )
    try:
        with placing.aside(folder / "trades") as aside:
            for name, table in files.items():
                table.to_csv(aside / name, index=False, float_format=FLOATS, lineterminator="\n")
            placing.put_files(aside, folder)
    except OSError as error:
        found = f"the system's error: {error.strerror or error}"
        raise OutputError(
            explain("output", str(folder), "be writable", found, "Name a folder elsewhere.")
        ) from error


def _line(row: tuple[str, ...], widths: list[int]) -> str:
    first = f"  {row[0]:<{widths[0]}}"
    rest = "".join(f"  {cell:>{w}}" for cell, w in zip(row[1:], widths[1:], strict=True))
    return (first + rest).rstrip()


def _percent(share: float, digits: int = 2) -> str:
    return "-" if pd.isna(share) else f"{100 * share:.{digits}f}%"
