"""How often events happen around triggers, session by session, beside what the margins expect.

The null of a profile holds, on average, how many events each entity has and how many each peer
group has on each session (the totals that exchanges hold exactly): logit r(e, s) = a(e) +
b(group, s), fitted to the events themselves over the sessions on which an event could make a
trigger a hit (or the run's other law of the margins null, which is the same where events are
rare). The band at an offset k holds the middle 95 % of the number of events on the
sessions t + k of all triggers (e, t), were each an independent draw with chance r(e, t + k). It
holds offset by offset, not for the curve as a whole: of 41 offsets two stray on average.

The convention is that of event-time averages: Brown & Warner (1985), JFE 14:3-31, for returns
around announcements; Perkel, Gerstein & Moore (1967), Biophys. J. 7:391-418, for spikes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.kernels import profiles as kernels
from miner.kernels import tails
from miner.nulls.margins import fit_margins
from miner.panel import Labels
from miner.units import Case

REACH = 20
LEVELS = np.array([0.025, 0.975])


@dataclass(frozen=True)
class EventRates:
    """Events of a case as cells, and their rates under the null.

    Attributes
    ----------
    is_event_et : bool [entities, sessions]
    rate_et : float64 [entities, sessions], NaN where no event could make a trigger a hit
    """

    is_event_et: np.ndarray
    rate_et: np.ndarray


@dataclass(frozen=True)
class Profile:
    """Events around triggers; arrays over the offsets ``-REACH .. REACH``.

    Attributes
    ----------
    n : int64, triggers whose session at the offset can be looked at
    events : int64, of those, with an event on that session
    expected, low, high : under the null, the mean and the middle 95 %
    before, after : events on the ``horizon`` sessions before and after, as (seen, expected,
        chance of as many or more)
    """

    n: np.ndarray
    events: np.ndarray
    expected: np.ndarray
    low: np.ndarray
    high: np.ndarray
    before: tuple[int, float, float]
    after: tuple[int, float, float]


def event_rates(case: Case, n_workers: int = 1) -> EventRates:
    """Fit the null of a case's events, cell by cell."""
    slot_et = case.unit.slot_et
    is_event_et = np.zeros(slot_et.shape, dtype=bool)
    is_event_et[case.events] = True
    is_open_et = slot_et >= 0
    peers = Labels(case.unit.segment.panel.peers.names, np.maximum(slot_et, 0))
    law = case.unit.segment.panel.law
    margins = fit_margins(is_open_et, is_event_et, peers, n_workers=n_workers, law=law)
    entity, session = (axis.astype(np.int32) for axis in np.nonzero(is_open_et))
    rate_et = np.full(slot_et.shape, np.nan)
    kernels.spread_rates(entity, session, margins.rates(entity, session), rate_et)
    return EventRates(is_event_et, rate_et)


def profile(rates: EventRates, entity: np.ndarray, session: np.ndarray, horizon: int) -> Profile:
    """The profile of triggers (``entity``, ``session``: int32, one a trigger)."""
    n, events, mean, variance, third = kernels.around(
        entity, session, rates.is_event_et, rates.rate_et, -REACH, REACH
    )
    low, high = kernels.band(
        entity, session, rates.rate_et, -REACH, n, mean, variance, third, LEVELS
    )

    def total(first: int, last: int) -> tuple[int, float, float]:
        part = slice(REACH + first, REACH + last + 1)
        seen, expected = int(events[part].sum()), float(mean[part].sum())
        spread = float(variance[part].sum())
        if seen == 0:
            chance = 1.0
        elif spread >= kernels.FINE_VARIANCE:
            below = kernels.refined_normal(seen - 1, expected, spread, float(third[part].sum()))
            chance = max(0.0, 1.0 - below)
        else:
            q = kernels.rates_from(entity, session, rates.rate_et, first, last)
            chance = float(tails.upper_tail(q, seen))
        return seen, expected, chance

    reach = min(horizon, REACH)
    return Profile(n, events, mean, low, high, total(-reach, -1), total(1, reach))


def timing(found: Profile, level: float) -> str:
    """Whether triggers come before events, after them, both, or neither, more than by chance.

    ``level`` is for one side of one profile: divide by twice the number of profiles looked at.
    """
    leads, lags = found.after[2] <= level, found.before[2] <= level
    return "both" if leads and lags else "precedes" if leads else "follows" if lags else "neither"
