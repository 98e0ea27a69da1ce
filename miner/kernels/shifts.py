"""Hits over all circular shifts of each entity's triggers inside its own life."""

from __future__ import annotations

import math

import numpy as np

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
def shift_p_values(
    row,
    offset_c,
    entity,
    session,
    hits,
    life_e,
    life_start,
    life_stop,
    window_e,
    window_t,
    n_sessions,
):
    """P(sum over entities of hits after independent shifts >= hits), for the combinations ``row``.

    The law of each entity's hits is exact; their sum is worked out state by state where that is
    affordable, else by the saddlepoint (as ``tails.upper_tail``).

    Parameters
    ----------
    offset_c, entity, session : combination-major triggers, sorted by entity, then session
    hits : int64 [rows], observed
    life_e : int64 [entities + 1], offsets into ``life_start, life_stop``: the runs of sessions on
        which the combinations of ``row`` are eligible for the entity; joined they are its circle
    window_e : int64 [entities + 1], offsets into ``window_t``: sessions in an event window that
        lie inside those runs, ascending
    """
    p = np.ones(row.size)
    count_s = np.zeros(n_sessions, dtype=np.int32)
    touched = np.empty(n_sessions, dtype=np.int32)
    place_w = np.empty(n_sessions, dtype=np.int32)
    share_1 = np.empty(life_e.size)
    start_j = np.zeros(life_e.size, dtype=np.int64)
    share_h = np.empty(4096)
    for i in range(row.size):
        if hits[i] == 0:
            continue
        least = hits[i]
        n_shares = 0
        n_counts = 0
        j, last = offset_c[row[i]], offset_c[row[i] + 1]
        n_lone = 0
        while j < last:
            e = entity[j]
            stop = j + 1
            while stop < last and entity[stop] == e:
                stop += 1
            n_windows = window_e[e + 1] - window_e[e]
            if n_windows > 0:
                length = 0
                for m in range(life_e[e], life_e[e + 1]):
                    length += life_stop[m] - life_start[m]
            if n_windows > 0 and stop == j + 1:
                # a lone trigger meets each window on one shift: a simple trial, kept for the end
                share_1[n_lone] = n_windows / length
                n_lone += 1
            elif n_windows > 0:
                m = life_e[e]
                before = 0  # cells of the circle in earlier runs
                for w in range(n_windows):
                    t = window_t[window_e[e] + w]
                    while t >= life_stop[m]:
                        before += life_stop[m] - life_start[m]
                        m += 1
                    place_w[w] = before + t - life_start[m]
                m = life_e[e]
                before = 0
                n_touched = 0
                for a in range(j, stop):
                    t = session[a]
                    while t >= life_stop[m]:
                        before += life_stop[m] - life_start[m]
                        m += 1
                    place = before + t - life_start[m]
                    for w in range(n_windows):
                        s = place_w[w] - place
                        if s < 0:
                            s += length
                        if count_s[s] == 0:
                            touched[n_touched] = s
                            n_touched += 1
                        count_s[s] += 1
                if n_shares + stop - j + 1 > share_h.size:
                    share_h = np.concatenate((share_h, np.empty(share_h.size + stop - j + 1)))
                most = 0
                share_h[n_shares] = length - n_touched
                for a in range(n_touched):
                    h = count_s[touched[a]]
                    count_s[touched[a]] = 0
                    while most < h:
                        most += 1
                        share_h[n_shares + most] = 0.0
                    share_h[n_shares + h] += 1.0
                for h in range(most + 1):
                    share_h[n_shares + h] /= length
                n_shares += most + 1
                n_counts += 1
                start_j[n_counts] = n_shares
            j = stop
        starts, lone = start_j[: n_counts + 1], share_1[:n_lone]
        tail = -1.0
        if least > EXACT_STATES and (n_counts + n_lone) * least > EXACT_WORK:
            most = n_lone + n_shares - n_counts
            if least < most:
                tail = sum_saddlepoint(starts, share_h, lone, least)
        if tail < 0.0:
            tail = sum_exact(starts, share_h, lone, least)
        p[i] = max(TINY, min(1.0, tail))
    return p
