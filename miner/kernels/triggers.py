"""Triggers of many combinations at once, on bit-packed alerts, one block of entities a call."""

from __future__ import annotations

import numpy as np

from miner.kernels.bits import ONE, lowest_bit, popcount
from miner.kernels.compiling import kernel


@kernel
def smear(alert_kw, lookback, on_kw):
    """Write into ``on_kw`` each row's bits kept on for ``lookback`` sessions."""
    n_types, n_words = alert_kw.shape
    for k in range(n_types):
        for w in range(n_words):
            on_kw[k, w] = alert_kw[k, w]
        reached = 1
        while reached < lookback:
            step = min(reached, lookback - reached, 63)
            up, down = np.uint64(step), np.uint64(64 - step)
            for w in range(n_words - 1, -1, -1):
                moved = on_kw[k, w] << up
                if w > 0:
                    moved |= on_kw[k, w - 1] >> down
                on_kw[k, w] |= moved
            reached += step


@kernel
def count_on(alert_ekw, lookback, combo_ck):
    """Sessions on which each combination is on, all entities: int64 [combinations].

    ``combo_ck`` int64 [combinations, size], rows of sorted types in lexicographic order: words of
    a part that a row shares with the one before are not joined again.
    """
    n_entities, n_types, n_words = alert_ekw.shape
    n_combos, size = combo_ck.shape
    on_count_c = np.zeros(n_combos, dtype=np.int64)
    on_kw = np.empty((n_types, n_words), dtype=np.uint64)
    part_dw = np.empty((size, n_words), dtype=np.uint64)
    for e in range(n_entities):
        smear(alert_ekw[e], lookback, on_kw)
        for c in range(n_combos):
            first = 0
            while c > 0 and first < size - 1 and combo_ck[c, first] == combo_ck[c - 1, first]:
                first += 1
            for d in range(first, size):
                row_w = on_kw[combo_ck[c, d]]
                for w in range(n_words):
                    part_dw[d, w] = row_w[w] if d == 0 else part_dw[d - 1, w] & row_w[w]
            count = np.uint64(0)
            for w in range(n_words):
                count += popcount(part_dw[size - 1, w])
            on_count_c[c] += np.int64(count)
    return on_count_c


@kernel
def child_of(type_n, start, stop, k):
    """The node in ``[start, stop)`` whose last type is ``k``, -1 where there is none."""
    if start < stop and k >= type_n[start] and k <= type_n[stop - 1]:
        place = start + k - type_n[start]  # where there is a child for every type in between
        if place < stop and type_n[place] == k:
            return place
        low, high = start, stop - 1
        while low <= high:
            middle = (low + high) >> 1
            if type_n[middle] < k:
                low = middle + 1
            elif type_n[middle] > k:
                high = middle - 1
            else:
                return middle
    return -1


@kernel
def find_triggers(
    alert_ekw,
    cover_eqw,
    class_k,
    type_n,
    child_n,
    n_roots,
    size,
    first_entity,
    lookback,
    rest,
    first_t,
    stop_t,
):
    """Triggers of every combination for the entities of one block.

    A combination comes on at a session exactly if all its types are on there and one of them was
    not on the session before. So on every session on which some type comes on, the combinations
    of the types on there that hold a new one are walked through, and nothing else is looked at.

    Parameters
    ----------
    alert_ekw : uint64 [entities, types, words], the alerts of the block
    cover_eqw : uint64 [entities, coverage classes, words], where each class is covered
    class_k : int [types], the coverage class of each type
    type_n : int32 [nodes], the last type of each combination. Combinations are sorted by size,
        then by their types, and each one's leading part is there too: they form a tree
    child_n : int64 [nodes + 1], the combinations one type larger that begin with node n are
        ``child_n[n] .. child_n[n + 1]``; the first ``n_roots`` nodes have one type
    size : int, types in the largest combination
    first_entity : int, code of the block's first entity
    lookback, rest : int, sessions
    first_t, stop_t : int, triggers are kept where ``first_t <= t < stop_t``

    Returns
    -------
    node, entity, session : int32 [triggers], in order of entity, then session
    """
    n_entities, n_types, n_words = alert_ekw.shape
    is_asked_k = np.zeros(n_types, dtype=np.bool_)
    for k in type_n:
        is_asked_k[k] = True
    on_kw = np.empty((n_types, n_words), dtype=np.uint64)
    carry_k = np.empty(n_types, dtype=np.uint64)
    new_k = np.empty(n_types, dtype=np.uint64)
    active = np.empty(n_types, dtype=np.int32)  # types on in a word
    on = np.empty(n_types, dtype=np.int32)  # types on at a session, and of each:
    is_new = np.empty(n_types, dtype=np.bool_)
    is_covered = np.empty(n_types, dtype=np.bool_)
    at_d = np.empty(size, dtype=np.int64)
    node_d = np.empty(size, dtype=np.int64)
    new_d = np.empty(size, dtype=np.bool_)
    covered_d = np.empty(size, dtype=np.bool_)
    # sessions are counted on from entity to entity, each far enough from the one before that no
    # rest reaches over: so the last trigger of a combination need not be forgotten in between
    stride = (n_words << 6) + rest
    last_n = np.full(type_n.size, -(1 << 30), dtype=np.int64)
    capacity = 4096
    node = np.empty(capacity, dtype=np.int32)
    entity = np.empty(capacity, dtype=np.int32)
    session = np.empty(capacity, dtype=np.int32)
    n = 0
    for e in range(n_entities):
        smear(alert_ekw[e], lookback, on_kw)
        carry_k[:] = np.uint64(0)
        for w in range(n_words):
            n_active = 0
            any_new = np.uint64(0)
            for k in range(n_types):
                word = on_kw[k, w]
                if is_asked_k[k] and word:
                    active[n_active] = k
                    n_active += 1
                    new_k[k] = word & ~((word << ONE) | carry_k[k])
                    any_new |= new_k[k]
                carry_k[k] = word >> np.uint64(63)
            while any_new:
                bit = np.uint64(lowest_bit(any_new))
                any_new &= any_new - ONE
                t = (w << 6) + np.int64(bit)
                if t >= stop_t:
                    break
                n_on = 0
                last_new = 0
                for i in range(n_active):
                    k = active[i]
                    if (on_kw[k, w] >> bit) & ONE:
                        on[n_on] = k
                        is_new[n_on] = (new_k[k] >> bit) & ONE
                        is_covered[n_on] = (cover_eqw[e, class_k[k], w] >> bit) & ONE
                        if is_new[n_on]:
                            last_new = n_on
                        n_on += 1
                now = e * stride + t
                d = 0
                at_d[0] = -1
                while d >= 0:
                    at_d[d] += 1
                    i = at_d[d]
                    # without a new type among the first ones, one has to follow
                    if i >= n_on or (i > last_new and not (d > 0 and new_d[d - 1])):
                        d -= 1
                        continue
                    if d == 0:
                        found = child_of(type_n, 0, n_roots, on[i])
                    else:
                        above = node_d[d - 1]
                        found = child_of(type_n, child_n[above], child_n[above + 1], on[i])
                    if found < 0:
                        continue
                    node_d[d] = found
                    new_d[d] = is_new[i] or (d > 0 and new_d[d - 1])
                    covered_d[d] = is_covered[i] and (d == 0 or covered_d[d - 1])
                    if new_d[d] and now - last_n[found] >= rest:
                        last_n[found] = now
                        if covered_d[d] and t >= first_t:
                            if n == capacity:
                                room = np.empty(capacity, dtype=np.int32)
                                node = np.concatenate((node, room))
                                entity = np.concatenate((entity, room))
                                session = np.concatenate((session, room))
                                capacity *= 2
                            node[n] = found
                            entity[n] = first_entity + e
                            session[n] = t
                            n += 1
                    if d + 1 < size:
                        at_d[d + 1] = i
                        d += 1
    return node[:n].copy(), entity[:n].copy(), session[:n].copy()


@kernel
def count_triggers(node, entity, session, label_et, label, stop_t, n_nodes):
    """Triggers of each combination in one block before ``stop_t``: int64 [nodes].

    With ``label`` not negative only those on cells of that label count.
    """
    count_n = np.zeros(n_nodes, dtype=np.int64)
    for i in range(node.size):
        if session[i] < stop_t and (label < 0 or label_et[entity[i], session[i]] == label):
            count_n[node[i]] += 1
    return count_n


@kernel
def scatter(node, entity, session, label_et, label, next_n, out_entity, out_session):
    """Sort one block's triggers into combination-major arrays, in place.

    ``next_n`` holds the first free place for each combination's triggers of this block (-1: those
    are dropped) and is advanced; ``label_et, label`` as in ``count_triggers``.
    """
    for i in range(node.size):
        place = next_n[node[i]]
        if place >= 0 and (label < 0 or label_et[entity[i], session[i]] == label):
            out_entity[place] = entity[i]
            out_session[place] = session[i]
            next_n[node[i]] = place + 1


@kernel
def count_before(offset_c, session, stop_t, count_c):
    """Triggers of each combination before ``stop_t``, into ``count_c`` in place."""
    for c in range(offset_c.size - 1):
        for i in range(offset_c[c], offset_c[c + 1]):
            count_c[c] += session[i] < stop_t


@kernel
def take_before(row, offset_c, entity, session, stop_t, start, out_entity, out_session):
    """Copy the triggers before ``stop_t`` of the combinations ``row`` to ``start[i]`` on."""
    for i in range(row.size):
        place = start[i]
        for j in range(offset_c[row[i]], offset_c[row[i] + 1]):
            if session[j] < stop_t:
                out_entity[place] = entity[j]
                out_session[place] = session[j]
                place += 1
