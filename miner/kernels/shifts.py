"""Hits over all circular shifts of each entity's triggers inside its own life, exactly."""

from __future__ import annotations

import numpy as np

from miner.kernels.compiling import kernel
from miner.kernels.tails import TINY, few_states


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
    share_h = np.zeros(n_sessions + 1)
    share_1 = np.empty(life_e.size)
    for i in range(row.size):
        if hits[i] == 0:
            continue
        least = hits[i]
        now = np.zeros(least)
        after = np.zeros(least)
        now[0] = 1.0
        tail = 0.0
        high = 0
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
                most = 0
                share_h[0] = length - n_touched
                for a in range(n_touched):
                    h = count_s[touched[a]]
                    count_s[touched[a]] = 0
                    while most < h:
                        most += 1
                        share_h[most] = 0.0
                    share_h[h] += 1.0
                for h in range(most + 1):
                    share_h[h] /= length
                # add this entity
                top = min(least - 1, high + most)
                for x in range(top + 1):
                    after[x] = now[x] * share_h[0]
                for h in range(1, most + 1):
                    if share_h[h] == 0.0:
                        continue
                    for x in range(h, top + 1):
                        after[x] += now[x - h] * share_h[h]
                    for x in range(max(0, least - h), high + 1):
                        tail += now[x] * share_h[h]
                now, after = after, now
                high = top
            j = stop
        if n_lone > 0:
            lone_x, lone_tail = few_states(share_1[:n_lone], least)
            # P(others = x) P(lone >= least - x), from the top so that the lone tail only grows
            tail += lone_tail * now[0]
            for x in range(1, high + 1):
                lone_tail += lone_x[least - x]
                tail += lone_tail * now[x]
        p[i] = max(TINY, min(1.0, tail))
    return p
