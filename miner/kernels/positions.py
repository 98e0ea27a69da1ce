"""Positions held over sessions: what each earned day by day, and how far it went wrong."""

from __future__ import annotations

import numpy as np

from miner.kernels.compiling import kernel


@kernel
def last_with_close(has_close_et, entity, first_t, last_t):
    """Latest session in ``[first_t[i], last_t[i]]`` on which the entity has a close; -1 if none."""
    out = np.full(entity.size, -1, dtype=np.int64)
    for i in range(entity.size):
        t = last_t[i]
        while t >= first_t[i]:
            if has_close_et[entity[i], t]:
                out[i] = t
                break
            t -= 1
    return out


@kernel
def hold(
    entity, entry_t, exit_t, is_open_entry, is_open_exit, sign, cost,
    intraday_et, daily_et, overnight_et, first_t, sum_t, open_t,
):  # fmt: skip
    """What positions earned, each and all together by session.

    Parameters
    ----------
    entity, entry_t, exit_t : int64 [positions]
    is_open_entry, is_open_exit : bool [positions], entered or left at the open, else at the close
    sign : int, 1 long, -1 short
    cost : float, of entering and of leaving, as a share of the position
    intraday_et, daily_et, overnight_et : float64 [entities, sessions], abnormal returns from open
        to close, from close to close, from close to open
    first_t : int, session of the first element of the two outputs
    sum_t : float64, added to in place: net abnormal returns of the open positions, by session
    open_t : int64, added to in place: positions open on the session

    Returns
    -------
    float64 [positions], each position's abnormal return before costs
    """
    gross = np.zeros(entity.size)
    for i in range(entity.size):
        e = entity[i]
        for t in range(entry_t[i], exit_t[i] + 1):
            if t == entry_t[i]:
                earned = intraday_et[e, t] if is_open_entry[i] else 0.0
            elif t == exit_t[i] and is_open_exit[i]:
                earned = overnight_et[e, t]
            else:
                earned = daily_et[e, t]
            earned *= sign
            gross[i] += earned
            if t == entry_t[i]:
                earned -= cost
            if t == exit_t[i]:
                earned -= cost
            sum_t[t - first_t] += earned
            open_t[t - first_t] += 1
    return gross


@kernel
def worst(
    entity, entry_t, exit_t, is_open_entry, is_open_exit, sign, entry_price, worst_et, open_et
):
    """Largest loss at any price seen while a position was open, as a share of its entry price.

    ``worst_et`` holds the lows for long positions, the highs for short ones (closes where a bar
    has none), ``open_et`` the opens. float64 [positions], 0 or below.
    """
    out = np.zeros(entity.size)
    for i in range(entity.size):
        first = entry_t[i] if is_open_entry[i] else entry_t[i] + 1
        for t in range(first, exit_t[i] + 1):
            at_open = t == exit_t[i] and is_open_exit[i]
            price = open_et[entity[i], t] if at_open else worst_et[entity[i], t]
            if np.isnan(price):
                continue
            change = sign * (price / entry_price[i] - 1.0)
            if change < out[i]:
                out[i] = change
    return out
