"""No p of 0 and no NaN, fits that settle or say why not, counts beyond 2^31, other processors."""

import json
import math
import os
import re
import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tiny_worlds import random_world, write_study

from miner import hunt
from miner.assemble import CodedLog, _n_distinct
from miner.columns import HAZARD, ODDS
from miner.kernels import hits, shifts, tails
from miner.kernels.margins import Rates
from miner.kernels.tails import TINY
from miner.nulls.margins import fit_margins
from miner.nulls.unsettled import ENOUGH, unsettled
from miner.panel import Labels
from miner.report.words import p_text as report_p
from miner.summary import p_text as screen_p
from miner.trades.significance import clustered_mean

EVERY = np.empty(0, dtype=bool)  # no trigger is left out
NODES, WEIGHTS = np.polynomial.hermite.hermgauss(21)


def log_tail(q, least):
    """log P(X >= least) for equal chances q of n trials, summed in logarithms."""
    n, chance = q.size, q[0]
    x = np.arange(least, n + 1)
    log_p = [
        math.lgamma(n + 1) - math.lgamma(i + 1) - math.lgamma(n - i + 1)
        + i * math.log(chance) + (n - i) * math.log1p(-chance)
        for i in x.tolist()
    ]  # fmt: skip
    top = max(log_p)
    return top + math.log(sum(math.exp(p - top) for p in log_p))


def rates_of(chance):
    """A fit of one entity on one session with this chance."""
    zero = np.zeros((1, 1), dtype=np.int16)
    none = np.zeros((1, 1), dtype=bool)
    odds = np.array([chance / (1 - chance)])
    order = np.zeros(1, dtype=np.int32), np.zeros((1, 1), dtype=np.int32)
    return Rates(zero, zero[0], odds, np.ones((1, 1)), *order, False, False, none, none)


def p_value(chance, n, n_hits):
    """p of one combination with n triggers of equal chance."""
    cells = np.zeros((2, n), dtype=np.int32)
    row, offset = np.zeros(1, dtype=np.int64), np.array([0, n])
    return hits.p_values(row, offset, *cells, rates_of(chance), np.array([n_hits]), EVERY)[0]


# p-values


@pytest.mark.parametrize("chance", [1e-300, 1e-30, 1e-4, 0.02, 0.5, 0.999, 1 - 1e-12])
@pytest.mark.parametrize("n", [1, 59, 61, 2_000, 10_000])
def test_tails_are_in_reach_and_never_nan_however_extreme(n, chance):
    """Hits from none to all; p falls with the hits and is the true one where that can be held."""
    least = np.unique(np.clip([1, 2, 3, 60, 61, 100, n // 3, n // 2, n - 10, n - 1, n], 1, n))
    p = [p_value(chance, n, x) for x in least.tolist()]
    assert all(TINY <= x <= 1.0 for x in p)
    assert all(a >= b * (1 - 1e-9) for a, b in pairwise(p))
    for x, found in zip(least.tolist(), p, strict=True):
        true = log_tail(np.full(n, chance), x)
        if true > math.log(TINY) + 1:
            assert math.log(found) == pytest.approx(true, abs=1e-4)
        else:
            assert found <= 3 * TINY


def test_ten_thousand_hits_of_ten_thousand_are_a_bound():
    for n_hits in (9_000, 9_990, 9_999, 10_000):
        assert p_value(1e-4, 10_000, n_hits) == TINY
    q = np.full(10_000, 1e-4)
    assert tails.sharper_p_value(q, 1, q, 10_000, NODES, WEIGHTS) == TINY


@pytest.mark.parametrize("write", [report_p, screen_p])
def test_a_p_below_the_smallest_is_written_as_a_bound(write):
    assert write(TINY) == "< 1e-300"
    assert write(0.0) == "< 1e-300"
    assert write(2e-300) == "2e-300"
    assert write(0.04999) == "0.05"


@given(st.integers(0, 2**32 - 1))
def test_sharper_p_values_are_never_0_or_nan(seed):
    rng = np.random.default_rng(seed)
    n_rest, n_own = (int(n) for n in rng.integers(0, 200, 2))
    near = rng.choice([0.0, 1e-300, 1e-17, 1e-4, 0.3, 1 - 1e-16, 1.0], size=3)
    rest, own = rng.choice(near, n_rest), rng.choice(near, n_own)
    n_hits = int(rng.integers(0, n_rest + 1)), int(rng.integers(0, n_own + 1))
    p = tails.sharper_p_value(rest, n_hits[0], own, n_hits[1], NODES, WEIGHTS)
    assert TINY <= p <= 1.0


def test_own_timing_of_a_certain_chain_is_a_bound():
    """400 entities, each with two triggers that both hit on one of 3,000 shifts."""
    n, length = 400, 3_000
    triggers = np.tile([10, 900], n).astype(np.int32)
    lives = np.arange(n + 1), np.zeros(n, dtype=np.int32), np.full(n, length, dtype=np.int32)
    p = shifts.shift_p_values(
        np.zeros(1, dtype=np.int64),
        np.array([0, 2 * n]),
        np.repeat(np.arange(n), 2).astype(np.int32),
        triggers,
        np.array([2 * n]),
        *lives,
        np.full(n, 2),
        *shifts.rings(*lives, 2 * np.arange(n + 1), triggers),
    )
    assert p[0] == TINY


def test_trades_that_always_win_have_a_p_above_0():
    rng = np.random.default_rng(0)
    value = 1.0 + rng.normal(0, 1e-9, 4_000)
    found = clustered_mean(value, np.arange(4_000), np.arange(4_000))
    assert found.mean / found.error > 1e9
    assert TINY <= found.p_value < 1e-100


@pytest.fixture(scope="module")
def certain(tmp_path_factory):
    """A run in which 3,000 triggers of one type are followed by an event, all of them, and no
    other session is: p is far below the smallest double."""
    folder = tmp_path_factory.mktemp("certain")
    rng = np.random.default_rng(0)
    n_entities, n_sessions = 150, 400
    day = np.datetime64("2021-01-01")
    alerts, events = [], []
    for e in range(n_entities):
        t = int(rng.integers(2, 9))
        while t < n_sessions - 2:
            alerts.append((f"n{e}", f"{day + t} 12:00:00", "sure"))
            events.append((f"n{e}", f"{day + t + 1} 12:00:00", "upset"))
            t += int(rng.integers(6, 25))
    for name, rows in (("alerts", alerts), ("events", events)):
        frame = pd.DataFrame(rows, columns=["entity", "time", "type"])
        frame.to_csv(folder / f"{name}.csv", index=False)
    (folder / "study.toml").write_text(
        '[alerts]\nsource = "alerts.csv"\n[events]\nsource = "events.csv"\n'
        '[sessions]\ncalendar = "daily"\n[windows]\nlookback = 1\nhorizon = 1\n'
        "[testing]\nplacebo = 1\npermutations = 20\n[holdout]\nfolds = 1\n"
    )
    run = folder / "run"
    return hunt(folder / "study.toml", run, n_workers=1), run


def test_no_file_of_a_run_holds_a_p_of_0_or_nan(certain):
    result, run = certain
    row = result.candidates.iloc[0]
    assert row["triggers"] == row["hits"] > 1_000
    assert row["p_value"] == TINY
    for name in ("p_value", "q_value", "p_own_timing", "holdout_p_value"):
        values = pd.read_csv(run / "candidates.csv")[name].dropna().astype(float)
        assert len(values) > 0
        assert values.between(TINY / 2, 1).all()
    for table in ("candidates.csv", "rules.csv", "walk_forward.csv", "quarters.csv"):
        cells = re.split(r"[,\n]", (run / table).read_text())
        assert not {cell.lower() for cell in cells} & {"nan", "inf", "-inf", "<na>"}

    def ps(value, name=""):
        if isinstance(value, dict):
            for key, item in value.items():
                yield from ps(item, key)
        elif isinstance(value, list):
            for item in value:
                yield from ps(item, name)
        elif isinstance(value, float | int) and re.fullmatch(r"p|p_.*|.*_p|adjusted", name):
            yield value

    found = list(ps(json.loads((run / "run.json").read_text())))
    assert len(found) >= 3
    assert all(0 < p <= 1 for p in found)
    html = (run / "report.html").read_text()
    assert "&lt; 1e-300" in html
    assert not re.search(r">\s*(nan|0\.0+e\+00|inf)\s*<", html, re.IGNORECASE)


# margins


def random_table(rng):
    """A table of any awkward kind: stairs with flips, blocks with bridges, full and empty rows."""
    n, m = (int(k) for k in rng.integers(2, 13, 2))
    kind = rng.integers(4)
    is_set = np.add.outer(np.arange(n), np.arange(m)) >= (n + m) // 2
    if kind == 1:
        is_set = rng.random((n, m)) < rng.choice([0.05, 0.5, 0.95])
    elif kind == 2:
        is_set = np.add.outer(np.arange(n) // 2, np.arange(m) // 2) % 2 == 0
    flips = rng.random((n, m)) < rng.choice([0.0, 0.03, 0.1])
    is_set = is_set ^ flips
    is_set[rng.random(n) < 0.1] = True
    is_set[rng.random(n) < 0.1] = False
    is_open = rng.random((n, m)) < rng.choice([0.4, 0.9, 1.0])
    code = rng.integers(0, int(rng.integers(1, 5)), (n, m)).astype(np.int16)
    return is_open, is_set & is_open, Labels(("a", "b", "c", "d"), code)  # some without a member


@given(st.integers(0, 2**32 - 1), st.sampled_from([ODDS, HAZARD]))
def test_any_table_settles_or_says_what_prevents_it(seed, law):
    is_open, is_set, peers = random_table(np.random.default_rng(seed))
    margins = fit_margins(is_open, is_set, peers, law=law)
    cells = np.nonzero(is_open)
    q = margins.rates(*cells)
    assert np.isfinite(q).all()
    assert ((q >= 0) & (q <= 1)).all()
    q_et = np.zeros(is_open.shape)
    q_et[cells] = q
    missed = np.abs(q_et.sum(axis=1) - is_set.sum(axis=1)) / np.maximum(is_set.sum(axis=1), 1)
    stuck = unsettled(margins, is_open, is_set)
    if stuck is None:
        assert missed.max() <= 10 * ENOUGH
    else:
        assert (stuck.entity is None) != (stuck.group is None)


def stairs(n, flips, seed):
    """A table that is nearly one of stairs, the shape with one solution only."""
    rng = np.random.default_rng(seed)
    is_set = np.add.outer(np.arange(n), np.arange(n)) >= n
    for i, j in rng.integers(0, n, (flips, 2)):
        is_set[i, j] ^= True
    return np.ones_like(is_set), is_set, Labels(("",), np.zeros(is_set.shape, dtype=np.int16))


def test_a_fit_that_does_not_settle_names_the_total_it_misses_by_most():
    is_open, is_set, peers = stairs(200, 10, 210)
    margins = fit_margins(is_open, is_set, peers)
    stuck = unsettled(margins, is_open, is_set)
    assert stuck is not None
    q = margins.rates(*np.nonzero(is_open)).reshape(is_open.shape)
    off = [np.abs(q.sum(axis=a) - is_set.sum(axis=a)) / is_set.sum(axis=a).clip(1) for a in (1, 0)]
    if stuck.entity is not None:
        axis, at = 1, stuck.entity
    else:
        axis, at = 0, stuck.session
    assert off[1 - axis][at] == max(off[0].max(), off[1].max())
    assert stuck.observed == is_set.sum(axis=axis)[at]
    assert stuck.fitted == pytest.approx(q.sum(axis=axis)[at])
    assert stuck.fitted != stuck.observed


def test_a_study_whose_fit_does_not_settle_is_told(tmp_path, monkeypatch):
    from miner.nulls import margins

    monkeypatch.setattr(margins, "PATIENCE", 1)
    monkeypatch.setattr(margins, "MOST_SWEEPS", 1)
    world = random_world(3, groups="none", coverage=False)
    warnings = hunt(write_study(world, tmp_path, placebo=0), n_workers=1).evidence["warnings"]
    told = [text for text in warnings if "did not settle" in text]
    assert len(told) == len(world.targets)
    assert re.search(r"for (entity '|\d{4}-\d\d-\d\d in peer group)", told[0])


# counts beyond 2^31: arrays that repeat one element take no memory

BEYOND = 2**31 + 2


def repeated(value, dtype, n=BEYOND + 6):
    return np.broadcast_to(np.array(value, dtype=dtype), n)


def test_triggers_beyond_2_31_are_tallied_and_tested():
    offset = np.array([0, BEYOND, BEYOND + 6])
    row = np.array([1])
    where = repeated(0, np.int32), repeated(0, np.int32)
    window = np.ones((1, 1), dtype=np.uint64)
    n, n_hits, expected, variance = hits.tally(row, offset, *where, rates_of(0.25), window, EVERY)
    assert (n[0], n_hits[0], expected[0]) == (6, 6, 1.5)
    assert variance[0] == pytest.approx(6 * 0.25 * 0.75)
    p = hits.p_values(row, offset, *where, rates_of(0.25), np.array([6]), EVERY)
    assert p[0] == pytest.approx(0.25**6)
    sums = hits.cluster_sums(row, offset, *where, repeated(True, bool), 5, 20)
    assert [int(x[0]) for x in sums[3:]] == [1, 1, 1]


def test_own_timing_beyond_2_31():
    one = np.zeros(1, dtype=np.int32)
    lives = np.array([0, 1]), one, one + 10
    p = shifts.shift_p_values(
        np.array([1]),
        np.array([0, BEYOND, BEYOND + 1]),
        repeated(0, np.int32),
        repeated(5, np.int32),
        np.array([1]),
        *lives,
        np.array([1]),
        *shifts.rings(*lives, np.array([0, 1]), one + 5),
    )
    assert p[0] == pytest.approx(0.1)


def test_keys_of_rows_do_not_overflow():
    """100,000 entities x 40,000 types x 2,000 sessions are 8e12 keys: beyond 32 bits."""
    entity = np.array([99_999, 99_999, 12_345, 99_999], dtype=np.int32)
    kind = np.array([39_999, 39_998, 39_999, 39_999], dtype=np.int32)
    session = np.array([1_999, 1_999, 1_999, 1_999], dtype=np.int32)
    assert _n_distinct(CodedLog(entity, kind, session, 0, 0), 40_000, 2_000) == 3
    # (0, 5) and (2^16, 5) would be one cell in 32 bits, since blocks go up to 2^16 - 1
    value = np.array([3.0, 3.0, 3.0, 3.0, -6.0, -6.0])
    entity = np.array([0, 0, 2**16, 2**16, 1, 1], dtype=np.int32)
    block = np.array([5, 6, 5, 6, 2**16 - 1, 2**16 - 1], dtype=np.int32)
    # squared totals by entity, and by block, and by both: 216, 216 and 180
    variance = (216 * 3 / 2 + 216 * 3 / 2 - 180 * 5 / 4) / 36
    assert clustered_mean(value, entity, block).error == pytest.approx(math.sqrt(variance))


def test_offsets_of_a_hunt_have_64_bits(case_of):
    from miner.nulls.exchanges import Exchanger

    case = case_of(1)
    assert case.unit.triggers.offset_c.dtype == np.int64
    assert case.hits_c.dtype == np.int64
    exchanger = Exchanger(case, 1, "test")
    assert exchanger.first_event_e.dtype == np.int64
    assert exchanger._pools[1].dtype == np.int64


# other processors


PLAIN = """
import sys
from numpy._core._multiarray_umath import __cpu_features__ as has
from miner import hunt
result = hunt(sys.argv[1], n_workers=1)
result.candidates.to_json(sys.argv[2], double_precision=15)
print(sum(bool(has.get(name)) for name in sys.argv[3:]))
"""


@pytest.mark.slow
def test_results_are_the_same_without_wide_vectors(tmp_path):
    """numpy's and the kernels' plain code: counts and texts equal, numbers to 1e-9."""
    from numpy._core._multiarray_umath import __cpu_dispatch__, __cpu_features__

    path = write_study(random_world(3), tmp_path, permutations=200)
    wide = [name for name in __cpu_dispatch__ if __cpu_features__.get(name)]
    if not wide:
        pytest.skip("this numpy has no wide paths here")
    plain = {
        "NPY_DISABLE_CPU_FEATURES": " ".join(wide),
        "NUMBA_CPU_NAME": "generic",
        "NUMBA_CPU_FEATURES": "",
    }
    frames = []
    for name, more in (("wide", {}), ("plain", plain)):
        out = tmp_path / f"{name}.json"
        command = [sys.executable, "-c", PLAIN, str(path), str(out), *wide]
        told = subprocess.run(
            command,
            env=os.environ | more,
            cwd=Path(__file__).parents[1],
            capture_output=True,
            text=True,
            check=True,
        )
        frames.append(pd.read_json(out))
        assert int(told.stdout) == (len(wide) if name == "wide" else 0)
    assert len(frames[0]) > 10
    pd.testing.assert_frame_equal(*frames, rtol=1e-9, atol=1e-300, check_exact=False)
