"""Hands on the part "review": what looking again every quarter proposes, over simulated quarters.

Each task is a block of worlds; a world's triggers are seen by every way of judging them.
"""

from __future__ import annotations

import zlib
from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from scipy.stats import binom

from miner.sequential.change import change_points
from miner.sequential.clusters import HANG_TOGETHER, hang_together
from miner.sequential.evidence import e_process
from miner.sequential.interval import confidence_sequence
from miner.sequential.online import PROCEDURES
from tests.calibration import review_worlds as worlds
from tests.calibration import weekly_counts
from tests.calibration.fitted_rates import fitted_quarter
from tests.calibration.level import Tasks
from tests.calibration.new_rules import stream_of_rules

QUARTERS, SOON = 20, 8
BAR = np.log(20.0)
BLOCK = 25  # worlds a task
KEEPS = (1.0, 0.9, 0.8, 0.7)
RATES, PROMISES = (3, 8, 30, 100), (0.05, 0.2, 0.4)
CLUSTERED = "bursts, sector shocks, repeats"
RESTARTS = (0, 2, 4, 8)
# quarters before the precision is halved, precision over promise until then
DECAYS = ((0, 1.0), (8, 1.0), (8, 1.25), (12, 1.25))
WEEKS, SINCE = 104, 95
RATIOS = (1.0, 0.5, 0.7, 1.3)


def _random(key: dict[str, Any]) -> np.random.Generator:
    return np.random.default_rng([zlib.crc32(repr(sorted(key.items())).encode())])


def _last(n_quarters: int) -> np.ndarray:
    return np.arange(1, n_quarters + 1) * worlds.SESSIONS - 1


def _seen(
    triggers: worlds.Triggers,
    rate: float | np.ndarray,
    n_quarters: int,
    direction: str,
    reference: float,
    restart: int = 4,
    how: str = "peers",
    horizon: int = 5,
) -> np.ndarray:
    """Log evidence after each quarter."""
    t = triggers
    hang = hang_together(t.entity, t.session, t.sector, horizon, _last(n_quarters), how)
    rate_i = np.broadcast_to(rate, t.session.shape)
    made = e_process(
        t.is_hit, rate_i, hang, n_quarters, direction, reference, restart, is_each_cluster=False
    )
    return made.log_e_q


def _naive(triggers: worlds.Triggers, rate_q: np.ndarray, direction: str) -> bool:
    """Whether a binomial test of any quarter alone is at or below 5 %."""
    quarter = (triggers.session + 5) // worlds.SESSIONS
    n_q = np.bincount(quarter, minlength=rate_q.size)
    hits_q = np.bincount(quarter, weights=triggers.is_hit, minlength=rate_q.size)
    up, down = binom.sf(hits_q - 1, n_q, rate_q), binom.cdf(hits_q, n_q, rate_q)
    return bool(((up if direction == "up" else down) <= 0.05).any())


def promise(key: dict[str, Any]) -> dict[str, list[int]]:
    """Rules at their promise for five years and rules at half of it for two; and "works"."""
    random, kind = _random(key), worlds.KINDS[key["kind"]]
    p, rate = key["promise"], key["rate"]
    out: dict[str, list[int]] = {}

    def note(name: str, kept: bool, fallen: bool) -> None:
        counts = out.setdefault(name, [0, 0])
        counts[0] += bool(kept)
        counts[1] += bool(fallen)

    swing_q = p * np.where(np.arange(QUARTERS) % 2, 1.4, 0.6)  # expected rates that move
    for _ in range(BLOCK):
        at = worlds.draw(random, kind, rate, np.full(QUARTERS, p), 5)
        half = worlds.draw(random, kind, rate, np.full(SOON, p / 2), 5)
        for keep in KEEPS:
            floor = p * keep
            note(
                f"keep {keep}",
                _seen(at, floor, QUARTERS, "down", floor).max() >= BAR,
                _seen(half, floor, SOON, "down", floor).max() >= BAR,
            )
        note(
            "no restarts",
            _seen(at, p, QUARTERS, "down", p, 0).max() >= BAR,
            _seen(half, p, SOON, "down", p, 0).max() >= BAR,
        )
        note(
            "naive",
            _naive(at, np.full(QUARTERS, p), "down"),
            _naive(half, np.full(SOON, p), "down"),
        )
        null = worlds.draw(random, kind, rate, swing_q, 5)
        twice = worlds.draw(random, kind, rate, 2 * swing_q[:SOON], 5)
        rates = [swing_q[t.session // worlds.SESSIONS] for t in (null, twice)]
        note(
            "works",
            _seen(null, rates[0], QUARTERS, "up", p).max() >= BAR,
            _seen(twice, rates[1], SOON, "up", p).max() >= BAR,
        )
        # a naive test goes by the mean expected rate of the quarter
        note("works, naive", _naive(null, swing_q, "up"), _naive(twice, swing_q[:SOON], "up"))
    return out


def fitted(key: dict[str, Any]) -> dict[str, list[int]]:
    """Rules that say nothing, and that double the odds, with expected rates fitted by quarter."""
    random = _random(key)
    out = {"nothing": [0, 0], "something": [0, 0]}
    for strength, name in ((0.0, "nothing"), (np.log(3.0), "something")):
        session, peer, is_hit, rate = [], [], [], []
        for quarter in range(QUARTERS):
            e, t, hits, rates = fitted_quarter(random, key["rules"], key["rate"], strength)
            session.append(t + quarter * worlds.SESSIONS)
            peer.append(e // worlds.PER_SECTOR)
            is_hit.append(hits)
            rate.append(rates)
        for rule in range(key["rules"]):
            t, g, y, q = (
                np.concatenate([part[rule] for part in parts])
                for parts in (session, peer, is_hit, rate)
            )
            found = worlds.Triggers(g, t, g, y)
            seen = _seen(found, q, QUARTERS, "up", 0.1)
            out[name][0] += bool(seen.max() >= BAR)
            out[name][1] += bool(seen[:SOON].max() >= BAR)
    return out


def estimated(key: dict[str, Any]) -> dict[str, int]:
    """Rules that go on as they always were, where the promise is what a holdout of them showed."""
    random, p = _random(key), key["precision"]
    out = {f"keep {keep}": 0 for keep in KEEPS}
    for _ in range(BLOCK):
        promised = max(random.binomial(key["holdout"], p), 1) / key["holdout"]
        t = worlds.draw(random, worlds.KINDS["independent"], 30, np.full(QUARTERS, p), 5)
        for keep in KEEPS:
            floor = promised * keep
            out[f"keep {keep}"] += bool(_seen(t, floor, QUARTERS, "down", floor).max() >= BAR)
    return out


def hang(key: dict[str, Any]) -> dict[str, list[int]]:
    """The four ways of hanging together: wrongly retired, rightly retired."""
    random, kind = _random(key), worlds.KINDS[key["kind"]]
    p, rate, horizon = key["promise"], key["rate"], key["horizon"]
    out = {how: [0, 0] for how in HANG_TOGETHER}
    for _ in range(BLOCK):
        for i, (n, precision) in enumerate(((QUARTERS, p), (SOON, p / 2))):
            t = worlds.draw(random, kind, rate, np.full(n, precision), horizon)
            for how in HANG_TOGETHER:
                seen = _seen(t, p, n, "down", p, how=how, horizon=horizon)
                out[how][i] += bool(seen.max() >= BAR)
    return out


def late(key: dict[str, Any]) -> dict[str, int]:
    """Decay after some good quarters: retired within eight, by how often a process restarts."""
    random = _random(key)
    p, since = key["promise"], key["since"]
    precision_q = np.where(np.arange(QUARTERS) < since, p * key["before"], p / 2)
    out = {str(r): 0 for r in RESTARTS}
    for _ in range(BLOCK):
        t = worlds.draw(random, worlds.KINDS["independent"], 30, precision_q, 5)
        for restart in RESTARTS:
            seen = _seen(t, p, QUARTERS, "down", p, restart)
            out[str(restart)] += bool(seen[: since + SOON].max() >= BAR)
    return out


def cover(key: dict[str, Any]) -> dict[str, float]:
    """Confidence sequences that ever miss within five years, and their last width."""
    random, p = _random(key), key["promise"]
    missed, width = 0, 0.0
    for _ in range(BLOCK):
        t = worlds.draw(random, worlds.KINDS[key["kind"]], key["rate"], np.full(QUARTERS, p), 5)
        groups = hang_together(t.entity, t.session, t.sector, 5, _last(QUARTERS))
        seen = confidence_sequence(t.is_hit, groups, QUARTERS)
        missed += bool(((seen.low_q > p) | (seen.high_q < p)).any())
        width += float(seen.high_q[-1] - seen.low_q[-1])
    return {"missed": missed, "width": width / BLOCK}


def online(key: dict[str, Any]) -> dict[str, list[float]]:
    """False discoveries among all, and true ones found, of each procedure, summed over worlds."""
    random = _random(key)
    out = {name: [0.0, 0.0, 0.0] for name in PROCEDURES}
    for _ in range(BLOCK):
        for name, (false, found, true) in stream_of_rules(random, key["kind"]).items():
            out[name][0] += false
            out[name][1] += found
            out[name][2] += true
    return out


def moved(key: dict[str, Any]) -> dict[str, list[float]]:
    """Change points at 5 % and 1 % a type, and weeks found within two of the change."""
    random = _random(key)
    kind = weekly_counts.SERIES[key["series"]]
    count_kw = weekly_counts.draw(random, kind, BLOCK, WEEKS, key["ratio"], SINCE)
    # one type a call: no adjustment
    made = [change_points(c[None], np.ones(WEEKS), random) for c in count_kw]
    p = np.array([m.p_k[0] for m in made])
    near = np.array([abs(int(m.week_k[0]) - SINCE) <= 2 for m in made])
    return {"p": p.round(4).tolist(), "near": [float(near.sum())]}


def tasks(n_blocks: int) -> Tasks:
    """Every design, block by block, so that a study cut short is even."""
    designs: list[tuple[Callable[[dict[str, Any]], Any], dict[str, Any]]] = []
    for kind in ("independent", CLUSTERED):
        for p in PROMISES:
            designs += [(promise, {"kind": kind, "promise": p, "rate": r}) for r in RATES]
            designs.append((cover, {"kind": kind, "promise": p, "rate": 30}))
    for p, rate, horizon in ((0.2, 30, 5), (0.2, 100, 5), (0.05, 100, 5), (0.2, 30, 20)):
        for kind in worlds.KINDS:
            designs.append((hang, {"kind": kind, "promise": p, "rate": rate, "horizon": horizon}))
    for p in (0.2, 0.4):
        designs += [(late, {"promise": p, "since": s, "before": b}) for s, b in DECAYS]
    designs += [(online, {"kind": k}) for k in ("nothing true", "own triggers", "nested", "kept")]
    for series in weekly_counts.SERIES:
        designs += [(moved, {"series": series, "ratio": r}) for r in RATIOS]
    designs += [(estimated, {"precision": 0.2, "holdout": n}) for n in (40, 100, 400)]
    designs += [(fitted, {"rate": rate, "rules": 25}) for rate in (8, 30, 100)]
    for block in range(n_blocks):
        for measure, design in designs:
            key = {"what": measure.__name__, **design, "block": block}
            yield key, partial(measure, key)
