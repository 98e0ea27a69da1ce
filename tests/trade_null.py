"""Trades where prices are random walks: how often does a rule look good that cannot be?

    PYTHONPATH=.:examples python tests/trade_null.py [WORLDS]
    PYTHONPATH=.:examples python tests/trade_null.py moves

print the tables of reports/trades.md. Companies share a market and sectors, alerts come at random
and in spells that companies and sessions share; no alert says anything about any price. Hands on
`null_worlds`.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from miner.kernels.bits import unpack
from miner.kernels.windows import mark_windows
from miner.panel import Labels, Panel, pack_alerts, pack_coverage
from miner.price_moves import find_moves, move_events
from miner.prices import Prices
from miner.rule_cases import rule_cases
from miner.seeds import stream
from miner.settings import PriceSettings
from miner.time_split import Segment
from miner.trades.abnormal import abnormal_returns
from miner.trades.evaluate import TriedRule
from miner.trades.positions import take_positions
from miner.trades.significance import clustered_mean, stationary_draws, step_down

N_ENTITIES, N_SESSIONS, N_TYPES, N_SECTORS = 120, 400, 6, 4
HORIZON = 5


@dataclass(frozen=True)
class NullWorld:
    """Of one world: p-values of its rules alone and among all, and their mean net returns."""

    p_alone: np.ndarray
    p_all: np.ndarray
    mean_net: np.ndarray
    n_trades: np.ndarray
    covered: np.ndarray  # the 95 % interval holds the true mean, which is minus the costs


def panel_of(rng: np.random.Generator) -> Panel:
    """A panel of alerts in shared spells, peers by sector, without events."""
    names = tuple(f"n{i:03d}" for i in range(N_ENTITIES))
    types = tuple(f"t{k}" for k in range(N_TYPES))
    busy_e = rng.lognormal(0, 0.6, N_ENTITIES)
    busy_t = rng.lognormal(0, 0.8, N_SESSIONS)
    rate_et = np.minimum(0.05 * busy_e[:, None] * busy_t / busy_t.mean(), 0.6)
    is_on_ket = rng.random((N_TYPES, N_ENTITIES, N_SESSIONS)) < rate_et
    kind, entity, session = np.nonzero(is_on_ket)
    sector = np.arange(N_ENTITIES) % N_SECTORS
    code_et = np.repeat(sector.astype(np.int16)[:, None], N_SESSIONS, axis=1)
    return Panel(
        names,
        types,
        N_SESSIONS,
        pack_alerts(entity, kind, session, N_ENTITIES, N_TYPES, N_SESSIONS),
        {"nothing": (np.empty(0, dtype=np.int32), np.empty(0, dtype=np.int32))},
        *pack_coverage(None, N_ENTITIES, types, N_SESSIONS),
        None,
        Labels(tuple(map(str, range(N_SECTORS))), code_et),
    )


def walks(rng: np.random.Generator, panel: Panel, own_tail: float) -> Prices:
    """Random walks with a market and sectors; ``own_tail``: degrees of freedom of own returns."""
    shape = N_ENTITIES, N_SESSIONS
    # simple returns with mean nought for all, so that the sum of abnormal ones has mean nought
    returns = rng.normal(0, 0.01, N_SESSIONS) + 0.015 * rng.standard_t(own_tail, shape).clip(-8, 8)
    returns = returns + rng.normal(0, 0.007, (N_SECTORS, N_SESSIONS))[panel.peers.code_et[:, 0]]
    before = 50 * np.cumprod(1 + returns, axis=1) / (1 + returns)
    overnight = 0.3 * returns
    open_et, close_et = before * (1 + overnight), before * (1 + returns)
    series_et = np.zeros(shape, dtype=np.int32)
    return Prices(close_et, open_et, None, None, None, series_et, {}, ())


def null_worlds(
    n_worlds: int,
    *,
    cost_bps: float,
    exit_: str = "horizon",
    own_tail: float = 4.0,
    n_draws: int = 500,
) -> Iterator[NullWorld]:
    """Worlds without anything to earn, each with fifteen pairs of alert types as rules."""
    settings = PriceSettings(source="-", costs_bps=cost_bps, slippage_bps=0.0, exit=exit_)
    for seed in range(n_worlds):
        rng = stream(seed, "null trades")
        panel = panel_of(rng)
        prices = walks(rng, panel, own_tail)
        abnormal = abnormal_returns(prices, panel.peers.code_et)
        rules = [
            TriedRule("nothing", "all", pair, 5, HORIZON, HORIZON)
            for pair in combinations(panel.type_names, 2)
        ]
        cases = rule_cases(Segment(panel, 0, N_SESSIONS - 1), rules)
        held = [take_positions(case, prices, abnormal, settings, 1) for case in cases]
        means = [
            clustered_mean(
                h.trades["net"].to_numpy(), h.trades["entity"].to_numpy(),
                (h.trades["trigger"] // HORIZON).to_numpy(),
            )
            for h in held
        ]  # fmt: skip
        draws = stationary_draws(rng, N_SESSIONS, 2 * HORIZON, n_draws)
        p_all = step_down(np.stack([h.net_t for h in held], axis=1), draws, 2 * HORIZON)
        truth = -2 * cost_bps * 1e-4
        yield NullWorld(
            np.array([m.p_value for m in means]),
            p_all,
            np.array([m.mean for m in means]),
            np.array([len(h.trades) for h in held]),
            np.array([m.low <= truth <= m.high for m in means]),
        )


def print_moves(n_walks: int = 22, n_sessions: int = 8000) -> None:
    """Print how much more often moves follow alerts drawn from the same random walks."""
    import pandas as pd
    from bar_rules import close_alerts

    returns = stream(1, "walks").normal(0, 0.02, (n_walks, n_sessions))
    close_et = 50 * np.exp(np.cumsum(returns, axis=1))
    series_et = np.zeros(close_et.shape, dtype=np.int32)
    prices = Prices(close_et, None, None, None, None, series_et, {}, ())
    days = pd.bdate_range("1990-01-01", periods=n_sessions)
    alerts, is_known = close_alerts(pd.DataFrame(close_et.T, index=days))
    is_asked = is_known.to_numpy().T
    print("| moves | target | alert | times as often as on any session |")
    print("| --- | --- | --- | --- |")
    for how in ("extremes", "close-to-close"):
        moves = find_moves(prices, PriceSettings(source="-", moves=how))
        for target, (entity, session) in move_events(moves)[0].items():
            window_ew = mark_windows(entity, session, n_walks, n_sessions, HORIZON)
            is_window = unpack(window_ew, n_sessions)
            for name, is_on in alerts.items():
                lift = is_window[is_on.to_numpy().T & is_asked].mean() / is_window[is_asked].mean()
                print(f"| {how} | {target} | {name} | {lift:.2f} |")


def main() -> None:
    """Print the tables of the report."""
    if sys.argv[1:] == ["moves"]:
        print_moves()
        return
    n_worlds = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    print("| costs each way | own returns | rules | alone, p <= .05 | p <= .01 | 95 % interval "
          "holds the truth | worlds with any p (all tried) <= .05 | mean net |")  # fmt: skip
    print("| --- | --- | --- | --- | --- | --- | --- | --- |")
    for cost, tail in ((0.0, 4.0), (0.0, 30.0), (5.0, 4.0), (10.0, 4.0)):
        worlds = list(null_worlds(n_worlds, cost_bps=cost, own_tail=tail))
        alone = np.array([(w.p_alone <= 0.05).mean() for w in worlds])
        strict = np.array([(w.p_alone <= 0.01).mean() for w in worlds])
        any_ = np.array([(w.p_all <= 0.05).any() for w in worlds])
        held = np.array([w.covered.mean() for w in worlds])

        def share(values: np.ndarray) -> str:
            return f"{values.mean():.3f} ± {values.std(ddof=1) / np.sqrt(values.size):.3f}"

        n = sum(w.p_alone.size for w in worlds)
        net = np.mean([w.mean_net.mean() for w in worlds])
        print(f"| {cost:g} bp | t, {tail:g} d.f. | {n:,} | {share(alone)} | {share(strict)} | "
              f"{share(held)} | {share(any_)} | {1e4 * net:+.1f} bp |")  # fmt: skip


if __name__ == "__main__":
    main()
