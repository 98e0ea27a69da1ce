"""Evaluates rules as trading rules: discovery and holdout apart, and all tried together."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from miner.assemble import Inputs, assemble
from miner.columns import JOINER
from miner.errors import SettingsError, explain
from miner.hunting import split_sessions
from miner.panel import Panel
from miner.price_moves import MOVE_DOWN, MOVE_TARGETS, find_moves, move_events
from miner.prices import Prices, place_prices
from miner.read_tables import read_prices
from miner.rule_book.records import BookRule, RuleBook
from miner.rule_cases import NamedRule, rule_cases
from miner.seeds import stream
from miner.settings import PriceSettings, Study, load_study
from miner.time_split import Segment, discovery_slice, holdout_slice
from miner.trades.abnormal import AbnormalReturns, abnormal_returns
from miner.trades.positions import BASIS_POINT, LONG, SHORT, Positions, take_positions
from miner.trades.significance import clustered_mean, stationary_draws, step_down
from miner.workers import Progress, silent

DRAWS = 2000
MOST_TRIED = 5000
DISCOVERY, HOLDOUT = "discovery", "holdout"
NOT_COVERED = (
    "Not covered: whether shares could be borrowed and at what fee, how much could be traded "
    "before the price moved, taxes, dividends that the prices leave out, and prices that gap "
    "through the exit; what trades at the open or close would really have paid is a guess in "
    "basis points."
)


@dataclass(frozen=True)
class TriedRule:
    """A combination that was tried, by name: what the test over all rules tried needs of it."""

    target: str
    stratum: str
    combination: tuple[str, ...]
    lookback: int
    horizon: int
    rest: int


@dataclass(frozen=True)
class TradeTable:
    """What trades on the rules would have earned.

    Attributes
    ----------
    rules : one row a rule and part ("discovery", "holdout"); columns in ``RULE_COLUMNS``
    trades : one row a trade: ``rule`` (id), ``part``, names and dates, returns
    curve : ``rule``, ``part``, ``date``, ``net``, ``cumulative_net``, ``open`` by session
    settings : direction, costs and the rest, as used
    n_tried : combinations in the test over all tried, by part
    warnings : what looks wrong in the prices, and what was left out
    """

    rules: pd.DataFrame
    trades: pd.DataFrame
    curve: pd.DataFrame
    settings: dict[str, Any]
    n_tried: dict[str, int]
    warnings: tuple[str, ...]
    not_covered: str = NOT_COVERED


RULE_COLUMNS = [
    "rule", "target", "stratum", "combination", "direction", "part", "triggers", "unpriced",
    "trades", "mean_net", "median_net", "low", "high", "error", "p_value", "p_all_tried",
    "too_few_clusters", "share_positive", "share_with_event", "mean_gross", "break_even_bps",
    "worst_excursion", "median_excursion", "time_in_market", "mean_open", "most_open",
    "median_turnover_share", "stale_exits", "total_net",
]  # fmt: skip


def evaluate_trades(
    book: RuleBook | Sequence[BookRule],
    study: Study | str | Path,
    *,
    tried: Sequence[NamedRule] = (),
    direction: str | None = None,
    n_draws: int = DRAWS,
    n_workers: int = 1,
    progress: Progress = silent,
) -> TradeTable:
    """Trade every trigger of the rules, in discovery and in the holdout.

    Parameters
    ----------
    book : the rules; those of all statuses are looked at
    study : the study they came from, with [prices]
    tried : every combination that discovery tried, so that its test allows for the search
        (``tried_in`` reads them from a run); the holdout's allows for the rules alone, which is
        all that was tried there
    direction : "long" or "short" for all rules; by default as [prices] directions says, else
        short for "move down" and long for the others
    n_draws : of the bootstrap over sessions

    Raises
    ------
    InputError : the study has no prices, or they cannot be used
    """
    if not isinstance(study, Study):
        study = load_study(study)
    if study.prices is None:
        raise SettingsError(
            explain(
                study.name, "[prices]", "be there to evaluate trades", "none",
                'Write source = "prices.csv" below [prices].',
            )
        )  # fmt: skip
    rules = book.rule if isinstance(book, RuleBook) else tuple(book)
    inputs = assemble(study, progress)
    progress("reading prices")
    table = read_prices(study)
    if table is None:
        raise TypeError("a study with [prices] has a prices table")
    prices = place_prices(table, inputs.panel.entity_names, inputs.calendar, study.prices)
    progress("trading the rules")
    panel = _with_moves(inputs.panel, prices, study.prices, [*rules, *tried])
    _check_holding(rules, prices)
    abnormal = abnormal_returns(prices, benchmark_groups(panel, study.prices))
    last, first = split_sessions(replace(inputs, panel=panel))
    parts: dict[str, Segment] = {
        DISCOVERY: discovery_slice(panel, last),
        HOLDOUT: holdout_slice(panel, first, panel.n_sessions - 1),
    }
    warnings = list(prices.warnings)
    if len(tried) > MOST_TRIED:
        warnings.append(
            f"{len(tried):,} combinations were tried; the test over all of them is for at most "
            f"{MOST_TRIED:,} and was left out for discovery."
        )
    rows, trades, curves, n_tried = [], [], [], {}
    for part, segment in parts.items():
        held = _take(segment, rules, prices, abnormal, study.prices, direction, n_workers)
        others = tried if part == DISCOVERY and len(tried) <= MOST_TRIED else ()
        p_all = _p_all(
            segment, rules, held, others, prices, abnormal, study, direction, n_draws, n_workers
        )
        if part == DISCOVERY and len(tried) > MOST_TRIED:
            p_all[:] = math.nan
        n_tried[part] = len({_key(rule) for rule in (*rules, *others)})
        for rule, mine, p in zip(rules, held, p_all, strict=True):
            sign = sign_of(rule.target, study.prices, direction)
            rows.append(_row(rule, part, mine, sign, study.prices, float(p)))
            trades.append(_named(rule, part, mine, inputs))
            curves.append(_curve(rule, part, mine, segment, inputs))
    order = {rule.id: i for i, rule in enumerate(rules)}
    rows.sort(key=lambda row: order[row["rule"]])  # a rule's two parts together
    return TradeTable(
        pd.DataFrame(rows, columns=RULE_COLUMNS),
        pd.concat(trades, ignore_index=True) if trades else pd.DataFrame(),
        pd.concat(curves, ignore_index=True) if curves else pd.DataFrame(),
        study.prices.model_dump(mode="json")
        | {"direction": direction, "entry": "close" if prices.open_et is None else "open"},
        n_tried,
        tuple(warnings),
    )


def tried_in(run: str | Path, study: Study) -> list[TriedRule]:
    """Every combination in a run's candidates: what discovery proposed and tested.

    Raises
    ------
    TableError : the folder is not that of a run
    """
    from miner.rule_book.making import read_run

    run = Path(run)
    read_run(run)
    text = dict.fromkeys(("target", "stratum", "combination"), str)
    table = pd.read_csv(
        run / "candidates.csv", dtype=text, usecols=list(text), keep_default_na=False
    )
    windows = study.windows
    return [
        TriedRule(target, stratum, tuple(combination.split(JOINER)), windows.lookback,
                  windows.horizon, windows.rest)
        for target, stratum, combination in table[list(text)].itertuples(index=False)
    ]  # fmt: skip


def sign_of(target: str, settings: PriceSettings, direction: str | None) -> int:
    """1 to buy, -1 to sell short: as asked for, as the settings say, or by the target's name."""
    said = direction or settings.directions.get(target)
    if said is None:
        return SHORT if target == MOVE_DOWN else LONG
    return SHORT if said == "short" else LONG


def benchmark_groups(panel: Panel, settings: PriceSettings) -> np.ndarray:
    """Benchmark group of each entity-session: int16 [entities, sessions]."""
    if settings.benchmark == "strata" and panel.strata is not None:
        code_et = panel.strata.code_et
        return np.where(code_et < 0, len(panel.strata.names), code_et).astype(np.int16)
    if settings.benchmark == "peers":
        return panel.peers.code_et
    return np.zeros(panel.peers.code_et.shape, dtype=np.int16)


def _with_moves(
    panel: Panel, prices: Prices, settings: PriceSettings, rules: Sequence[NamedRule]
) -> Panel:
    """The panel with the price moves as events, where a rule's target is one and they are not."""
    wanted = {rule.target for rule in rules} & set(MOVE_TARGETS) - set(panel.events)
    if not wanted:
        return panel
    events, _ = move_events(find_moves(prices, settings))
    return replace(panel, events=panel.events | {target: events[target] for target in wanted})


def _check_holding(rules: Sequence[NamedRule], prices: Prices) -> None:
    if prices.open_et is None and any(rule.horizon < 2 for rule in rules):
        raise SettingsError(
            explain(
                "[prices]", "open", "be there for a horizon of one session", "closes only",
                "Entered at the next close, such a trade is over at once: add a column open.",
            )
        )  # fmt: skip


def _take(
    segment: Segment,
    rules: Sequence[NamedRule],
    prices: Prices,
    abnormal: AbnormalReturns,
    settings: PriceSettings,
    direction: str | None,
    n_workers: int,
) -> list[Positions]:
    cases = rule_cases(segment, rules, n_workers=n_workers)
    return [
        take_positions(case, prices, abnormal, settings, sign_of(rule.target, settings, direction))
        for rule, case in zip(rules, cases, strict=True)
    ]


def _key(rule: NamedRule) -> tuple[Any, ...]:
    return (
        rule.target,
        rule.stratum,
        tuple(rule.combination),
        rule.lookback,
        rule.horizon,
        rule.rest,
    )


def _p_all(
    segment: Segment,
    rules: Sequence[NamedRule],
    held: Sequence[Positions],
    tried: Sequence[NamedRule],
    prices: Prices,
    abnormal: AbnormalReturns,
    study: Study,
    direction: str | None,
    n_draws: int,
    n_workers: int,
) -> np.ndarray:
    """Step-down p-values of the rules among everything tried on the segment."""
    if not rules or study.prices is None:
        return np.ones(len(rules))
    known = {_key(rule) for rule in rules}
    more = [rule for rule in tried if _key(rule) not in known]
    others = _take(segment, more, prices, abnormal, study.prices, direction, n_workers)
    value_tc = np.stack([mine.net_t for mine in (*held, *others)], axis=1)
    block = float(max(2 * max(rule.horizon for rule in rules), 10))
    rng = stream(study.testing.seed, "trades", segment.first)
    draws = stationary_draws(rng, value_tc.shape[0], block, n_draws)
    return step_down(value_tc, draws, block)[: len(rules)]


def _row(
    rule: BookRule, part: str, held: Positions, sign: int, settings: PriceSettings, p_all: float
) -> dict[str, Any]:
    trades, n = held.trades, len(held.trades)
    net = trades["net"].to_numpy(dtype=float)
    mean = clustered_mean(
        net, trades["entity"].to_numpy(), (trades["trigger"] // rule.horizon).to_numpy()
    )
    gross = float(trades["gross"].mean()) if n else math.nan
    is_open = held.open_t > 0
    return {
        "rule": rule.id,
        "target": rule.target,
        "stratum": rule.stratum,
        "combination": rule.name,
        "direction": "long" if sign > 0 else "short",
        "part": part,
        "triggers": held.n_triggers,
        "unpriced": held.n_unpriced,
        "trades": n,
        "mean_net": mean.mean,
        "median_net": float(np.median(net)) if n else math.nan,
        "low": mean.low,
        "high": mean.high,
        "error": mean.error,
        "p_value": mean.p_value,
        "p_all_tried": p_all,
        "too_few_clusters": mean.is_few,
        "share_positive": float((net > 0).mean()) if n else math.nan,
        "share_with_event": float(trades["is_hit"].mean()) if n else math.nan,
        "mean_gross": gross,
        "break_even_bps": gross / 2 / BASIS_POINT,
        "worst_excursion": float(trades["worst"].min()) if n else math.nan,
        "median_excursion": float(trades["worst"].median()) if n else math.nan,
        "time_in_market": float(is_open.mean()),
        "mean_open": float(held.open_t[is_open].mean()) if is_open.any() else 0.0,
        "most_open": int(held.open_t.max(initial=0)),
        "median_turnover_share": _median(trades["turnover_share"].to_numpy(dtype=float)),
        "stale_exits": int(trades["is_stale"].sum()),
        "total_net": float(held.net_t.sum()),
    }


def _median(values: np.ndarray) -> float:
    known = values[~np.isnan(values)]
    return float(np.median(known)) if known.size else math.nan


def _named(rule: BookRule, part: str, held: Positions, inputs: Inputs) -> pd.DataFrame:
    table = held.trades.copy()
    names, dates = inputs.panel.entity_names, inputs.calendar.dates
    table["entity"] = [names[e] for e in table["entity"]]
    for column in ("trigger", "entry", "exit"):
        table[column] = np.datetime_as_string(dates[table[column].to_numpy(dtype=int)])
    table.insert(0, "part", part)
    table.insert(0, "rule", rule.id)
    return table


def _curve(
    rule: BookRule, part: str, held: Positions, segment: Segment, inputs: Inputs
) -> pd.DataFrame:
    dates = inputs.calendar.dates[segment.first : segment.last + 1]
    return pd.DataFrame(
        {
            "rule": rule.id,
            "part": part,
            "date": np.datetime_as_string(dates),
            "net": held.net_t,
            "cumulative_net": np.cumsum(held.net_t),
            "open": held.open_t,
        }
    )
