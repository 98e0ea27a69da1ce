"""Exchanges of sessions between events of one peer group, and hits in many draws at once."""

from __future__ import annotations

import numpy as np

from miner.kernels.bits import ONE
from miner.kernels.compiling import kernel


@kernel
def has_event(busy_ew, e, t):
    """Whether bit ``t`` of an entity's row is set."""
    return (busy_ew[e, t >> 6] >> np.uint64(t & 63)) & ONE != 0


@kernel
def flip_event(busy_ew, e, t):
    """Turn bit ``t`` of an entity's row, in place."""
    busy_ew[e, t >> 6] ^= ONE << np.uint64(t & 63)


@kernel
def exchange(
    session_v, entity_v, pool_v, pool_start, pool_member, slot_et, random_nv, n_keep
):
    """Run sweeps of exchanges and keep the last ``n_keep`` states.

    Parameters
    ----------
    session_v, entity_v : int32 [events], the events, sorted by entity; ``session_v`` is not changed
    pool_v : int32 [events], the pool of each event; ``pool_start`` int64 [pools + 1] and
        ``pool_member`` int32 list each pool's events. A pool is one slot group, in pool order
    slot_et : int16 [entities, sessions], slot group, -1 out of reach
    random_nv : uint32 [sweeps, events], pre-drawn

    Each event in turn proposes to exchange sessions with a partner uniform in its pool; it is done
    when both stay in reach under the same slot group and no entity gets two events on a session.
    The proposal is symmetric, so the uniform law over reachable worlds is stationary.

    Returns int32 [n_keep, events]: sessions after each of the last sweeps.
    """
    n_sweeps, n_events = random_nv.shape
    now_v = session_v.copy()
    # an entity that is in the same group on every session in reach needs no look at its slots
    n_entities, n_sessions = slot_et.shape
    first_t = n_sessions
    last_t = -1
    for v in range(n_events):
        first_t = min(first_t, session_v[v])
        last_t = max(last_t, session_v[v])
    busy_ew = np.zeros((n_entities, (n_sessions + 63) // 64), dtype=np.uint64)
    for v in range(n_events):
        flip_event(busy_ew, entity_v[v], session_v[v])
    is_even_e = np.zeros(n_entities, dtype=np.bool_)
    for v in range(n_events):
        e = entity_v[v]
        if v == 0 or entity_v[v - 1] != e:
            is_even_e[e] = True
            for t in range(first_t, last_t + 1):
                if slot_et[e, t] != slot_et[e, session_v[v]]:
                    is_even_e[e] = False
                    break
    kept = np.empty((n_keep, n_events), dtype=np.int32)
    for n in range(n_sweeps):
        for i in range(n_events):
            pool = pool_v[i]
            start = pool_start[pool]
            size = np.uint64(pool_start[pool + 1] - start)
            j = pool_member[start + np.int64((np.uint64(random_nv[n, i]) * size) >> np.uint64(32))]
            a, b = entity_v[i], entity_v[j]
            s, u = now_v[i], now_v[j]
            if a == b or s == u:
                continue
            if not is_even_e[a] and slot_et[a, u] != slot_et[a, s]:
                continue
            if not is_even_e[b] and slot_et[b, s] != slot_et[b, u]:
                continue
            if has_event(busy_ew, a, u) or has_event(busy_ew, b, s):
                continue
            flip_event(busy_ew, a, s)
            flip_event(busy_ew, a, u)
            flip_event(busy_ew, b, u)
            flip_event(busy_ew, b, s)
            now_v[i] = u
            now_v[j] = s
        if n >= n_sweeps - n_keep:
            kept[n - (n_sweeps - n_keep)] = now_v
    return kept


@kernel
def add3(a, b, c):
    """Sum and carry of three bits, 64 at a time."""
    half = a ^ b
    return half ^ c, (a & b) | (half & c)


@kernel
def carry_into(plane_p, p, word):
    """Add a word to bit-sliced counters from plane ``p`` on, in place."""
    while word:
        plane = plane_p[p]
        plane_p[p] = plane ^ word
        word &= plane
        p += 1


@kernel
def count_hits(session_rv, first_event_e, offset_c, entity, session, horizon, n_sessions, n_planes):
    """Hits of every combination in up to 64 draws at once.

    One word a cell holds, bit by bit, in which draws the cell is in an event window; adding words
    to bit-sliced counters (plane p holds bit p of 64 counts) adds 64 trials in a few operations.

    Parameters
    ----------
    session_rv : int32 [draws <= 64, events], events sorted by entity (``first_event_e``)
    offset_c, entity, session : combination-major triggers, sorted by entity
    n_planes : int, at least the bits of the largest trigger count, and 3

    Returns int32 [draws, combinations].
    """
    n_draws = session_rv.shape[0]
    n_combos = offset_c.size - 1
    n_entities = first_event_e.size - 1
    plane_cp = np.zeros((n_combos, n_planes), dtype=np.uint64)
    next_c = offset_c[:-1].copy()
    n_block = max(1, min(n_entities, 40_000 // n_sessions))  # windows of a block stay in cache
    word_et = np.zeros((n_block, n_sessions), dtype=np.uint64)
    for first in range(0, n_entities, n_block):
        last = min(n_entities, first + n_block)
        if first_event_e[last] == first_event_e[first]:
            for c in range(n_combos):
                while next_c[c] < offset_c[c + 1] and entity[next_c[c]] < last:
                    next_c[c] += 1
            continue
        word_et[:] = np.uint64(0)
        for r in range(n_draws):
            bit = ONE << np.uint64(r)
            for e in range(first, last):
                for v in range(first_event_e[e], first_event_e[e + 1]):
                    s = session_rv[r, v]
                    for t in range(max(0, s - horizon), s):
                        word_et[e - first, t] |= bit
        for c in range(n_combos):
            j = next_c[c]
            stop = j
            while stop < offset_c[c + 1] and entity[stop] < last:
                stop += 1
            while stop - j >= 7:
                # seven words to three by full adders, without a branch
                a0, a1 = add3(
                    word_et[entity[j] - first, session[j]],
                    word_et[entity[j + 1] - first, session[j + 1]],
                    word_et[entity[j + 2] - first, session[j + 2]],
                )
                b0, b1 = add3(
                    word_et[entity[j + 3] - first, session[j + 3]],
                    word_et[entity[j + 4] - first, session[j + 4]],
                    word_et[entity[j + 5] - first, session[j + 5]],
                )
                c0, c1 = add3(a0, b0, word_et[entity[j + 6] - first, session[j + 6]])
                d1, d2 = add3(a1, b1, c1)
                carry_into(plane_cp[c], 0, c0)
                carry_into(plane_cp[c], 1, d1)
                carry_into(plane_cp[c], 2, d2)
                j += 7
            while j < stop:
                carry_into(plane_cp[c], 0, word_et[entity[j] - first, session[j]])
                j += 1
            next_c[c] = j
    hits_rc = np.zeros((n_draws, n_combos), dtype=np.int32)
    for c in range(n_combos):
        for p in range(n_planes):
            word = plane_cp[c, p]
            if word:
                for r in range(n_draws):
                    hits_rc[r, c] += np.int32((word >> np.uint64(r)) & ONE) << p
    return hits_rc
