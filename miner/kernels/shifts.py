"""Hits over all circular shifts of each entity's triggers inside its own life."""

from __future__ import annotations

import math

import numpy as np

from miner.kernels.bits import ALL, ONE, popcount
from miner.kernels.compiling import kernel
from miner.kernels.tails import (
    EXACT_STATES,
    EXACT_WORK,
    LITTLE_SPREAD,
    NEAR_MEAN,
    TINY,
    cumulants,
    few_states,
    lattice_mass,
    lattice_tail,
)


@kernel
def sum_cumulants(start_j, share_h, share_1, s):
    """K(s) and its first four derivatives of a sum of independent counts.

    Count j is h with chance ``share_h[start_j[j] + h]``; ``share_1`` are chances of simple trials.
    """
    k0, k1, k2, k3, k4 = cumulants(share_1, s)
    grow = math.exp(s)
    for j in range(start_j.size - 1):
        first = start_j[j]
        n = start_j[j + 1] - first
        total = 0.0
        mean = 0.0
        scale = 1.0
        for h in range(n):
            part = share_h[first + h] * scale
            total += part
            mean += h * part
            scale *= grow
        mean /= total
        m2 = m3 = m4 = 0.0
        scale = 1.0 / total
        for h in range(n):
            part = share_h[first + h] * scale
            d = h - mean
            m2 += part * d * d
            m3 += part * d * d * d
            m4 += part * d * d * d * d
            scale *= grow
        k0 += math.log(total)
        k1 += mean
        k2 += m2
        k3 += m3
        k4 += m4 - 3.0 * m2 * m2
    return k0, k1, k2, k3, k4


@kernel
def sum_tilt(start_j, share_h, share_1, total, s):
    """The tilt at which the sum's mean is ``total``, and its cumulants there."""
    low, high = -60.0, 60.0
    for _ in range(200):
        k0, k1, k2, k3, k4 = sum_cumulants(start_j, share_h, share_1, s)
        step = (k1 - total) / k2
        if abs(k1 - total) < 1e-11 * total or abs(step) < 1e-15:
            break
        if step > 0:
            high = s
        else:
            low = s
        s -= step
        if not low < s < high:
            s = 0.5 * (low + high)
    return s, k0, k2, k3, k4


@kernel
def sum_saddlepoint(start_j, share_h, share_1, least):
    """P(sum >= least) by the saddlepoint (``tails.saddlepoint_tail``), -1 where there is too
    little spread at the tilt to trust it."""
    mass = 0.0
    x = least
    s = 0.0
    while True:
        s, k0, k2, k3, k4 = sum_tilt(start_j, share_h, share_1, float(x), s)
        if k2 < LITTLE_SPREAD:
            return -1.0
        if abs(s) * math.sqrt(k2) >= NEAR_MEAN:
            return mass + lattice_tail(x, s, k0, k2, k3, k4)
        mass += lattice_mass(x, s, k0, k2, k3, k4)
        x += 1


@kernel
def sum_exact(start_j, share_h, share_1, least):
    """P(sum >= least), state by state: all terms are positive, so rounding stays small."""
    now = np.zeros(least)
    after = np.zeros(least)
    now[0] = 1.0
    tail = 0.0
    high = 0
    for j in range(start_j.size - 1):
        first = start_j[j]
        most = start_j[j + 1] - first - 1
        top = min(least - 1, high + most)
        for x in range(top + 1):
            after[x] = now[x] * share_h[first]
        for h in range(1, most + 1):
            share = share_h[first + h]
            if share == 0.0:
                continue
            for x in range(h, top + 1):
                after[x] += now[x - h] * share
            for x in range(max(0, least - h), high + 1):
                tail += now[x] * share
        now, after = after, now
        high = top
    if share_1.size > 0:
        lone_x, lone_tail = few_states(share_1, least)
        # P(others = x) P(lone >= least - x), from the top so that the lone tail only grows
        tail += lone_tail * now[0]
        for x in range(1, high + 1):
            lone_tail += lone_x[least - x]
            tail += lone_tail * now[x]
    return tail


@kernel
def rings(life_e, life_start, life_stop, window_e, window_t):
    """Each entity's circle as bits: bit s is set where cell s is in an event window.

    Each circle is written out twice, end to end, so that the circle turned by ``s`` is the run of
    bits that begins at ``s``.

    Parameters
    ----------
    life_e : int64 [entities + 1], offsets into ``life_start, life_stop``: runs of sessions that
        joined are the entity's circle
    window_e : int64 [entities + 1], offsets into ``window_t``: sessions in an event window that
        lie inside those runs, ascending

    Returns int64 ``length_e``, int64 ``ring_e`` (offset of each entity's words), uint64 ``ring_w``.
    """
    n_entities = life_e.size - 1
    length_e = np.zeros(n_entities, dtype=np.int64)
    ring_e = np.zeros(n_entities + 1, dtype=np.int64)
    for e in range(n_entities):
        for m in range(life_e[e], life_e[e + 1]):
            length_e[e] += life_stop[m] - life_start[m]
        # a word more than the bits need: reading begins anywhere in a word
        ring_e[e + 1] = ring_e[e] + (2 * length_e[e] + 63) // 64 + 1
    ring_w = np.zeros(ring_e[n_entities], dtype=np.uint64)
    for e in range(n_entities):
        m = life_e[e]
        before = 0  # cells of the circle in earlier runs
        for j in range(window_e[e], window_e[e + 1]):
            while window_t[j] >= life_stop[m]:
                before += life_stop[m] - life_start[m]
                m += 1
            for place in (
                before + window_t[j] - life_start[m],
                before + window_t[j] - life_start[m] + length_e[e],
            ):
                ring_w[ring_e[e] + (place >> 6)] |= ONE << np.uint64(place & 63)
    return length_e, ring_e, ring_w


@kernel
def count_shifts(place_a, length, ring_w, plane_p, share_h):
    """Write into ``share_h`` the share of shifts on which h of the triggers meet a window.

    ``place_a`` int64, the triggers' places on the circle; ``ring_w`` the circle (``rings``);
    ``plane_p`` room for a bit-sliced counter. Returns the most hits of any shift.
    """
    n = place_a.size
    share_h[: n + 1] = 0.0
    most = 0
    for w in range((length + 63) >> 6):
        plane_p[:] = np.uint64(0)
        any_hit = np.uint64(0)
        for a in range(n):
            first = place_a[a] + (w << 6)
            low = np.uint64(first & 63)
            word = ring_w[first >> 6] >> low
            if low:
                word |= ring_w[(first >> 6) + 1] << (np.uint64(64) - low)
            any_hit |= word
            p = 0
            while word:
                plane = plane_p[p]
                plane_p[p] = plane ^ word
                word &= plane
                p += 1
        if any_hit == 0:
            continue
        mask = ALL
        if (w << 6) + 64 > length:
            mask = ALL >> np.uint64((w << 6) + 64 - length)
        n_planes = plane_p.size
        while n_planes > 1 and plane_p[n_planes - 1] == 0:
            n_planes -= 1
        for h in range(1, min(n, (1 << n_planes) - 1) + 1):
            match = mask
            for p in range(n_planes):
                match &= plane_p[p] if (h >> p) & 1 else ~plane_p[p]
            if match:
                share_h[h] += float(popcount(match))
                most = max(most, h)
    rest = float(length)
    for h in range(1, most + 1):
        rest -= share_h[h]
        share_h[h] /= length
    share_h[0] = rest / length
    return most


@kernel
def shift_p_values(
    row,
    offset_c,
    entity,
    session,
    hits,
    life_e,
    life_start,
    life_stop,
    n_windows_e,
    length_e,
    ring_e,
    ring_w,
):
    """P(sum over entities of hits after independent shifts >= hits), for the combinations ``row``.

    The law of each entity's hits is exact; their sum is worked out state by state where that is
    affordable, else by the saddlepoint (as ``tails.upper_tail``).

    Parameters
    ----------
    offset_c, entity, session : combination-major triggers, sorted by entity, then session
    hits : int64 [rows], observed
    life_e, life_start, life_stop : the runs of sessions on which the combinations of ``row`` are
        eligible for each entity, as in ``rings``
    n_windows_e : int64, each entity's sessions in an event window inside them
    length_e, ring_e, ring_w : the circles (``rings``)
    """
    p = np.ones(row.size)
    most_triggers = 1
    for i in range(row.size):
        most_triggers = max(most_triggers, offset_c[row[i] + 1] - offset_c[row[i]])
    place_a = np.empty(most_triggers, dtype=np.int64)
    plane_p = np.zeros(64, dtype=np.uint64)
    share_1 = np.empty(length_e.size)
    start_j = np.zeros(length_e.size + 1, dtype=np.int64)
    share_h = np.empty(4096)
    for i in range(row.size):
        if hits[i] == 0:
            continue
        least = hits[i]
        n_shares = 0
        n_counts = 0
        n_lone = 0
        j, last = offset_c[row[i]], offset_c[row[i] + 1]
        while j < last:
            e = entity[j]
            n = 1
            while j + n < last and entity[j + n] == e:
                n += 1
            n_windows = n_windows_e[e]
            if n_windows > 0 and n == 1:
                # a lone trigger meets each window on one shift: a simple trial, kept for the end
                share_1[n_lone] = n_windows / length_e[e]
                n_lone += 1
            elif n_windows > 0:
                m = life_e[e]
                before = 0
                for a in range(n):
                    while session[j + a] >= life_stop[m]:
                        before += life_stop[m] - life_start[m]
                        m += 1
                    place_a[a] = before + session[j + a] - life_start[m]
                if n_shares + n + 1 > share_h.size:
                    share_h = np.concatenate((share_h, np.empty(share_h.size + n + 1)))
                n_planes = 1
                while n >> n_planes:
                    n_planes += 1
                most = count_shifts(
                    place_a[:n],
                    length_e[e],
                    ring_w[ring_e[e] : ring_e[e + 1]],
                    plane_p[:n_planes],
                    share_h[n_shares:],
                )
                n_shares += most + 1
                n_counts += 1
                start_j[n_counts] = n_shares
            j += n
        starts, lone = start_j[: n_counts + 1], share_1[:n_lone]
        tail = -1.0
        is_long = least > EXACT_STATES and (n_counts + n_lone) * least > EXACT_WORK
        if is_long and least < n_lone + n_shares - n_counts:
            tail = sum_saddlepoint(starts, share_h, lone, least)
        if tail < 0.0:
            tail = sum_exact(starts, share_h, lone, least)
        p[i] = max(TINY, min(1.0, tail))
    return p
