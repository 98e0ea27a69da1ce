"""Event windows: which sessions an event follows, and which alert types came before it."""

from __future__ import annotations

import numpy as np

from miner.kernels.bits import ONE, any_in_range, popcount
from miner.kernels.compiling import kernel


@kernel
def mark_windows(event_entity, event_session, n_entities, n_sessions, horizon):
    """uint64 [entities, words], bit t: an event of the entity lies in ``[t + 1, t + horizon]``."""
    window_ew = np.zeros((n_entities, (n_sessions + 63) // 64), dtype=np.uint64)
    for v in range(event_entity.size):
        s = event_session[v]
        for t in range(max(0, s - horizon), s):
            window_ew[event_entity[v], t >> 6] |= ONE << np.uint64(t & 63)
    return window_ew


@kernel
def types_before(event_entity, event_session, alert_ekw, reach):
    """Boolean [events, types]: the type alerted in the ``reach`` sessions before the event."""
    n_types = alert_ekw.shape[1]
    is_seen_vk = np.zeros((event_entity.size, n_types), dtype=np.bool_)
    for v in range(event_entity.size):
        s = event_session[v]
        for k in range(n_types):
            is_seen_vk[v, k] = any_in_range(alert_ekw[event_entity[v], k], max(0, s - reach), s)
    return is_seen_vk


@kernel
def slots(is_open_et, group_et, horizon):
    """Peer group under which an event on each session would be felt, -1 where it would not.

    Session s of an entity is in reach when some open cell lies in ``[s - horizon, s - 1]``; the
    latest such cell gives the group. Returns int16 [entities, sessions].
    """
    n_entities, n_sessions = is_open_et.shape
    slot_et = np.full((n_entities, n_sessions), -1, dtype=np.int16)
    for e in range(n_entities):
        latest = -(1 << 30)
        for s in range(1, n_sessions):
            if is_open_et[e, s - 1]:
                latest = s - 1
            if s - latest <= horizon:
                slot_et[e, s] = group_et[e, latest]
    return slot_et


@kernel
def spaced(rank_et, below, rest):
    """Cells with a rank under ``below``, each at least ``rest`` sessions after the last one taken
    on its entity. Returns int64 entity, session."""
    n = 0
    for ranks_t in rank_et:
        last = -(1 << 30)
        for t in range(ranks_t.size):
            if ranks_t[t] < below and t - last >= rest:
                last = t
                n += 1
    entity = np.empty(n, dtype=np.int64)
    session = np.empty(n, dtype=np.int64)
    n = 0
    for e in range(rank_et.shape[0]):
        last = -(1 << 30)
        for t in range(rank_et.shape[1]):
            if rank_et[e, t] < below and t - last >= rest:
                last = t
                entity[n], session[n] = e, t
                n += 1
    return entity, session


@kernel
def count_together(seen_kw, combo_ck):
    """Windows in which every type of a combination is seen: int64 [combinations].

    ``seen_kw`` uint64 [types, words], one bit a window; ``combo_ck`` int64, padded with -1.
    """
    n_combos, size = combo_ck.shape
    count_c = np.zeros(n_combos, dtype=np.int64)
    for c in range(n_combos):
        for w in range(seen_kw.shape[1]):
            word = seen_kw[combo_ck[c, 0], w]
            for d in range(1, size):
                if combo_ck[c, d] >= 0:
                    word &= seen_kw[combo_ck[c, d], w]
            count_c[c] += np.int64(popcount(word))
    return count_c
