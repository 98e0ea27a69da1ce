"""Hands on the demo's daily bars: random walks with a market and sectors, and jumps at events.

An approach lifts the company's price on its session, a withdrawal lowers it; a price jolt goes with
a large move of either sign, a volume swell with more turnover. Nothing else in the alerts is in the
prices, so a rule can earn what the events it precedes bring, and no more.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet

from miner.demo.cast import ALERT_KINDS, SECTORS
from miner.demo.market import Market
from miner.demo.world_parts import FloatArray, IntArray

_MARKET_SD, _SECTOR_SD, _OWN_SD = 0.008, 0.006, 0.014
_JOLT_SD = 0.025
_JUMP, _JUMP_SD = (0.09, -0.06), 0.04  # log jumps of an approach and of a withdrawal
_OVERNIGHT_SHARE = 0.3  # of a session's move, and of events that come before the open


def write_prices(rng: np.random.Generator, market: Market, folder: Path) -> None:
    """Write ``prices.parquet``: a bar for every session of every listed company."""
    bars = _bars(rng, market)
    session = np.arange(market.day.size)
    start, stop = (x[:, None] for x in (market.companies.start, market.companies.stop))
    entity, at = np.nonzero((session >= start) & (session < stop))
    columns = {name: pa.array(np.round(bar_et[entity, at], 2)) for name, bar_et in bars.items()}
    table = pa.table(
        {
            "entity": pa.DictionaryArray.from_arrays(
                pa.array(entity.astype(np.int32)), pa.array(market.companies.names, pa.string())
            ),
            "date": pa.array(market.day[at]),
            **columns,
        }
    )
    pa.parquet.write_table(table, folder / "prices.parquet", compression="zstd")


def _bars(rng: np.random.Generator, market: Market) -> dict[str, FloatArray]:
    """Open, high, low, close and volume: float64 [companies, sessions]."""
    shape = market.companies.names.size, market.day.size
    common = (
        rng.normal(0, _MARKET_SD, shape[1])
        + rng.normal(0, _SECTOR_SD, (len(SECTORS), shape[1]))[market.companies.sector]
    )
    own = rng.normal(0, _OWN_SD, shape)
    number = {kind.name: k for k, kind in enumerate(ALERT_KINDS)}
    jolt = _cells(market, number["price jolt"])
    own[jolt] += rng.normal(0, _JOLT_SD, jolt[0].size)
    move = common + own
    overnight = _OVERNIGHT_SHARE * move
    for kind, jump in enumerate(_JUMP):
        mine = market.event_kind == kind
        cell = market.event_entity[mine], market.event_session[mine]
        size = rng.normal(jump, _JUMP_SD, cell[0].size)
        is_early = rng.random(size.size) < _OVERNIGHT_SHARE
        np.add.at(move, cell, size)
        np.add.at(overnight, cell, np.where(is_early, size, 0.0))
    first = rng.lognormal(np.log(40), 0.6, shape[0])
    close = first[:, None] * np.exp(np.cumsum(move, axis=1))
    before = np.concatenate([first[:, None], close[:, :-1]], axis=1)
    opening = before * np.exp(overnight)
    reach = np.abs(rng.normal(0, 0.5 * _OWN_SD, (2, *shape)))
    # a price of a cent moves in steps of itself: none falls below a unit
    scale = np.maximum(1.0, 1.0 / close.min(axis=1))[:, None]
    volume = rng.lognormal(12, 0.5, shape)
    swell = _cells(market, number["volume swell"])
    volume[swell] *= 2.5
    high = np.maximum(opening, close) * np.exp(reach[0])
    low = np.minimum(opening, close) * np.exp(-reach[1])
    bars = {"open": opening, "high": high, "low": low, "close": close}
    return {name: bar * scale for name, bar in bars.items()} | {"volume": np.round(volume)}


def _cells(market: Market, kind: int) -> tuple[IntArray, IntArray]:
    mine = market.alert_kind == kind
    n_sessions = market.day.size
    cell = np.unique(market.alert_entity[mine] * n_sessions + market.alert_session[mine])
    return cell // n_sessions, cell % n_sessions
