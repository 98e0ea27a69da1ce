"""Sessions as bits: session t of a row is bit ``t % 64`` of word ``t // 64``."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import types
from numba.extending import intrinsic

from miner.kernels.compiling import kernel

ONE = np.uint64(1)
ALL = np.uint64(0xFFFFFFFFFFFFFFFF)


@intrinsic
def _popcount(typing_context, word):  # type: ignore[no-untyped-def]
    """Number of set bits of a uint64."""

    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.ctpop(args[0])

    return types.uint64(types.uint64), codegen


@intrinsic
def _lowest_bit(typing_context, word):  # type: ignore[no-untyped-def]
    """Position of the lowest set bit of a uint64 that is not zero."""

    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.cttz(args[0], context.get_constant(types.boolean, True))

    return types.uint64(types.uint64), codegen


popcount: Any = _popcount
lowest_bit: Any = _lowest_bit


def n_words(n_sessions: int) -> int:
    """Words that hold ``n_sessions`` bits."""
    return (n_sessions + 63) // 64


@kernel
def pack(row, session, bits_rw):
    """Set bit ``session[i]`` of ``bits_rw[row[i]]`` in place, for every i."""
    for i in range(row.size):
        t = session[i]
        bits_rw[row[i], t >> 6] |= ONE << np.uint64(t & 63)


@kernel
def fill_ranges(row, start_t, stop_t, bits_rw):
    """Set bits ``start_t[i] .. stop_t[i] - 1`` of ``bits_rw[row[i]]`` in place, for every i."""
    for i in range(row.size):
        if start_t[i] >= stop_t[i]:
            continue
        first, last = start_t[i] >> 6, (stop_t[i] - 1) >> 6
        for w in range(first, last + 1):
            word = ALL
            if w == first:
                word &= ALL << np.uint64(start_t[i] & 63)
            if w == last:
                word &= ALL >> np.uint64(63 - ((stop_t[i] - 1) & 63))
            bits_rw[row[i], w] |= word


@kernel
def cut_after(bits_rw, n_sessions):
    """Clear every bit at or after ``n_sessions`` in place."""
    last = n_sessions >> 6
    for r in range(bits_rw.shape[0]):
        for w in range(last, bits_rw.shape[1]):
            if w == last:
                bits_rw[r, w] &= (ONE << np.uint64(n_sessions & 63)) - ONE
            else:
                bits_rw[r, w] = np.uint64(0)


@kernel
def unpack(bits_rw, n_sessions):
    """The bits as a boolean array [rows, n_sessions]."""
    is_set = np.zeros((bits_rw.shape[0], n_sessions), dtype=np.bool_)
    for r in range(bits_rw.shape[0]):
        for t in range(n_sessions):
            is_set[r, t] = (bits_rw[r, t >> 6] >> np.uint64(t & 63)) & ONE
    return is_set


@kernel
def any_in_range(row_w, start_t, stop_t):
    """Whether any bit of ``row_w`` in ``[start_t, stop_t)`` is set."""
    if start_t >= stop_t:
        return False
    first, last = start_t >> 6, (stop_t - 1) >> 6
    for w in range(first, last + 1):
        word = row_w[w]
        if w == first:
            word &= ALL << np.uint64(start_t & 63)
        if w == last:
            word &= ALL >> np.uint64(63 - ((stop_t - 1) & 63))
        if word:
            return True
    return False


@kernel
def count_cells(cover_eqw, class_sq, open_ew, window_ew):
    """Cells, and cells in an event window, that are open and covered in every class of a set.

    ``class_sq`` int64 [sets, size]: coverage classes, padded with -1. Returns int64
    ``cells_s, windows_s``.
    """
    n_sets = class_sq.shape[0]
    cells_s = np.zeros(n_sets, dtype=np.int64)
    windows_s = np.zeros(n_sets, dtype=np.int64)
    for e in range(open_ew.shape[0]):
        for i in range(n_sets):
            for w in range(open_ew.shape[1]):
                word = open_ew[e, w]
                for d in range(class_sq.shape[1]):
                    if class_sq[i, d] >= 0:
                        word &= cover_eqw[e, class_sq[i, d], w]
                if word:
                    cells_s[i] += np.int64(popcount(word))
                    windows_s[i] += np.int64(popcount(word & window_ew[e, w]))
    return cells_s, windows_s


@kernel
def pack_flags(is_set_et):
    """A boolean array [rows, sessions] as words."""
    n_rows, n_sessions = is_set_et.shape
    bits_rw = np.zeros((n_rows, (n_sessions + 63) // 64), dtype=np.uint64)
    for r in range(n_rows):
        for t in range(n_sessions):
            if is_set_et[r, t]:
                bits_rw[r, t >> 6] |= ONE << np.uint64(t & 63)
    return bits_rw


@kernel
def repeats(alert_ekw, within):
    """By type: alert sessions, those followed by another on the entity in the next ``within``
    sessions, and entities with any. Three int64 [types]."""
    n_types = alert_ekw.shape[1]
    sessions_k = np.zeros(n_types, dtype=np.int64)
    followed_k = np.zeros(n_types, dtype=np.int64)
    entities_k = np.zeros(n_types, dtype=np.int64)
    for e in range(alert_ekw.shape[0]):
        for k in range(n_types):
            last = -1
            for w in range(alert_ekw.shape[2]):
                word = alert_ekw[e, k, w]
                while word:
                    t = (w << 6) + np.int64(lowest_bit(word))
                    word &= word - ONE
                    sessions_k[k] += 1
                    if last < 0:
                        entities_k[k] += 1
                    elif t - last <= within:
                        followed_k[k] += 1
                    last = t
    return sessions_k, followed_k, entities_k
