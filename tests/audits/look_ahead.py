"""Hands on what a command decided up to a session, and logs altered after it.

What was decided must not depend on what came later: `discovery_of`, `scan_of` and `trades_of` put
into plain values all that was decided by session t, and must be the same, to the bit, for any
of the alterations.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from naive import World, alert_types
from tiny_worlds import FIRST_DAY, day, write_study

from miner import Hunt, hunt, load_study
from miner.columns import CANDIDATE_COLUMNS
from miner.rule_book import BookRule, RuleBook, rule_id
from miner.scan import scan
from miner.trades import evaluate_trades

Row = tuple[str, str, int]
DISCOVERY = list(CANDIDATE_COLUMNS)[:18]
CHANGES = ("emptied", "doubled", "shuffled", "redrawn", "one alert more", "one event less")


def changed_after(world: World, t: int, how: str, seed: int) -> World:
    """The world with its alerts and events after session t altered.

    What names the study's parts stays: every type and every entity is still somewhere.
    """
    rng = np.random.default_rng([seed, 3])
    later = range(t + 1, world.n_sessions)

    def altered(log: frozenset[Row], kinds: list[str]) -> frozenset[Row]:
        kept = {row for row in log if row[2] <= t}
        after = sorted(row for row in log if row[2] > t)
        sessions = rng.permutation([s for _, _, s in after]).tolist()
        if how == "doubled":
            kept |= set(after) | {(e, k, int(rng.choice(later))) for e, k, _ in after}
        elif how == "shuffled":
            kept |= {(e, k, s) for (e, k, _), s in zip(after, sessions, strict=True)}
        elif how == "redrawn":
            draws = [rng.choice(x, 300).tolist() for x in (world.known, kinds, later)]
            kept |= set(zip(*draws, strict=True))
        elif how != "emptied":
            kept |= set(after)
        return frozenset(kept)

    alerts = altered(world.alerts, alert_types(world))
    events = altered(world.events, list(world.targets))
    if how == "one alert more":
        alerts |= {(str(rng.choice(world.known)), alert_types(world)[0], t + 1)}
    if how == "one event less":
        gone = min((row for row in events if row[2] > t), key=lambda row: row[2])
        events -= {gone}
    return replace(world, alerts=alerts, events=events)


def run(world: World, folder: Path, folds: int = 0, **options: Any) -> Hunt:
    """The hunt of a world, placebo worlds included, nothing written."""
    study = load_study(write_study(world, folder, **options))
    study = replace(study, holdout=study.holdout.model_copy(update={"folds": folds}))
    return hunt(study, n_workers=1)


def discovery_of(result: Hunt) -> dict[str, Any]:
    """All that discovery decided: candidates, rules and their steps, placebo, counts, margins."""
    record = result.record
    of_the_whole_log = ("tables", "entities", "alert_types", "confirmed")
    counts = {k: v for k, v in record["counts"].items() if k not in of_the_whole_log}
    return {
        "candidates": result.candidates[DISCOVERY].to_json(double_precision=15),
        "bits": [x.hex() for x in result.candidates["p_value"]],
        "rules": [{k: v for k, v in rule.items() if k != "holdout"} for rule in record["rules"]],
        "placebo": record["placebo"],
        "counts": counts,
        "margins": record["margins"],
    }


def whole_of(result: Hunt) -> dict[str, Any]:
    """All that a hunt found on its whole calendar."""
    return {
        **discovery_of(result),
        "all": result.candidates.to_json(double_precision=15),
        "quarters": result.quarters.to_json(double_precision=15),
        "walk-forward": result.walk_forward.to_json(double_precision=15),
        "judged": [rule["holdout"] for rule in result.record["rules"]],
    }


def rules_of(world: World) -> list[BookRule]:
    """Two rules to scan and trade by."""
    windows = {"lookback": world.lookback, "horizon": world.horizon, "rest": world.rest}
    rules = []
    for combination in (("delay", "gap"), ("memo",)):
        keys = {"target": "upset", "stratum": "all", "combination": combination, **windows}
        rules.append(BookRule(id=rule_id(**keys), **keys))
    return rules


def scan_of(world: World, t: int, folder: Path) -> dict[str, Any]:
    """What a scan as of session t tells, of a log that holds later alerts too."""
    write_study(world, folder)
    tables = {name: {"source": f"{name}.csv"} for name in ("groups", "coverage")}
    given = {name: keys for name, keys in tables.items() if (folder / f"{name}.csv").exists()}
    sessions = {"calendar": "daily", "close": "16:00:00", "timezone": "UTC", "start": day(0)}
    book = RuleBook(format=1, sessions=sessions, rule=tuple(rules_of(world)), **given)
    as_of = FIRST_DAY + dt.timedelta(days=t)
    found = scan(book, folder / "alerts.csv", book_folder=folder, as_of=as_of)
    return {
        "as_of": found.as_of,
        "hits": found.hits,
        "one short": found.one_short,
        "alerts": found.n_alerts,
    }


def write_prices(world: World, folder: Path, seed: int, cut: int | None = None) -> None:
    """Random bars of every entity; those after session ``cut`` are another draw."""
    rng, other = np.random.default_rng([seed, 4]), np.random.default_rng([seed, 5])
    frames = []
    for entity in world.known:
        moves, later = (
            rng.normal(0, 0.02, (2, world.n_sessions)),
            other.normal(0, 0.05, (2, world.n_sessions)),
        )
        if cut is not None:
            moves[:, cut + 1 :] = later[:, cut + 1 :]
        close = 100 * np.exp(np.cumsum(moves.sum(axis=0)))
        opened = close * np.exp(-moves[1])
        frames.append(
            pd.DataFrame(
                {
                    "entity": entity,
                    "date": [day(t) for t in range(world.n_sessions)],
                    "open": opened,
                    "high": np.maximum(opened, close) * 1.01,
                    "low": np.minimum(opened, close) * 0.99,
                    "close": close,
                    "volume": np.round(1000 * np.exp(rng.normal(size=world.n_sessions))),
                }
            )
        )
    pd.concat(frames).to_csv(folder / "prices.csv", index=False)


def trades_of(world: World, t: int, folder: Path, seed: int, cut: int | None = None) -> Any:
    """Positions entered and left by session t, each with all that it earned."""
    path = write_study(world, folder)
    write_prices(world, folder, seed, cut)
    text = path.read_text(encoding="utf-8") + '\n[prices]\nsource = "prices.csv"\nexit = "event"\n'
    path.write_text(text, encoding="utf-8")
    trades = evaluate_trades(rules_of(world), path, n_draws=20).trades
    left = trades[trades["exit"] <= day(t)].drop(columns="is_hit")
    entered = trades[trades["entry"] <= day(t)][
        ["rule", "part", "entity", "trigger", "entry", "entry_price"]
    ]
    return {
        "left": left.to_json(orient="records", double_precision=15),
        "entered": entered.to_json(orient="records", double_precision=15),
        "n": len(left),
    }


def audit_discovery(world: World, seed: int, folder: Path, changes: tuple[str, ...]) -> int:
    """Assert that nothing after discovery's last session touches what discovery decided.

    Returns the number of candidates.
    """
    one = run(world, folder / "as it was")
    expected = discovery_of(one)
    for how in changes:
        other = run(changed_after(world, world.discovery_end, how, seed), folder / how)
        assert discovery_of(other) == expected, how
    return len(one.candidates)


def audit_truncation(world: World, seed: int, folder: Path, cut: int) -> None:
    """Assert that a calendar that ends at ``cut`` is the same as a log that does."""
    ended = replace(world, n_sessions=cut + 1)
    emptied = replace(changed_after(world, cut, "emptied", seed), n_sessions=cut + 1)
    assert len(emptied.alerts) < len(world.alerts)
    one, other = run(ended, folder / "calendar", 2), run(emptied, folder / "log", 2)
    assert whole_of(one) == whole_of(other)


def audit_scan(world: World, t: int, folder: Path, seed: int) -> int:
    """Assert that a scan as of t does not see later alerts; returns how much it found."""
    expected = scan_of(world, t, folder / "as it was")
    for how in ("emptied", "doubled", "redrawn", "one alert more"):
        assert scan_of(changed_after(world, t, how, seed), t, folder / how) == expected, how
    return len(expected["hits"]) + len(expected["one short"])


def audit_trades(world: World, t: int, folder: Path, seed: int) -> int:
    """Assert that later alerts, events and prices change no trade made by t; returns how many."""
    expected = trades_of(world, t, folder / "as it was", seed)
    for how in ("shuffled", "redrawn", "one alert more"):
        found = trades_of(changed_after(world, t, how, seed), t, folder / how, seed, t)
        assert found == expected, how
    return int(expected["n"])
