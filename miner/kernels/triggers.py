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
def find_triggers(
    alert_ekw, cover_eqw, class_k, combo_ck, jump_ck, first_entity, lookback, rest, first_t, stop_t
):
    """Triggers of every combination for the entities of one block.

    Parameters
    ----------
    alert_ekw : uint64 [entities, types, words], the alerts of the block
    cover_eqw : uint64 [entities, coverage classes, words], where each class is covered
    class_k : int [types], the coverage class of each type
    combo_ck : int [combinations, size], sorted types, rows in lexicographic order
    jump_ck : int [combinations, size], the next row whose first ``d + 1`` types differ
    first_entity : int, code of the block's first entity
    lookback, rest : int, sessions
    first_t, stop_t : int, triggers are kept where ``first_t <= t < stop_t``

    Returns
    -------
    combo, entity, session : int32 [triggers], in order of entity, combination, session
    on_count_c : int64 [combinations], sessions on which the combination is on, all entities
    """
    n_entities, n_types, n_words = alert_ekw.shape
    n_combos, size = combo_ck.shape
    on_count_c = np.zeros(n_combos, dtype=np.int64)
    on_kw = np.empty((n_types, n_words), dtype=np.uint64)
    prefix_kw = np.empty((size, n_words), dtype=np.uint64)
    capacity = 4096
    combo = np.empty(capacity, dtype=np.int32)
    entity = np.empty(capacity, dtype=np.int32)
    session = np.empty(capacity, dtype=np.int32)
    n = 0
    for e in range(n_entities):
        smear(alert_ekw[e], lookback, on_kw)
        c = 0
        good_depth = 0  # how many leading types of prefix_kw belong to row c
        while c < n_combos:
            dead_depth = -1
            for d in range(good_depth, size):
                k = combo_ck[c, d]
                has_any = np.uint64(0)
                if d == 0:
                    for w in range(n_words):
                        word = on_kw[k, w]
                        prefix_kw[0, w] = word
                        has_any |= word
                else:
                    for w in range(n_words):
                        word = prefix_kw[d - 1, w] & on_kw[k, w]
                        prefix_kw[d, w] = word
                        has_any |= word
                if has_any == 0:
                    dead_depth = d
                    break
            if dead_depth < 0:
                last = -(1 << 30)
                carry = np.uint64(0)
                on_count = np.uint64(0)
                for w in range(n_words):
                    word = prefix_kw[size - 1, w]
                    edge = word & ~((word << ONE) | carry)
                    carry = word >> np.uint64(63)
                    on_count += popcount(word)
                    while edge:
                        t = (w << 6) + np.int64(lowest_bit(edge))
                        edge &= edge - ONE
                        if t - last < rest:
                            continue
                        last = t
                        if t < first_t or t >= stop_t:
                            continue
                        is_covered = True
                        for d in range(size):
                            q = class_k[combo_ck[c, d]]
                            if (cover_eqw[e, q, w] >> np.uint64(t & 63)) & ONE == 0:
                                is_covered = False
                                break
                        if not is_covered:
                            continue
                        if n == capacity:
                            combo = np.concatenate((combo, np.empty(capacity, dtype=np.int32)))
                            entity = np.concatenate((entity, np.empty(capacity, dtype=np.int32)))
                            session = np.concatenate((session, np.empty(capacity, dtype=np.int32)))
                            capacity *= 2
                        combo[n] = c
                        entity[n] = first_entity + e
                        session[n] = t
                        n += 1
                on_count_c[c] += np.int64(on_count)
                dead_depth = size - 1
            step = jump_ck[c, dead_depth]
            # the next row shares its first `good_depth` types with this one
            good_depth = 0
            if step < n_combos:
                while (
                    good_depth < dead_depth
                    and combo_ck[step, good_depth] == combo_ck[c, good_depth]
                ):
                    good_depth += 1
            c = step
    return combo[:n].copy(), entity[:n].copy(), session[:n].copy(), on_count_c


@kernel
def scatter(combo, entity, session, row_c, next_c, out_entity, out_session):
    """Sort one block's triggers into combination-major arrays, in place.

    ``row_c`` maps a combination of the block to its output row (-1: dropped); ``next_c`` holds
    each output row's next free position and is advanced.
    """
    for i in range(combo.size):
        row = row_c[combo[i]]
        if row >= 0:
            place = next_c[row]
            out_entity[place] = entity[i]
            out_session[place] = session[i]
            next_c[row] = place + 1
