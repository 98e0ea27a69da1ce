"""Exchanges of sessions between events of one peer group, and hits in many draws at once."""

from __future__ import annotations

import numpy as np

from miner.kernels.bits import ONE
from miner.kernels.compiling import kernel

LANES = 8  # words of draws side by side: the widest vector register
CELLS_A_BLOCK = 100_000  # cells whose words are kept at hand


@kernel
def carry_into(plane_pl, p, w, word):
    """Add a word to lane ``w`` of bit-sliced counters from plane ``p`` on, in place."""
    while word:
        plane = plane_pl[p, w]
        plane_pl[p, w] = plane ^ word
        word &= plane
        p += 1


@kernel
def has_event(busy_ew, e, t):
    """Whether bit ``t`` of an entity's row is set."""
    return (busy_ew[e, t >> 6] >> np.uint64(t & 63)) & ONE != 0


@kernel
def flip_event(busy_ew, e, t):
    """Turn bit ``t`` of an entity's row, in place."""
    busy_ew[e, t >> 6] ^= ONE << np.uint64(t & 63)


@kernel
def exchange(session_v, entity_v, pool_v, pool_start, pool_member, slot_et, random_nv, n_keep):
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
def count_hits(session_rv, first_event_e, offset_c, entity, session, horizon, n_sessions, n_planes):
    """Hits of every combination in up to 512 draws at once.

    Eight words a cell hold, bit by bit, in which draws the cell is in an event window. Adding
    words to bit-sliced counters (plane p holds bit p of every count) adds 512 trials in a few
    operations; seven cells at a time (an empty one in place of what is missing) go through full
    adders without a branch (the carry-save adder tree of Harley and Seal, as in Warren, "Hacker's
    Delight", sec. 5-1).

    Parameters
    ----------
    session_rv : int32 [draws <= 512, events], events sorted by entity (``first_event_e``)
    offset_c, entity, session : combination-major triggers, sorted by entity
    n_planes : int, at least the bits of the largest trigger count, and 4

    Returns int32 [combinations, draws].
    """
    n_draws = session_rv.shape[0]
    n_combos = offset_c.size - 1
    n_entities = first_event_e.size - 1
    plane_cpl = np.zeros((n_combos, n_planes, LANES), dtype=np.uint64)
    next_c = offset_c[:-1].copy()
    n_block = max(1, min(n_entities, CELLS_A_BLOCK // n_sessions))
    nothing = n_block * n_sessions
    word_il = np.zeros((nothing + 1, LANES), dtype=np.uint64)
    word_k = np.zeros(LANES, dtype=np.uint64)
    for first in range(0, n_entities, n_block):
        last = min(n_entities, first + n_block)
        has_events = first_event_e[last] > first_event_e[first]
        if has_events:
            word_il[:] = np.uint64(0)
            for e in range(first, last):
                base = (e - first) * n_sessions
                for r in range(n_draws):
                    bit = ONE << np.uint64(r & 63)
                    for v in range(first_event_e[e], first_event_e[e + 1]):
                        s = session_rv[r, v]
                        for t in range(max(0, s - horizon), s):
                            word_il[base + t, r >> 6] |= bit
        for c in range(n_combos):
            j = next_c[c]
            stop = j
            while stop < offset_c[c + 1] and entity[stop] < last:
                stop += 1
            next_c[c] = stop
            if not has_events:
                continue
            while j < stop:
                i0 = (entity[j] - first) * n_sessions + session[j]
                i1 = nothing
                if j + 1 < stop:
                    i1 = (entity[j + 1] - first) * n_sessions + session[j + 1]
                i2 = nothing
                if j + 2 < stop:
                    i2 = (entity[j + 2] - first) * n_sessions + session[j + 2]
                i3 = nothing
                if j + 3 < stop:
                    i3 = (entity[j + 3] - first) * n_sessions + session[j + 3]
                i4 = nothing
                if j + 4 < stop:
                    i4 = (entity[j + 4] - first) * n_sessions + session[j + 4]
                i5 = nothing
                if j + 5 < stop:
                    i5 = (entity[j + 5] - first) * n_sessions + session[j + 5]
                i6 = nothing
                if j + 6 < stop:
                    i6 = (entity[j + 6] - first) * n_sessions + session[j + 6]
                left_over = np.uint64(0)
                for w in range(LANES):
                    a = word_il[i0, w] ^ word_il[i1, w]
                    a0 = a ^ word_il[i2, w]
                    a1 = (word_il[i0, w] & word_il[i1, w]) | (a & word_il[i2, w])
                    b = word_il[i3, w] ^ word_il[i4, w]
                    b0 = b ^ word_il[i5, w]
                    b1 = (word_il[i3, w] & word_il[i4, w]) | (b & word_il[i5, w])
                    d = a0 ^ b0
                    d0 = d ^ word_il[i6, w]
                    d1 = (a0 & b0) | (d & word_il[i6, w])
                    f = a1 ^ b1
                    f1 = f ^ d1
                    f2 = (a1 & b1) | (f & d1)
                    # d0 + 2 f1 + 4 f2 into planes 0 to 3
                    p0, p1 = plane_cpl[c, 0, w], plane_cpl[c, 1, w]
                    p2, p3 = plane_cpl[c, 2, w], plane_cpl[c, 3, w]
                    k1 = p0 & d0
                    g = p1 ^ f1
                    k2 = (p1 & f1) | (g & k1)
                    h = p2 ^ f2
                    k3 = (p2 & f2) | (h & k2)
                    plane_cpl[c, 0, w] = p0 ^ d0
                    plane_cpl[c, 1, w] = g ^ k1
                    plane_cpl[c, 2, w] = h ^ k2
                    plane_cpl[c, 3, w] = p3 ^ k3
                    word_k[w] = p3 & k3
                    left_over |= word_k[w]
                if left_over:
                    for w in range(LANES):
                        carry_into(plane_cpl[c], 4, w, word_k[w])
                j += 7
    hits_cr = np.zeros((n_combos, LANES * 64), dtype=np.int32)
    for c in range(n_combos):
        for p in range(n_planes):
            for w in range(LANES):
                word = plane_cpl[c, p, w]
                if word:
                    for b in range(64):
                        hits_cr[c, 64 * w + b] += np.int32((word >> np.uint64(b)) & ONE) << p
    return hits_cr[:, :n_draws]
