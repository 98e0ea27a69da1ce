"""Major price moves as events: where each starts, when that was known, and what it looks like.

A move runs from one extreme of the closes to the next and ends when the counter-move exceeds
``epsilon`` times the trailing volatility (epsilon-drawdowns and -drawups: Johansen & Sornette;
Johansen 2002, cond-mat/0210574; Filimonov & Sornette 2015, arXiv 1407.5037). It is major when its
size is at least ``threshold`` times the volatility times the square root of its length in sessions.
The volatility is that of the log returns before the move.

A move up starts where a move down ended: at a low, by definition. Alerts drawn from the same prices
(falls, new lows) therefore come before it more often than at other times, in a random walk as in
any series (70 % more often for a 60-session low), and trades on it earn nothing. Close-to-close
moves have little of that; alerts that know nothing of the prices are not concerned.

The event is the move's start. That it is one is known only when the move has ended, so it is a
label and never a trigger, and a part of the calendar may only be told of moves that ended in it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from miner.kernels import moves as kernels
from miner.prices import Prices
from miner.settings import PriceSettings, Study

MOVE_UP, MOVE_DOWN = "move up", "move down"
MOVE_TARGETS = (MOVE_DOWN, MOVE_UP)


@dataclass(frozen=True)
class Moves:
    """Major moves, sorted by entity, then start: arrays of one length.

    Attributes
    ----------
    entity, start, end, known : int32; ``start`` is the session of the first return, ``end`` that of
        the last, ``known`` the one on whose close the move was seen to be over
    size : float64, log return from extreme to extreme, negative for moves down
    volatility : float64, of daily log returns before the move
    n_all : moves of any size that started and ended in the prices
    n_unfinished : moves of major size that the prices end in: no events
    """

    entity: np.ndarray
    start: np.ndarray
    end: np.ndarray
    known: np.ndarray
    size: np.ndarray
    volatility: np.ndarray
    n_all: int
    n_unfinished: int

    @property
    def length(self) -> np.ndarray:
        """Sessions from the first return to the last, both included."""
        return self.end - self.start + 1

    def of(self, target: str) -> np.ndarray:
        """Bool [moves]: those in the direction of "move up" or "move down"."""
        return self.size > 0 if target == MOVE_UP else self.size < 0


def wanted_moves(study: Study) -> tuple[str, ...]:
    """The move targets a study hunts for: both with [prices] and no targets named, none with
    ``moves = "off"``."""
    if study.prices is None or study.prices.moves == "off":
        return ()
    named = study.events.targets
    return MOVE_TARGETS if named is None else tuple(t for t in MOVE_TARGETS if t in named)


def find_moves(prices: Prices, settings: PriceSettings) -> Moves:
    """Find the major moves of every entity, by the definition the settings name.

    With ``moves = "extremes"`` the first move of a series is left out (its start is the table's,
    not an extreme) and the last is unfinished. With ``"close-to-close"`` a move is one return of at
    least ``threshold`` volatilities, known at once. Closes are compared with the last one before,
    also over sessions without a price.
    """
    parts: list[tuple[np.ndarray, ...]] = []
    n_all = n_unfinished = 0
    for e in range(prices.close_et.shape[0]):
        session = np.flatnonzero(prices.series_et[e] >= 0)
        cuts = np.flatnonzero(np.diff(prices.series_et[e, session])) + 1
        for at in np.split(session, cuts):
            if at.size <= settings.volatility_sessions:
                continue
            found = _of_series(at, np.log(prices.close_et[e, at]), settings)
            n_all, n_unfinished = n_all + found[5], n_unfinished + found[6]
            parts.append((np.full(found[0].size, e), *found[:5]))
    if not parts:
        parts.append((np.empty(0),) * 6)
    columns = [np.concatenate(column) for column in zip(*parts, strict=True)]
    entity, start, end, known = (column.astype(np.int32) for column in columns[:4])
    return Moves(entity, start, end, known, columns[4], columns[5], n_all, n_unfinished)


def _of_series(
    session: np.ndarray, log_close: np.ndarray, settings: PriceSettings
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray, int, int]:
    """Start, end, known, size and volatility of one series' major moves; all; unfinished."""
    returns = np.diff(log_close)
    at = session[1:]
    volatility = kernels.trailing_volatility(returns, settings.volatility_sessions)
    if settings.moves == "close-to-close":
        is_tried = volatility > 0
        limit = settings.threshold * np.where(is_tried, volatility, np.inf)
        big = np.flatnonzero(np.abs(returns) >= limit)
        n_tried = int(is_tried.sum())
        return at[big], at[big], at[big], returns[big], volatility[big], n_tried, 0
    # a series that stood still has no scale to measure a move by
    start, stop, known, size = kernels.moves(returns, settings.epsilon * volatility)
    before = volatility[start]
    is_inner = np.arange(start.size) > 0
    is_over = known >= 0
    length = at[stop - 1] - at[start] + 1
    is_major = (
        is_inner & (before > 0) & (np.abs(size) >= settings.threshold * before * np.sqrt(length))
    )
    mine = is_major & is_over
    return (
        at[start[mine]],
        at[stop[mine] - 1],
        at[known[mine]],
        size[mine],
        before[mine],
        int((is_inner & is_over).sum()),
        int((is_major & ~is_over).sum()),
    )


def move_events(
    moves: Moves,
) -> tuple[dict[str, tuple[np.ndarray, np.ndarray]], dict[str, np.ndarray]]:
    """The moves as events per target, and the session each is known at.

    Events are int32 (entity, session), sorted and distinct, as a panel holds them; the second
    dictionary has one int32 [events] a target. What is cut off before a session ``stop`` may only
    keep the events with ``known < stop``.
    """
    events, known = {}, {}
    for target in MOVE_TARGETS:
        mine = moves.of(target)
        events[target] = moves.entity[mine], moves.start[mine]
        known[target] = moves.known[mine]
    return events, known


def moves_table(moves: Moves, entity_names: Sequence[str], dates: np.ndarray) -> pd.DataFrame:
    """The moves, one a row: entity, direction, start, end, known (dates), sessions, size (as a
    simple return), and how many volatilities times the square root of the length that is."""
    return pd.DataFrame(
        {
            "entity": [entity_names[e] for e in moves.entity],
            "target": np.where(moves.size > 0, MOVE_UP, MOVE_DOWN),
            "start": np.datetime_as_string(dates[moves.start]),
            "end": np.datetime_as_string(dates[moves.end]),
            "known": np.datetime_as_string(dates[moves.known]),
            "sessions": moves.length,
            "size": np.expm1(moves.size),
            "scaled_size": np.abs(moves.size) / (moves.volatility * np.sqrt(moves.length)),
        }
    )


def moves_summary(moves: Moves) -> dict[str, dict[str, float | int | None]]:
    """Per target: events, share of one-session moves, median length in sessions, median size."""
    summary: dict[str, dict[str, float | int | None]] = {}
    for target in MOVE_TARGETS:
        mine = moves.of(target)
        n = int(mine.sum())
        summary[target] = {
            "events": n,
            "share_of_one_session": float((moves.length[mine] == 1).mean()) if n else None,
            "median_sessions": float(np.median(moves.length[mine])) if n else None,
            "median_size": float(np.expm1(np.median(moves.size[mine]))) if n else None,
        }
    return summary
