"""From a rule's triggers to positions: when each is entered and left, and what it earned.

Entered at the open of the session after the trigger (at its close without an open), left at the
close of the horizon's last session, or, if asked for, at the open of the session after the event
where that is sooner. A position whose exit session has no close is left at the last close before.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from miner.kernels import positions as kernels
from miner.kernels import profiles
from miner.prices import Prices
from miner.rule_cases import RuleCase
from miner.settings import PriceSettings
from miner.trades.abnormal import AbnormalReturns

LONG, SHORT = 1, -1
BASIS_POINT = 1e-4


@dataclass(frozen=True)
class Positions:
    """A rule's trades in one part of the calendar.

    Attributes
    ----------
    trades : one row a trade: ``entity``, ``trigger``, ``entry``, ``exit`` (int), ``entry_price``,
        ``exit_price``, ``is_hit``, ``is_stale`` (left before its time for want of a price),
        ``gross`` and ``net`` (abnormal returns, before and after costs), ``raw`` (the position's
        own return before costs), ``worst`` (excursion), ``turnover_share``
    net_t, open_t : float64, int64 [sessions of the part]: mean net abnormal return of the open
        positions (0 without any), and how many there are
    n_triggers, n_unpriced : triggers, and those without a price on the session after
    """

    trades: pd.DataFrame
    net_t: np.ndarray
    open_t: np.ndarray
    n_triggers: int
    n_unpriced: int


def take_positions(
    case: RuleCase,
    prices: Prices,
    abnormal: AbnormalReturns,
    settings: PriceSettings,
    sign: int,
) -> Positions:
    """Trade every trigger of a rule that counts on its segment.

    Parameters
    ----------
    sign : 1 to buy, -1 to sell short
    """
    segment, horizon = case.case.unit.segment, case.case.unit.horizon
    entity, trigger = (part.astype(np.int64) for part in case.triggers)
    has_close_et = prices.series_et >= 0
    entry = trigger + 1
    is_priced = has_close_et[entity, entry]
    is_hit = case.is_hit[is_priced]
    entity, trigger, entry = entity[is_priced], trigger[is_priced], entry[is_priced]
    open_et = prices.open_et
    if open_et is None:
        open_et = np.full(has_close_et.shape, np.nan)
    is_open_entry = ~np.isnan(open_et[entity, entry])
    planned = trigger + horizon
    is_open_exit = np.zeros(entity.size, dtype=bool)
    if settings.exit == "event":
        wait = profiles.sessions_to_event(
            entity.astype(np.int32), trigger.astype(np.int32), *case.case.events
        )
        after = trigger + wait + 1
        is_sooner = (wait > 0) & (after <= planned)
        planned = np.where(is_sooner, after, planned)
        is_open_exit = is_sooner & ~np.isnan(open_et[entity, planned])
    leave = kernels.last_with_close(has_close_et, entity, entry, planned)
    is_stale = leave < planned
    is_open_exit &= ~is_stale
    entry_price = np.where(is_open_entry, open_et[entity, entry], prices.close_et[entity, entry])
    exit_price = np.where(is_open_exit, open_et[entity, leave], prices.close_et[entity, leave])
    length = segment.last - segment.first + 1
    sum_t, open_t = np.zeros(length), np.zeros(length, dtype=np.int64)
    side = (settings.costs_bps + settings.slippage_bps) * BASIS_POINT
    where = entity, entry, leave, is_open_entry, is_open_exit
    gross = kernels.hold(
        *where, sign, side,
        abnormal.intraday_et, abnormal.daily_et, abnormal.overnight_et,
        segment.first, sum_t, open_t,
    )  # fmt: skip
    extreme_et = prices.low_et if sign > 0 else prices.high_et
    worst_et = prices.close_et if extreme_et is None else np.where(
        np.isnan(extreme_et), prices.close_et, extreme_et
    )  # fmt: skip
    trades = pd.DataFrame(
        {
            "entity": entity,
            "trigger": trigger,
            "entry": entry,
            "exit": leave,
            "entry_price": entry_price,
            "exit_price": exit_price,
            "is_hit": is_hit,
            "is_stale": is_stale,
            "gross": gross,
            "net": gross - 2 * side,
            "raw": sign * (exit_price / entry_price - 1),
            "worst": kernels.worst(*where, sign, entry_price, worst_et, open_et),
            "turnover_share": _turnover_share(prices, settings, entity, entry),
        }
    )
    net_t = np.divide(sum_t, open_t, out=np.zeros(length), where=open_t > 0)
    return Positions(trades, net_t, open_t, is_priced.size, int((~is_priced).sum()))


def _turnover_share(
    prices: Prices, settings: PriceSettings, entity: np.ndarray, entry: np.ndarray
) -> np.ndarray:
    """The position as a share of the money that changed hands on its entry session."""
    if prices.volume_et is None:
        return np.full(entity.size, np.nan)
    turnover = prices.volume_et[entity, entry] * prices.close_et[entity, entry]
    return np.divide(
        settings.position, turnover, out=np.full(entity.size, np.nan), where=turnover > 0
    )
