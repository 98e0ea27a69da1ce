"""Every kernel against an obvious twin, on inputs that cross the borders of 64-session words."""

import math
from collections import Counter
from fractions import Fraction
from itertools import pairwise, permutations

import naive
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import chi2, poisson_binom

from miner.discovery import TIE
from miner.kernels import bits, exchanges, hits, margins, shifts, tails, triggers, windows
from miner.open_cells import OpenCells
from miner.panel import Labels
from miner.sharper import NODES, WEIGHTS

BORDERS = [1, 2, 63, 64, 65, 127, 128, 129, 150]
seeds = st.integers(0, 2**32 - 1)
lengths = st.sampled_from(BORDERS)


def random_alerts(rng: np.random.Generator, n_entities: int, n_types: int, n_sessions: int):
    """Bool [entities, types, sessions], thin for some types and nearly always on for others."""
    return rng.random((n_entities, n_types, n_sessions)) < rng.choice(
        [0.02, 0.1, 0.5, 0.95], (1, n_types, 1)
    )


def packed(is_set_ekt: np.ndarray) -> np.ndarray:
    """Bool [entities, types, sessions] as the kernels take it."""
    e, k, t = is_set_ekt.shape
    return bits.pack_flags(is_set_ekt.reshape(e * k, t)).reshape(e, k, -1)


# --- bits -----------------------------------------------------------------------------------


@given(seeds, lengths, st.integers(0, 150))
def test_bits_hold_what_is_put_in(seed, n_sessions, cut):
    rng = np.random.default_rng(seed)
    is_set = rng.random((3, n_sessions)) < 0.3
    row, session = np.nonzero(is_set)
    order = rng.permutation(row.size)
    word_rw = np.zeros((3, bits.n_words(n_sessions)), dtype=np.uint64)
    bits.pack(np.tile(row[order], 2), np.tile(session[order], 2), word_rw)
    assert (bits.unpack(word_rw, n_sessions) == is_set).all()
    assert (bits.pack_flags(is_set) == word_rw).all()
    cut = min(cut, n_sessions)
    bits.cut_after(word_rw, cut)
    whole = bits.unpack(word_rw, 64 * word_rw.shape[1])
    assert (whole[:, :cut] == is_set[:, :cut]).all()
    assert not whole[:, cut:].any()


@given(seeds, lengths)
def test_ranges_of_bits(seed, n_sessions):
    rng = np.random.default_rng(seed)
    row = rng.integers(0, 2, 4)
    ends = np.sort(rng.integers(0, n_sessions + 1, (2, 4)), axis=0)
    word_rw = np.zeros((2, bits.n_words(n_sessions)), dtype=np.uint64)
    bits.fill_ranges(row, *ends, word_rw)
    expected = np.zeros((2, n_sessions), dtype=bool)
    for r, start, stop in zip(row, *ends, strict=True):
        expected[r, start:stop] = True
    assert (bits.unpack(word_rw, n_sessions) == expected).all()
    for start in range(n_sessions):
        for stop in {start, start + 1, n_sessions, min(n_sessions, start + 64)}:
            assert bits.any_in_range(word_rw[0], start, stop) == expected[0, start:stop].any()


@given(seeds, lengths)
def test_cells_are_counted_where_every_class_is_covered(seed, n_sessions):
    rng = np.random.default_rng(seed)
    cover, is_open = rng.random((3, 4, n_sessions)) < 0.7, rng.random((3, n_sessions)) < 0.8
    is_window = rng.random((3, n_sessions)) < 0.3
    sets = [(0,), (1, 3), (0, 2, 3)]
    class_sq = np.array([[*s, -1, -1][:3] for s in sets])
    found = bits.count_cells(
        packed(cover), class_sq, bits.pack_flags(is_open), bits.pack_flags(is_window)
    )
    for i, classes in enumerate(sets):
        cells = cover[:, list(classes)].all(axis=1) & is_open
        assert (found[0][i], found[1][i]) == (cells.sum(), (cells & is_window).sum())


@given(seeds, lengths, st.integers(1, 70))
def test_repeats_within_the_lookback(seed, n_sessions, within):
    alerts = random_alerts(np.random.default_rng(seed), 3, 3, n_sessions)
    found = bits.repeats(packed(alerts), within)
    for k in range(3):
        lists = [np.flatnonzero(alerts[e, k]) for e in range(3)]
        assert found[0][k] == sum(map(len, lists))
        assert found[1][k] == sum((np.diff(days) <= within).sum() for days in lists)
        assert found[2][k] == sum(days.size > 0 for days in lists)


# --- triggers -------------------------------------------------------------------------------


@given(seeds, lengths, st.sampled_from([1, 2, 5, 63, 64, 65, 130]))
def test_an_alert_keeps_its_type_on_for_the_lookback(seed, n_sessions, lookback):
    alerts = random_alerts(np.random.default_rng(seed), 1, 2, n_sessions)
    on_kw = np.empty((2, bits.n_words(n_sessions)), dtype=np.uint64)
    triggers.smear(packed(alerts)[0], lookback, on_kw)
    is_on = bits.unpack(on_kw, n_sessions)
    for k, t in np.ndindex(2, n_sessions):
        assert is_on[k, t] == alerts[0, k, max(0, t - lookback + 1) : t + 1].any()


def tree_of(rows):
    """The arrays of a tree of combinations, sorted by size, then by types."""
    n_roots = sum(len(row) == 1 for row in rows)
    children = [sum(row[:-1] == node and len(row) > 1 for row in rows) for node in rows]
    child_n = n_roots + np.concatenate([[0], np.cumsum(children)])
    last = np.array([row[-1] for row in rows], dtype=np.int32)
    return last, child_n, n_roots, max(map(len, rows))


@given(
    seeds,
    st.sampled_from([63, 64, 65, 128, 129]),
    st.sampled_from([1, 3, 64, 66]),
    st.sampled_from([0, 1, 4, 70]),
    st.integers(1, 3),
)
def test_triggers_are_rising_edges_after_a_rest(seed, n_sessions, lookback, rest, size):
    rng = np.random.default_rng(seed)
    alerts = random_alerts(rng, 3, 4, n_sessions)
    cover = rng.random((3, 2, n_sessions)) < 0.8
    class_k = np.array([0, 1, 0, 1])
    first_t, stop_t = int(rng.integers(0, 5)), n_sessions - int(rng.integers(0, 5))
    combos = [tuple(map(int, c)) for c in naive.all_combinations("0123", size)]
    keep = rng.random(len(combos)) < 0.7
    wanted = [combo for combo, kept in zip(combos, keep, strict=True) if kept] or [(0,)]
    rows = sorted(
        {combo[:d] for combo in wanted for d in range(1, len(combo) + 1)},
        key=lambda combo: (len(combo), combo),
    )
    node, entity, session = triggers.find_triggers(
        packed(alerts), packed(cover), class_k, *tree_of(rows), 10, lookback, rest, first_t, stop_t
    )
    expected = []
    on_count = dict.fromkeys(rows, 0)
    for e, (r, types) in ((e, x) for e in range(3) for x in enumerate(rows)):
        was_on, last = False, -(10**9)
        for t in range(n_sessions):
            is_on = all(alerts[e, k, max(0, t - lookback + 1) : t + 1].any() for k in types)
            if is_on and not was_on and t - last >= rest:
                last = t
                if first_t <= t < stop_t and cover[e, class_k[list(types)], t].all():
                    expected.append((r, 10 + e, t))
            was_on = is_on
            on_count[types] += is_on
    found = list(zip(node.tolist(), entity.tolist(), session.tolist(), strict=True))
    assert sorted(found) == sorted(expected)
    assert [f[1:] for f in found] == sorted(f[1:] for f in found)
    for d in range(1, size + 1):
        level = [combo for combo in rows if len(combo) == d]
        if level:
            counted = triggers.count_on(packed(alerts), lookback, np.array(level))
            # an alert at the end may stay on past the calendar; the count need only bound triggers
            more = counted - np.array([on_count[combo] for combo in level])
            assert ((more >= 0) & (more <= 3 * (lookback - 1))).all()


def test_many_triggers_outgrow_the_first_buffer():
    alerts = np.zeros((1, 20, 1000), dtype=bool)
    alerts[:, :, ::2] = True
    cover = np.ones((1, 1, 1000), dtype=bool)
    rows = [(k,) for k in range(20)]
    found = triggers.find_triggers(
        packed(alerts), packed(cover), np.zeros(20, dtype=int), *tree_of(rows), 0, 1, 0, 0, 1000
    )
    assert (np.bincount(found[0]) == 500).all()
    assert (found[2].reshape(500, 20) == np.arange(0, 1000, 2)[:, None]).all()


def test_children_are_found_where_some_are_missing():
    last = np.array([9, 1, 2, 5, 8, 3], dtype=np.int32)
    told = [triggers.child_of(last, 1, 5, k) for k in range(11)]
    assert told == [-1, 1, 2, -1, -1, 3, -1, -1, 4, -1, -1]
    assert triggers.child_of(last, 3, 3, 5) == -1


def test_scatter_sorts_by_combination_and_drops():
    out = np.full(3, -1, dtype=np.int32), np.full(3, -1, dtype=np.int32)
    node = np.array([0, 1, 2, 0, 2], dtype=np.int32)
    entity, session = np.array([0, 0, 0, 1, 1]), np.array([1, 2, 3, 4, 5])
    label = np.zeros((2, 6), dtype=np.int16)
    label[1, 4] = 1
    every = node, entity, session, label
    assert triggers.count_triggers(*every, -1, 9, 3).tolist() == [2, 1, 2]
    assert triggers.count_triggers(*every, -1, 4, 3).tolist() == [1, 1, 1]
    assert triggers.count_triggers(*every, 0, 9, 3).tolist() == [1, 1, 2]
    next_n = np.array([2, -1, 0])
    triggers.scatter(*every, 0, next_n, *out)
    assert (out[0].tolist(), out[1].tolist()) == ([0, 1, 0], [3, 5, 1])
    assert next_n.tolist() == [3, -1, 2]


def test_a_table_is_cut_at_a_session():
    offset, entity = np.array([0, 2, 2, 5]), np.array([3, 4, 1, 1, 2], dtype=np.int32)
    session = np.array([7, 2, 1, 9, 3], dtype=np.int32)
    count = np.zeros(3, dtype=np.int64)
    triggers.count_before(offset, session, 7, count)
    assert count.tolist() == [1, 0, 2]
    out = np.zeros(3, dtype=np.int32), np.zeros(3, dtype=np.int32)
    triggers.take_before(np.array([0, 2]), offset, entity, session, 7, np.array([0, 1]), *out)
    assert (out[0].tolist(), out[1].tolist()) == ([4, 1, 2], [2, 1, 3])


# --- windows --------------------------------------------------------------------------------


@given(seeds, lengths, st.sampled_from([1, 2, 5, 64, 70]))
def test_windows_and_the_types_before_events(seed, n_sessions, reach):
    rng = np.random.default_rng(seed)
    entity, session = np.nonzero(rng.random((3, n_sessions)) < 0.1)
    is_window = bits.unpack(windows.mark_windows(entity, session, 3, n_sessions, reach), n_sessions)
    alerts = random_alerts(rng, 3, 3, n_sessions)
    is_seen = windows.types_before(entity, session, packed(alerts), reach)
    events = set(zip(entity.tolist(), session.tolist(), strict=True))
    for e, t in np.ndindex(3, n_sessions):
        assert is_window[e, t] == any((e, s) in events for s in range(t + 1, t + reach + 1))
    for v, (e, s) in enumerate(zip(entity, session, strict=True)):
        assert (is_seen[v] == alerts[e, :, max(0, s - reach) : s].any(axis=1)).all()


@given(seeds, st.integers(1, 6))
def test_slots_take_the_group_of_the_latest_open_cell(seed, horizon):
    rng = np.random.default_rng(seed)
    is_open, group = rng.random((3, 30)) < 0.3, rng.integers(0, 3, (3, 30)).astype(np.int16)
    slot = windows.slots(is_open, group, horizon)
    for e, s in np.ndindex(3, 30):
        open_t = [t for t in range(max(0, s - horizon), s) if is_open[e, t]]
        assert slot[e, s] == (group[e, open_t[-1]] if open_t else -1)


# --- margins --------------------------------------------------------------------------------


@given(seeds, st.sampled_from([0.1, 0.5, 0.9]))
def test_spells_totals_and_what_is_sure(seed, share):
    rng = np.random.default_rng(seed)
    is_open, group = rng.random((5, 12)) < 0.7, rng.integers(0, 2, (5, 12)).astype(np.int16)
    is_window = rng.random((5, 12)) < share
    spells = margins.find_spells(is_open, group)
    listed = list(zip(*spells, strict=True))
    cells = [(e, t, g) for e, a, b, g in listed for t in range(a, b)]
    assert cells == [(e, t, group[e, t]) for e, t in np.argwhere(is_open)]
    assert not any(  # spells are as long as they can be
        (e, b, g) == (f, a, h) for (e, _, b, g), (f, a, _, h) in pairwise(listed)
    )
    open_counts = margins.count_open(*spells, 5, 2, 12)
    window_counts = margins.count_windows(*spells, bits.pack_flags(is_window), 2, 12)
    counts = window_counts[0], open_counts[0], window_counts[1], open_counts[1]
    assert (counts[0] == (is_open & is_window).sum(axis=1)).all()
    assert (counts[1] == is_open.sum(axis=1)).all()
    for g in range(2):
        mine = is_open & (group == g)
        assert (counts[2][g] == (mine & is_window).sum(axis=0)).all()
        assert (counts[3][g] == mine.sum(axis=0)).all()

    column = np.where(is_open, group * 12 + np.arange(12), -1)
    open_rc = (column[:, :, None] == np.arange(24)).any(axis=1)
    z_rc = ((column[:, :, None] == np.arange(24)) & is_window[:, :, None]).any(axis=1)
    left_rc = naive.peel(open_rc, z_rc)
    row_order, col_order = margins.settle_sure(*spells, *counts)
    kept_rc = open_rc & (row_order == 0)[:, None] & (col_order.ravel() == 0)
    assert (kept_rc == left_rc).all()
    entity, session = np.nonzero(is_open)
    none = np.zeros((0, 0), dtype=bool)
    fit = margins.Rates(
        group,
        margins.single_groups(group),
        np.where(row_order == 0, 1.0, np.nan),
        np.where(col_order == 0, 1.0, np.nan),
        row_order,
        col_order,
        False,
        False,
        none,
        none,
    )
    q = margins.cell_rates(entity, session, fit)
    is_left = left_rc[entity, column[entity, session]]
    assert (q[is_left] == 0.5).all()
    assert (q[~is_left] == is_window[entity, session][~is_left]).all()


@given(seeds)
def test_rows_open_on_the_same_cells_are_found(seed):
    rng = np.random.default_rng(seed)
    kinds = rng.random((3, 70)) < 0.6
    is_open, group = kinds[rng.integers(0, 3, 8)], np.zeros((8, 70), dtype=np.int16)
    group[rng.random(8) < 0.3] = 1
    total = rng.integers(0, 2, 8)
    cells = OpenCells(is_open, Labels(("a", "b"), group))
    rows = np.flatnonzero(rng.random(8) < 0.8)
    order, number = cells.like_rows(rows, total)
    assert sorted(order) == rows.tolist()
    for i, j in np.ndindex(order.size, order.size):
        a, b = order[i], order[j]
        is_alike = (
            (is_open[a] == is_open[b]).all()
            and total[a] == total[b]
            and ((group[a] == group[b]) | ~is_open[a]).all()
        )
        assert (number[i] == number[j]) == is_alike


# --- hits -----------------------------------------------------------------------------------


def fit_of(q_et):
    """A fit whose rates are the given ones: every entity its own peer group."""
    n_entities, n_sessions = q_et.shape
    group_e = np.arange(n_entities, dtype=np.int16)
    none = np.zeros((0, 0), dtype=bool)
    return margins.Rates(
        np.repeat(group_e[:, None], n_sessions, axis=1),
        group_e,
        np.ones(n_entities),
        q_et / (1 - q_et),
        np.zeros(n_entities, dtype=np.int32),
        np.zeros(q_et.shape, dtype=np.int32),
        False,
        False,
        none,
        none,
    )


@given(seeds)
def test_tallies_clusters_and_neighbours(seed):
    rng = np.random.default_rng(seed)
    is_trigger = rng.random((4, 6, 40)) < rng.choice([0.0, 0.05, 0.3], (4, 1, 1))
    combo, entity, session = np.nonzero(is_trigger)
    offset = np.concatenate([[0], np.cumsum(is_trigger.sum(axis=(1, 2)))])
    q_et, is_window = rng.random((6, 40)), rng.random((6, 40)) < 0.4
    q, is_left = q_et[entity, session], rng.random(combo.size) < 0.8
    is_hit, window_ew = is_window[entity, session], bits.pack_flags(is_window)
    assert (hits.look_up(entity, session, window_ew) == is_hit).all()
    assert (hits.count_flags(offset, is_hit) == [is_hit[combo == c].sum() for c in range(4)]).all()
    row = rng.permutation(4)
    cells, fit = (row, offset, entity, session), fit_of(q_et)
    n, n_hits, expected, variance = hits.tally(*cells, fit, window_ew, is_left)
    p = hits.p_values(*cells, fit, n_hits, is_left)
    everything = np.ones(combo.size, dtype=bool)
    for with_all, with_none in zip(
        hits.tally(*cells, fit, window_ew, everything),
        hits.tally(*cells, fit, window_ew, everything[:0]),
        strict=True,
    ):
        assert (with_all == with_none).all()
    sums = hits.cluster_sums(row, offset, entity, session, is_hit, 7, 40)
    for i, c in enumerate(row):
        part = (combo == c) & is_left
        assert (n[i], n_hits[i]) == (part.sum(), (part & is_hit).sum())
        assert expected[i] == pytest.approx(q[part].sum())
        assert variance[i] == pytest.approx((q[part] * (1 - q[part])).sum())
        assert p[i] == pytest.approx(naive.poisson_binomial_tail(q[part], n_hits[i]), rel=1e-12)
        whole = combo == c
        y, size = is_hit[whole].astype(int).tolist(), int(whole.sum())
        block = (session[whole] // 7).tolist()
        names = [entity[whole].tolist(), block, list(zip(entity[whole], block, strict=True))]
        for square, m, clusters in zip(sums[:3], sums[3:], names, strict=True):
            assert m[i] == len(set(clusters))
            if m[i] > 1:
                v = m[i] / (m[i] - 1) * square[i] / size**2
                assert v == pytest.approx(naive.cluster_variance(y, clusters), abs=1e-12)

    is_mark = rng.random((6, 40)) < 0.05
    reach = int(rng.integers(0, 5))
    cell_entity, cell_session = np.nonzero(rng.random((6, 40)) < 0.3)
    marks = np.nonzero(is_mark)
    near = hits.near_any(cell_entity, cell_session, *marks, reach)
    open_ew = bits.pack_flags(np.ones((6, 40), dtype=bool))
    hits.close_around(open_ew, *marks, reach, 40)
    is_kept = np.ones(cell_entity.size, dtype=bool)
    hits.keep_open(cell_entity, cell_session, open_ew, is_kept)
    assert (near == ~is_kept).all()
    is_open = bits.unpack(open_ew, 40)
    for e, t in np.ndindex(6, 40):
        assert is_open[e, t] != is_mark[e, max(0, t - reach) : t + reach + 1].any()


# --- tails ----------------------------------------------------------------------------------

# From scipy's tests of poisson_binom, there from R's poisbinom (by Fourier transform, good to
# some 1e-13); the second by hand.
PUBLISHED = [
    (
        [0.9480654803913988, 0.052428488100509374, 0.25863527358887417, 0.057764076043633206],
        [0.0343763443678060, 0.6435428452689714, 0.2936345519235537, 0.0277036647503902,
         0.0007425936892786],
    ),
    ([0.1, 0.2, 0.3], [0.504, 0.398, 0.092, 0.006]),
]  # fmt: skip


@pytest.mark.parametrize(("q", "pmf"), PUBLISHED)
def test_published_poisson_binomial_values(q, pmf):
    for n_states in range(1, len(pmf) + 2):
        states, tail = tails.few_states(np.array(q), n_states)
        padded = [*pmf, 0.0][:n_states]
        np.testing.assert_allclose(states[:n_states], padded, atol=1e-12)
        assert tail == pytest.approx(sum(pmf[n_states:]), abs=1e-12)
    for least in range(len(pmf) + 1):
        assert tails.exact_tail(np.array(q), least) == pytest.approx(sum(pmf[least:]), abs=1e-12)


@given(st.lists(st.sampled_from([0.0, 1.0, 0.5, 1e-9, 0.03, 0.97]), max_size=9))
def test_exact_tails_by_enumeration(q):
    pmf = naive.poisson_binomial_by_enumeration(q)
    for least in range(len(q) + 2):
        found = tails.exact_tail(np.array(q), least)
        assert found == pytest.approx(min(1.0, sum(pmf[least:])), rel=1e-12, abs=1e-300)
        assert tails.upper_tail(np.array(q), least) == found


def test_exact_tails_keep_their_digits_however_small():
    """Rational arithmetic down to 1e-85; scipy where its own tail still has digits."""
    q = np.random.default_rng(1).beta(1, 20, 60)
    pmf = [Fraction(1)]
    for rate in map(Fraction, q.tolist()):
        grown = [a * (1 - rate) for a in pmf] + [Fraction(0)]
        pmf = [g + a * rate for g, a in zip(grown, [Fraction(0), *pmf], strict=True)]
    for least in range(1, 61):
        exact = float(sum(pmf[least:]))
        assert tails.exact_tail(q, least) == pytest.approx(exact, rel=1e-13, abs=0)
        if exact > 1e-9:
            assert poisson_binom.sf(least - 1, q) == pytest.approx(exact, rel=1e-5)
    assert float(pmf[60]) < 1e-85


@pytest.mark.parametrize("n", [50, 200, 1000, 5000])
def test_saddlepoint_tails_stay_close_down_to_1e_60(n):
    """Relative error under 0.5 % between 1e-60 and 0.5, short of the last three possible counts.

    Where sums are not exact (over 100,000 steps) it is under 5e-4.
    """
    rng = np.random.default_rng(n)
    reached = []
    for shape in (3, 10, 30):
        q = rng.beta(1, shape, n)
        q[rng.random(n) < 0.1] = 0.0
        q[rng.random(n) < 0.02] = 1.0
        start, stop = math.ceil(q.sum()), int((q > 0).sum()) - 2
        for least in range(start, stop, max(1, n // 500)):
            exact = tails.exact_tail(q, least)
            if exact < 1e-60:
                break
            bound = 5e-4 if n * least > tails.EXACT_WORK else 5e-3
            assert tails.saddlepoint_tail(q, least, 0.0)[0] == pytest.approx(
                exact, rel=bound, abs=0
            )
            assert tails.upper_tail(q, least) == pytest.approx(exact, rel=5e-4, abs=0)
            reached.append(exact)
    assert min(reached) < (1e-20 if n == 50 else 1e-55)


def test_upper_tails_at_the_edges_of_what_is_possible():
    q = np.concatenate([np.ones(400), np.zeros(50), np.full(300, 0.4)])
    assert tails.upper_tail(q, 400) == 1.0
    assert tails.upper_tail(q, 701) == 0.0
    assert tails.upper_tail(q, 700) == pytest.approx(0.4**300, rel=1e-12, abs=0)
    middle = tails.upper_tail(q, 520)
    assert middle == pytest.approx(tails.exact_tail(q[450:], 120), rel=1e-4)


@pytest.mark.parametrize(("n", "first", "last"), [(30, 0, 12), (400, 20, 90), (5000, 450, 680)])
def test_tables_of_tails_fall_and_agree(n, first, last):
    q = np.random.default_rng(n).beta(1, 8, n)
    table = tails.tail_table(q, first, last)
    exact = np.array([tails.exact_tail(q, x) for x in range(first, min(last, 1200) + 1)])
    told = table[: exact.size]
    assert (np.diff(np.log(np.maximum(table, tails.TINY))) < 2 * TIE).all()
    if n * (last + 1) <= tails.TABLE_WORK:
        np.testing.assert_allclose(told, exact, rtol=1e-11)
    else:  # joined between knots, over the width that draws have
        is_tail = exact < 0.5
        assert is_tail.sum() > 50
        np.testing.assert_allclose(np.log(told)[is_tail], np.log(exact)[is_tail], rtol=0, atol=TIE)
        np.testing.assert_allclose(told, exact, atol=0.02)


def test_tails_beside_the_mean_are_free_of_noise():
    """Where the saddlepoint's terms cancel, single chances are added; the mean moves over k."""
    q = np.random.default_rng(5).uniform(0.005, 0.05, 4000)
    least = int(q.sum()) + 1
    for scale in np.linspace((least - 1.0) / q.sum(), (least + 1.0) / q.sum(), 41):
        told, _ = tails.saddlepoint_tail(q * scale, least, 0.0)
        assert told == pytest.approx(tails.exact_tail(q * scale, least), rel=1e-6)


def test_ranks_of_draws_are_log_tails_of_the_observed_rates():
    rng = np.random.default_rng(4)
    offset, q = np.array([0, 30, 30, 90]), rng.beta(1, 5, 90)
    cells = np.zeros(90, dtype=np.int32), np.arange(90, dtype=np.int32)
    drawn = np.stack([rng.integers(0, 20, 8), np.zeros(8), rng.integers(5, 40, 8)]).astype(np.int32)
    ranks = hits.log_tail_ranks(
        np.array([2, 1, 0]), offset, *cells, fit_of(q[None]), np.ascontiguousarray(drawn[::-1])
    )
    for i, c in enumerate((2, 1, 0)):
        for r in range(8):
            exact = naive.poisson_binomial_tail(q[offset[c] : offset[c + 1]], int(drawn[c, r]))
            assert ranks[i, r] == pytest.approx(math.log(exact), rel=1e-6, abs=1e-6)


@given(st.lists(st.floats(1e-6, 1 - 1e-6), min_size=1, max_size=30), st.floats(0.02, 0.98))
def test_the_tilt_reaches_the_total(q, share):
    total = share * len(q)
    log_odds, spread = tails.tilt_to(np.array(q), total, 0.0)
    tilted = tails.tilt(np.array(q), log_odds)
    assert tilted.sum() == pytest.approx(total, rel=1e-9)
    assert spread == pytest.approx((tilted * (1 - tilted)).sum(), rel=1e-9)
    assert log_odds == pytest.approx(naive.solve_tilt(q, total), rel=1e-6, abs=1e-6)
    assert tails.tilt(np.array([0.0, 1.0]), log_odds).tolist() == [0.0, 1.0]


@given(seeds, st.integers(0, 12), st.integers(1, 12))
def test_sharper_by_the_twins_quadrature(seed, n_rest, n_own):
    """Rates of 0 and 1 included; hits on sure cells are what they must be."""
    rng = np.random.default_rng(seed)
    q = rng.choice([0.0, 1.0, *[0.02, 0.2, 0.5, 0.8] * 2], n_rest + n_own)
    is_hit = np.where((q > 0) & (q < 1), rng.random(q.size) < 0.5, q == 1)
    rest, own = [("a", 10 * i) for i in range(n_rest)], [("b", 10 * i) for i in range(n_own)]
    rate = dict(zip([*rest, *own], q.tolist(), strict=True))
    hit_cells = {cell for cell, hit in zip(rate, is_hit, strict=True) if hit}
    found = tails.sharper_p_value(
        q[:n_rest], int(is_hit[:n_rest].sum()), q[n_rest:], int(is_hit[n_rest:].sum()),
        NODES, WEIGHTS,
    )  # fmt: skip
    expected = naive.sharper_p(rest, own, rate, hit_cells, 3)
    assert found == pytest.approx(expected, rel=1e-7)


# --- shifts ---------------------------------------------------------------------------------


def shift_p(circles: list[tuple[list[int], list[int]]], observed: int) -> float:
    """P of one combination whose entities have the given trigger positions and windows."""
    entity = np.repeat(np.arange(len(circles)), [len(pos) for pos, _ in circles])
    session = np.concatenate([np.array(pos, dtype=int) for pos, _ in circles])
    window = [np.flatnonzero(z) for _, z in circles]
    ends = np.cumsum([0] + [len(w) for w in window])
    n = len(circles)
    lives = np.arange(n + 1), np.zeros(n, dtype=int), np.array([len(z) for _, z in circles])
    turned = shifts.rings(*lives, ends, np.concatenate(window).astype(np.int32))
    return shifts.shift_p_values(
        np.array([0]), np.array([0, entity.size]), entity, session, np.array([observed]),
        *lives, np.diff(ends), *turned,
    )[0]  # fmt: skip


@pytest.mark.parametrize("n_entities", [300, 900])
def test_many_entities_own_timing_by_saddlepoint_is_the_sum_state_by_state(n_entities):
    """Above sixty hits the joined law comes from the saddlepoint: compared with convolution."""
    rng = np.random.default_rng(n_entities)
    circles, laws = [], []
    for _ in range(n_entities):
        n = int(rng.integers(150, 300))
        z = np.zeros(n, dtype=bool)
        z[rng.integers(0, n, 4)[:, None] + np.arange(6)[None, :] - 6] = True
        positions = np.sort(rng.choice(n, rng.integers(1, 8), replace=False))
        circles.append((positions.tolist(), z.tolist()))
        counts = [z[(positions + s) % n].sum() for s in range(n)]
        laws.append(np.bincount(counts) / n)
    mean = sum(float(law @ np.arange(law.size)) for law in laws)
    law = np.ones(1)
    for part in laws:
        law = np.convolve(law, part)
    assert mean > 2 * tails.EXACT_STATES
    for observed in (int(mean) - 15, int(mean) + 1, int(mean * 1.2), int(mean * 1.5)):
        exact = float(law[observed:].sum())
        assert exact > 1e-40
        assert shift_p(circles, observed) == pytest.approx(exact, rel=2e-5)


def test_circular_shifts_by_enumeration():
    """Two entities, ten sessions: hits of the sum 0..5 are 15, 27, 30, 20, 7, 1 of a hundred."""
    one = [0, 3, 8], [1, 1, 0, 1, 0, 0, 0, 0, 1, 0]
    two = [1, 5], [0, 1, 1, 0, 0, 0, 1, 0, 0, 0]
    ways = [15, 27, 30, 20, 7, 1]
    for observed in range(6):
        assert shift_p([one, two], observed) == pytest.approx(sum(ways[observed:]) / 100)
    assert shift_p([one, two], 4) == pytest.approx(0.08)


@given(seeds, st.integers(1, 4))
def test_shifts_of_broken_lives_are_the_twins(seed, n_entities):
    rng = np.random.default_rng(seed)
    n_sessions = 40
    circles, parts, observed = [], [], 0
    for e in range(n_entities):
        is_life = np.repeat(rng.random(8) < 0.7, 5)
        life = np.flatnonzero(is_life)
        z = (rng.random(life.size) < 0.3).astype(int)
        place = np.flatnonzero(rng.random(life.size) < 0.2)
        observed += z[place].sum()
        circles.append((place.tolist(), z.tolist()))
        parts.append((e, is_life, life[place], life[z == 1]))
    is_life_et = np.array([p[1] for p in parts])
    runs = margins.find_spells(is_life_et, np.zeros((n_entities, n_sessions), dtype=np.int16))
    session = np.concatenate([p[2] for p in parts])
    lives = np.searchsorted(runs[0], np.arange(n_entities + 1)), runs[1], runs[2]
    ends = np.cumsum([0] + [len(p[3]) for p in parts])
    turned = shifts.rings(*lives, ends, np.concatenate([p[3] for p in parts]).astype(np.int32))
    found = shifts.shift_p_values(
        np.array([0]), np.array([0, session.size]),
        np.repeat(np.arange(n_entities), [len(p[2]) for p in parts]), session,
        np.array([observed]), *lives, np.diff(ends), *turned,
    )[0]  # fmt: skip
    pmf = naive.own_timing_pmf((place, z) for place, z in circles if place)
    assert found == pytest.approx(1.0 if observed == 0 else sum(pmf[observed:]), rel=1e-12)


# --- exchanges ------------------------------------------------------------------------------


def run_exchanges(entity, session, slot_et, n_sweeps, seed):
    """Sessions of the events after each sweep, and the offsets of the entities' events."""
    entity, session = np.array(entity, dtype=np.int32), np.array(session, dtype=np.int32)
    first = np.searchsorted(entity, np.arange(slot_et.shape[0] + 1))
    _, pool = np.unique(slot_et[entity, session], return_inverse=True)
    start = np.concatenate([[0], np.cumsum(np.bincount(pool))])
    member = np.argsort(pool, kind="stable").astype(np.int32)
    random = np.random.default_rng(seed).integers(
        0, 1 << 32, (n_sweeps, entity.size), dtype=np.uint32
    )
    kept = exchanges.exchange(
        session, entity, pool.astype(np.int32), start, member, slot_et, random, n_sweeps
    )
    return kept, first


@given(seeds)
def test_exchanges_hold_margins_and_reach(seed):
    rng = np.random.default_rng(seed)
    slot_et = np.repeat(rng.integers(-1, 2, (6, 6)), 5, axis=1).astype(np.int16)
    is_event = (rng.random((6, 30)) < 0.3) & (slot_et >= 0)
    is_event[0, 0], slot_et[0, 0] = True, 0
    entity, session = np.nonzero(is_event)
    kept, _ = run_exchanges(entity, session, slot_et, 20, seed)
    group = slot_et[entity, session]
    for drawn in kept:
        assert len(set(zip(entity, drawn, strict=True))) == entity.size
        assert (slot_et[entity, drawn] == group).all()
        assert Counter(zip(group, drawn, strict=True)) == Counter(zip(group, session, strict=True))


def test_exchanges_reach_every_world_equally_often():
    """Two groups, a change of group, a late start and a doubled session; the whole orbit."""
    n_sessions, horizon = 20, 2
    events = [(0, 5), (0, 14), (1, 8), (1, 13), (2, 7), (2, 8), (2, 13), (3, 5), (3, 17)]
    group = np.zeros((4, n_sessions), dtype=np.int16)
    group[0, 10:] = group[3] = 1
    is_open = np.ones((4, n_sessions), dtype=bool)
    is_open[:, 18:] = is_open[1, :6] = False
    slot_et = windows.slots(is_open, group, horizon)
    names = "abcd"
    world = naive.World(
        n_sessions=n_sessions, alerts=frozenset({("a", "x", 3)}),
        events=frozenset((names[e], "boom", s) for e, s in events), known=tuple(names),
        targets=("boom",), lookback=1, horizon=horizon, rest=horizon, max_size=1, min_triggers=1,
        min_hits=1, discovery_end=19, holdout_start=20,
        coverage=tuple((name, "", 6 if name == "b" else None, None) for name in names),
        peers=(("a", None, 9, "n"), ("a", 10, None, "s"), ("b", None, None, "n"),
               ("c", None, None, "n"), ("d", None, None, "s")),
    )  # fmt: skip
    orbit = naive.exchange_orbit(world, ("boom", "all"), (0, 19))
    kept, _ = run_exchanges(*zip(*events, strict=True), slot_et, 60_000, 1)
    visits = Counter(
        frozenset((names[e], int(s)) for (e, _), s in zip(events, drawn, strict=True))
        for drawn in kept[::10]
    )
    assert 4 <= len(orbit) <= 60
    assert set(visits) == orbit
    even = visits.total() / len(orbit)
    statistic = sum((n - even) ** 2 / even for n in visits.values())
    assert statistic < chi2.ppf(0.999, len(orbit) - 1)


HOEFFDING_C = np.array([[3, 0, 1, 2], [1, 2, 0, 0], [0, 1, 4, 1], [2, 0, 1, 1]])


def test_hits_over_all_exchanges_follow_hoeffding_1951():
    """One event an entity: hits are the sum of c(i, pi(i)); all 24 worlds counted at one go."""
    sessions = np.array([20, 40, 60, 80])
    cells = [(i, sessions[j] - 8 + 2 * m) for i in range(4) for j in range(4)
             for m in range(HOEFFDING_C[i, j])]  # fmt: skip
    entity, session = np.array(cells, dtype=np.int32).T
    drawn = np.array([sessions[list(order)] for order in permutations(range(4))], dtype=np.int32)

    def count(session_rv):
        offset = np.array([0, len(cells)])
        return exchanges.count_hits(session_rv, np.arange(5), offset, entity, session, 8, 100, 5)

    counted = count(drawn)[0]
    assert (counted.mean(), counted.var()) == pytest.approx((4.75, 5.6875))
    assert (counted >= 10).sum() == 2
    assert count(sessions[None].astype(np.int32)).tolist() == [np.trace(HOEFFDING_C)] == [10]
    kept, _ = run_exchanges(range(4), sessions, np.zeros((4, 100), dtype=np.int16), 20_000, 3)
    chain = np.concatenate([count(part)[0] for part in np.split(kept[::5], 16)])
    assert chain.mean() == pytest.approx(4.75, abs=4 * math.sqrt(5.6875 / 4000))
    assert chain.var() == pytest.approx(5.6875, rel=0.1)


@given(seeds, st.integers(1, 512), st.sampled_from([5, 64, 130]))
def test_hits_of_many_draws_are_counted_one_by_one(seed, n_draws, n_sessions):
    rng = np.random.default_rng(seed)
    n_entities, horizon = 5, int(rng.integers(1, 5))
    per_entity = rng.integers(0, 4, n_entities)
    first = np.concatenate([[0], np.cumsum(per_entity)])
    owner = np.repeat(np.arange(n_entities), per_entity)
    drawn = rng.integers(0, n_sessions, (n_draws, owner.size)).astype(np.int32)
    is_trigger = rng.random((3, n_entities, n_sessions)) < 0.2
    _, entity, session = np.nonzero(is_trigger)
    offset = np.concatenate([[0], np.cumsum(is_trigger.sum(axis=(1, 2)))])
    planes = max(4, int(np.diff(offset).max()).bit_length())
    found = exchanges.count_hits(drawn, first, offset, entity, session, horizon, n_sessions, planes)
    for r in range(n_draws):
        window_ew = windows.mark_windows(owner, drawn[r], n_entities, n_sessions, horizon)
        is_window = bits.unpack(window_ew, n_sessions)
        assert (found[:, r] == [(is_trigger[c] & is_window).sum() for c in range(3)]).all()


def test_hits_are_counted_across_blocks_of_entities():
    """Long calendars are counted block by block; blocks without events are passed over."""
    rng = np.random.default_rng(8)
    n_entities, n_sessions = 120, 3000
    assert exchanges.CELLS_A_BLOCK // n_sessions < 40  # at least three blocks
    events = np.sort(np.concatenate([rng.integers(0, 10, 40), rng.integers(105, 120, 40)]))
    first = np.searchsorted(events, np.arange(n_entities + 1))
    drawn = rng.integers(0, n_sessions, (130, events.size)).astype(np.int32)
    is_trigger = rng.random((2, n_entities, n_sessions)) < 0.02
    _, entity, session = np.nonzero(is_trigger)
    offset = np.concatenate([[0], np.cumsum(is_trigger.sum(axis=(1, 2)))])
    found = exchanges.count_hits(drawn, first, offset, entity, session, 5, n_sessions, 15)
    for r in (0, 63, 64, 129):
        window_ew = windows.mark_windows(events, drawn[r], n_entities, n_sessions, 5)
        is_window = bits.unpack(window_ew, n_sessions)
        assert (found[:, r] == [(is_trigger[c] & is_window).sum() for c in range(2)]).all()
