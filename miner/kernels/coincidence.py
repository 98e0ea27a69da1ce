"""How likely an alert was on given cells, were only its entity's and its date's share known."""

from __future__ import annotations

import numpy as np

from miner.kernels.bits import ONE, lowest_bit
from miner.kernels.compiling import kernel


@kernel
def chances(alert_ew, cover_ew, group_et, n_groups, entity, session):
    """Chance of an alert of one type on each cell (entity[i], session[i]): float64 [cells].

    An entity's alerts are spread over the sessions on which it is covered as its peer group's
    alerts of the type are: chance = alerts of the entity x alerts of the group on the session / the
    sum of the latter over the entity's covered sessions. The entity's number and, nearly, the
    group's number on each session are held.

    Parameters
    ----------
    alert_ew, cover_ew : uint64 [entities, words], alerts inside coverage, and coverage
    group_et : int16 [entities, sessions], below ``n_groups``
    entity, session : int [cells]; what is outside the calendar or coverage has no chance
    """
    n_entities, n_sessions = group_et.shape
    count_gt = np.zeros((n_groups, n_sessions), dtype=np.int64)
    alerts_e = np.zeros(n_entities, dtype=np.int64)
    for e in range(n_entities):
        for w in range(alert_ew.shape[1]):
            word = alert_ew[e, w]
            while word:
                t = (w << 6) + np.int64(lowest_bit(word))
                word &= word - ONE
                count_gt[group_et[e, t], t] += 1
                alerts_e[e] += 1
    spread_e = np.full(n_entities, -1, dtype=np.int64)
    chance = np.zeros(entity.size)
    for i in range(entity.size):
        e, t = entity[i], session[i]
        if t < 0 or t >= n_sessions or alerts_e[e] == 0:
            continue
        if (cover_ew[e, t >> 6] >> np.uint64(t & 63)) & ONE == 0:
            continue
        if spread_e[e] < 0:
            spread_e[e] = 0
            for w in range(cover_ew.shape[1]):
                word = cover_ew[e, w]
                while word:
                    u = (w << 6) + np.int64(lowest_bit(word))
                    word &= word - ONE
                    spread_e[e] += count_gt[group_et[e, u], u]
        chance[i] = min(1.0, alerts_e[e] * count_gt[group_et[e, t], t] / spread_e[e])
    return chance
