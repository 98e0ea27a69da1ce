"""What surrounds triggers: events by offset with what rates expect, and lead times.

Triggers and events are int32 arrays (entity, session) sorted by entity, then session.
"""

from __future__ import annotations

import math

import numpy as np

from miner.kernels.compiling import kernel
from miner.kernels.tails import few_states

FINE_VARIANCE = 20.0  # from here on a sum of trials is smooth enough for its refined normal form


@kernel
def sessions_to_event(entity, session, event_entity, event_session):
    """Sessions from each cell to its entity's next event after it; -1 where none follows.

    int32, the shape of ``entity``.
    """
    wait = np.full(entity.size, -1, dtype=np.int32)
    v = 0
    for i in range(entity.size):
        while v < event_entity.size and (
            event_entity[v] < entity[i]
            or (event_entity[v] == entity[i] and event_session[v] <= session[i])
        ):
            v += 1
        if v < event_entity.size and event_entity[v] == entity[i]:
            wait[i] = event_session[v] - session[i]
    return wait


@kernel
def has_trigger_before(event_entity, event_session, entity, session, horizon):
    """Whether a trigger lies in ``[s - horizon, s - 1]`` of each event's session s: bool."""
    is_called = np.zeros(event_entity.size, dtype=np.bool_)
    i = 0
    for v in range(event_entity.size):
        e, s = event_entity[v], event_session[v]
        while i < entity.size and (entity[i] < e or (entity[i] == e and session[i] < s - horizon)):
            i += 1
        is_called[v] = i < entity.size and entity[i] == e and session[i] < s
    return is_called


@kernel
def spread_rates(entity, session, rate, rate_et):
    """Write ``rate[i]`` into the cell (entity[i], session[i]) of ``rate_et``, in place."""
    for i in range(entity.size):
        rate_et[entity[i], session[i]] = rate[i]


@kernel
def around(entity, session, is_event_et, rate_et, first_offset, last_offset):
    """Events and rates by offset from the triggers; cells where the rate is NaN do not count.

    Returns int64 ``n_d, events_d`` and float64 ``mean_d, variance_d, third_d`` (central moments
    of the number of events, were the cells independent with the given rates), one entry an
    offset ``first_offset .. last_offset``.
    """
    n_sessions = rate_et.shape[1]
    n_offsets = last_offset - first_offset + 1
    n_d = np.zeros(n_offsets, dtype=np.int64)
    events_d = np.zeros(n_offsets, dtype=np.int64)
    mean_d = np.zeros(n_offsets)
    variance_d = np.zeros(n_offsets)
    third_d = np.zeros(n_offsets)
    for i in range(entity.size):
        e, t = entity[i], session[i]
        for d in range(max(0, -t - first_offset), min(n_offsets, n_sessions - t - first_offset)):
            s = t + first_offset + d
            q = rate_et[e, s]
            if q == q:
                v = q * (1.0 - q)
                n_d[d] += 1
                events_d[d] += is_event_et[e, s]
                mean_d[d] += q
                variance_d[d] += v
                third_d[d] += v * (1.0 - 2.0 * q)
    return n_d, events_d, mean_d, variance_d, third_d


@kernel
def rates_from(entity, session, rate_et, first_offset, last_offset):
    """Rates of all cells at the offsets from the triggers that are no NaN: float64."""
    n_sessions = rate_et.shape[1]
    q = np.empty(entity.size * (last_offset - first_offset + 1))
    n = 0
    for i in range(entity.size):
        first = max(0, session[i] + first_offset)
        for s in range(first, min(n_sessions, session[i] + last_offset + 1)):
            if not math.isnan(rate_et[entity[i], s]):
                q[n] = rate_et[entity[i], s]
                n += 1
    return q[:n]


@kernel
def refined_normal(x, mean, variance, third):
    """P(X <= x) of a sum of independent trials by the normal law with a term for its skewness.

    Volkova (1996); Hong (2013), CSDA 59:41-51, section 2.4.
    """
    spread = math.sqrt(variance)
    z = (x + 0.5 - mean) / spread
    density = math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    skew = third / (spread * variance)
    value = 0.5 * math.erfc(-z / math.sqrt(2.0)) + skew * (1.0 - z * z) * density / 6.0
    return min(1.0, max(0.0, value))


@kernel
def least_reaching(level, mean, variance, third, n):
    """Smallest x with P(X <= x) >= level, by ``refined_normal``."""
    spread = math.sqrt(variance)
    x = max(0, int(mean - 9.0 * spread - 1.0))
    step = max(1, int(9.0 * spread))
    while step > 0:
        while x + step <= n and refined_normal(x + step - 1, mean, variance, third) < level:
            x += step
        step //= 2
    return x


@kernel
def quantiles(q, levels):
    """Smallest x with P(X <= x) >= level, for each level, rising: int64 [levels].

    X is the sum of Bernoulli(q[i]). Every probability is summed exactly.
    """
    n_sure = np.sum(q >= 1.0)
    open_q = q[(q > 0.0) & (q < 1.0)]
    mean = np.sum(open_q)
    spread = math.sqrt(np.sum(open_q * (1.0 - open_q)))
    top = min(open_q.size, int(mean + 12.0 * spread + 20.0))
    p_x, _ = few_states(open_q, top + 1)
    found = np.empty(levels.size, dtype=np.int64)
    x = 0
    total = p_x[0]
    for i in range(levels.size):
        while total < levels[i] and x < top:
            x += 1
            total += p_x[x]
        found[i] = n_sure + x
    return found


@kernel
def band(entity, session, rate_et, first_offset, n_d, mean_d, variance_d, third_d, levels):
    """Quantiles of the number of events at each offset: int64 [levels, offsets].

    ``n_d, mean_d, variance_d, third_d`` are those of ``around``. Exact where the variance is
    small, else by ``refined_normal``.
    """
    found = np.zeros((levels.size, n_d.size), dtype=np.int64)
    for d in range(n_d.size):
        if variance_d[d] >= FINE_VARIANCE:
            for i in range(levels.size):
                found[i, d] = least_reaching(
                    levels[i], mean_d[d], variance_d[d], third_d[d], n_d[d]
                )
        elif n_d[d] > 0:
            offset = first_offset + d
            found[:, d] = quantiles(rates_from(entity, session, rate_et, offset, offset), levels)
    return found


@kernel
def first_ages(alert_ekw, entity, session, combo_k, lookback):
    """Sessions from each type's first alert in the look-back to the trigger: int64 [g, types].

    -1 where a type has no alert there.
    """
    age_gk = np.full((entity.size, combo_k.size), -1, dtype=np.int64)
    for g in range(entity.size):
        e, t = entity[g], session[g]
        for i in range(combo_k.size):
            for s in range(max(0, t - lookback + 1), t + 1):
                word = alert_ekw[e, combo_k[i], s >> 6]
                if (word >> np.uint64(s & 63)) & np.uint64(1):
                    age_gk[g, i] = t - s
                    break
    return age_gk
