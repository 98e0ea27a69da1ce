"""The counts and p-values of a hunt with the usual libraries, and nothing of this package.

``python -m tests.benchmarks.plain_stack STUDY.toml FOLDER DRAWS``: pandas reads and windows,
mlxtend mines, numpy finds triggers and exchanges sessions between events of one sector (so that
every entity keeps its number of events and every sector its number on each session), statsmodels
adjusts over the family. Written as someone who knows these libraries would. It covers discovery up
to the adjusted p-values: no explaining away, holdout, placebo, walk-forward, intervals or report.

It asks for what the benchmark worlds are: daily sessions, stamps before the close, every entity
covered throughout, one target, no strata, a sector for each.
"""

from __future__ import annotations

import json
import sys
import time
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

DEFAULTS = {
    "windows": {"lookback": 5, "horizon": 5},
    "mining": {"max_size": 3, "min_triggers": 20, "min_hits": 3},
    "holdout": {"share": 0.3, "embargo": 10},
    "testing": {"fdr": 0.05, "seed": 7},
}


@dataclass(frozen=True)
class Market:
    """Discovery: alerts and events with entity codes and sessions, and each entity's sector."""

    alerts: pd.DataFrame
    events: pd.DataFrame
    types: list[str]
    sector: np.ndarray
    n_sessions: int
    settings: dict[str, dict[str, float]]


def read(study: Path) -> Market:
    """Read a study's tables and cut them to discovery."""
    asked = tomllib.loads(study.read_text(encoding="utf-8"))
    settings = {name: keys | asked.get(name, {}) for name, keys in DEFAULTS.items()}
    settings["windows"].setdefault("rest", settings["windows"]["horizon"])
    folder = study.parent
    coverage = pd.read_csv(folder / asked["coverage"]["source"], dtype=str)
    if coverage[["type", "start", "end"]].notna().any(axis=None):
        raise SystemExit(f"{study}: coverage must be whole for every entity")
    groups = pd.read_csv(folder / asked["groups"]["source"], dtype=str).sort_values("entity")
    code = pd.Series(np.arange(len(groups)), index=groups["entity"])
    first = pd.Timestamp(asked["sessions"]["start"])
    n_sessions = (pd.Timestamp(asked["sessions"]["end"]) - first).days + 1
    holdout_first = n_sessions - round(settings["holdout"]["share"] * n_sessions)
    last = holdout_first - settings["holdout"]["embargo"] - 1

    def log(name: str) -> pd.DataFrame:
        rows = pd.read_parquet(folder / asked[name]["source"])
        rows["entity"] = rows["entity"].map(code)
        rows["session"] = (rows["time"].dt.normalize() - first).dt.days
        rows = rows[rows["session"] <= last]
        return rows[["entity", "session", "type"]].drop_duplicates(ignore_index=True)

    alerts, events = log("alerts"), log("events")
    types = sorted(alerts["type"].unique())
    sector = pd.factorize(groups[asked["groups"]["peers"]], sort=True)[0]
    return Market(alerts, events, types, sector, last + 1, settings)


def event_windows(market: Market) -> pd.DataFrame:
    """Which types came before each event: one boolean row an event."""
    windows = market.settings["windows"]
    lookback, horizon = windows["lookback"], windows["horizon"]
    # of events that an open session could have foreseen
    events = market.events[market.events["session"] >= lookback].reset_index(names="event")
    pairs = events[["event", "entity", "session"]].merge(
        market.alerts, on="entity", suffixes=("", "_alert")
    )
    before = pairs["session"] - pairs["session_alert"]
    pairs = pairs[(before >= 1) & (before <= horizon + lookback - 1)]
    seen = pd.DataFrame(False, index=events["event"], columns=market.types)
    row, column = seen.index.get_indexer(pairs["event"]), seen.columns.get_indexer(pairs["type"])
    values = seen.to_numpy(copy=True)
    values[row, column] = True
    return pd.DataFrame(values, columns=market.types)


def proposals(market: Market, windows: pd.DataFrame) -> pd.Series:
    """Number of windows of each frequent itemset, by its sorted types."""
    from mlxtend.frequent_patterns import hmine  # fpgrowth takes minutes on the same windows

    mining = market.settings["mining"]
    share = (mining["min_hits"] - 0.5) / len(windows)
    found = hmine(windows, min_support=share, max_len=mining["max_size"], use_colnames=True)
    counts = (found["support"] * len(windows)).round().astype(int)
    return pd.Series(counts.to_numpy(), index=[tuple(sorted(s)) for s in found["itemsets"]])


def on_cells(market: Market) -> list[tuple[tuple[str, ...], np.ndarray]]:
    """Flat cells (entity * sessions + session) on which each combination is on, where enough."""
    mining, lookback = market.settings["mining"], market.settings["windows"]["lookback"]
    fewest, n = mining["min_triggers"], market.n_sessions
    is_on = []
    for kind in market.types:
        seen = np.zeros((market.sector.size, n), dtype=bool)
        mine = market.alerts[market.alerts["type"] == kind]
        seen[mine["entity"], mine["session"]] = True
        on = seen.copy()
        for lag in range(1, lookback):
            on[:, lag:] |= seen[:, :-lag]
        is_on.append(on.ravel())

    def grow(kinds: tuple[int, ...], cells: np.ndarray) -> Iterator[tuple[tuple, np.ndarray]]:
        if cells.size < fewest:
            return
        yield tuple(market.types[k] for k in kinds), cells
        if len(kinds) < mining["max_size"]:
            for k in range(kinds[-1] + 1, len(market.types)):
                yield from grow((*kinds, k), cells[is_on[k][cells]])

    found = [x for k, on in enumerate(is_on) for x in grow((k,), np.flatnonzero(on))]
    return sorted(found, key=lambda pair: (len(pair[0]), pair[0]))


def triggers(market: Market, cells: np.ndarray) -> np.ndarray:
    """First cells of spells on, at least ``rest`` after the last kept one, that may be judged."""
    windows, n = market.settings["windows"], market.n_sessions
    starts = np.ones(cells.size, dtype=bool)
    starts[1:] = (np.diff(cells) > 1) | (cells[1:] % n == 0)
    kept = cells[starts]
    while True:
        near = np.zeros(kept.size, dtype=bool)
        near[1:] = (np.diff(kept) < windows["rest"]) & (kept[1:] // n == kept[:-1] // n)
        after_kept = near.copy()
        after_kept[1:] &= ~near[:-1]  # only where the one before is sure to stay
        if not after_kept.any():
            break
        kept = kept[~after_kept]
    session = kept % n
    return kept[(session >= windows["lookback"] - 1) & (session < n - windows["horizon"])]


def in_window(market: Market, entity: np.ndarray, session: np.ndarray) -> np.ndarray:
    """Flat booleans: an event of the entity within the horizon after the cell."""
    before = np.zeros(market.sector.size * market.n_sessions, dtype=bool)
    for lag in range(1, market.settings["windows"]["horizon"] + 1):
        is_inside = session >= lag
        before[entity[is_inside] * market.n_sessions + session[is_inside] - lag] = True
    return before


def exchanged(
    rng: np.random.Generator, sector: np.ndarray, entity: np.ndarray, session: np.ndarray
) -> np.ndarray:
    """Sessions dealt anew between events of a sector, no entity twice on one. Sorted by sector."""
    dealt = session[np.lexsort((rng.random(session.size), sector))]
    start = np.searchsorted(sector, sector)
    stop = np.searchsorted(sector, sector, side="right")
    while True:
        key = entity * (session.max() + 1) + dealt
        order = np.argsort(key, kind="stable")
        twice = order[1:][np.diff(key[order]) == 0]
        if not twice.size:
            return dealt
        for i in twice:
            j = rng.integers(start[i], stop[i])
            dealt[i], dealt[j] = dealt[j], dealt[i]


def hunt(study: Path, n_draws: int) -> tuple[pd.DataFrame, dict[str, float], dict[str, float]]:
    """Candidates with counts and p-values, counts of the funnel, processor seconds by step."""
    from statsmodels.stats.multitest import multipletests

    laps: dict[str, float] = {}
    clock = time.process_time()

    def lap(name: str) -> None:
        nonlocal clock
        laps[name], clock = time.process_time() - clock, time.process_time()

    market = read(study)
    mining, windows = market.settings["mining"], market.settings["windows"]
    lap("reading")
    proposed = proposals(market, event_windows(market))
    lap("windows and itemsets")
    family = [(types, triggers(market, cells)) for types, cells in on_cells(market)]
    family = [(types, cells) for types, cells in family if cells.size >= mining["min_triggers"]]
    candidates = [(types, cells) for types, cells in family if types in proposed.index]
    cells = np.concatenate([cells for _, cells in candidates])
    starts = np.cumsum([0, *(cells.size for _, cells in candidates)])
    lap("triggers")

    events = market.events[market.events["session"] >= windows["lookback"]]
    events = events.assign(sector=market.sector[events["entity"]]).sort_values("sector")
    entity, session, sector = (events[c].to_numpy() for c in ("entity", "session", "sector"))

    def hits(session: np.ndarray) -> np.ndarray:
        is_hit = in_window(market, entity, session)[cells]
        return np.add.reduceat(is_hit, starts[:-1], dtype=np.int64)

    count, observed = np.diff(starts), hits(session)
    is_before = in_window(market, entity, session).reshape(-1, market.n_sessions)
    judged = is_before[:, windows["lookback"] - 1 : market.n_sessions - windows["horizon"]]
    lap("hits")

    rng = np.random.default_rng(market.settings["testing"]["seed"])
    total, reached = np.zeros(count.size), np.zeros(count.size, dtype=np.int64)
    for _ in range(n_draws):
        drawn = hits(exchanged(rng, sector, entity, session))
        total += drawn
        reached += drawn >= observed
    p = (1 + reached) / (1 + n_draws)
    lap("draws")
    padded = np.concatenate([p, np.ones(len(family) - p.size)])
    passes, q = multipletests(padded, market.settings["testing"]["fdr"], method="fdr_bh")[:2]
    lap("adjusting")
    table = pd.DataFrame(
        {
            "combination": [" + ".join(types) for types, _ in candidates],
            "windows": [proposed[types] for types, _ in candidates],
            "triggers": count,
            "hits": observed,
            "precision": observed / count,
            "base_rate": judged.mean(),
            "expected_hits": total / max(1, n_draws),
            "p_value": p,
            "q_value": q[: p.size],
        }
    )
    funnel = {"proposed": len(proposed), "family": len(family), "passed": int(passes.sum())}
    return table, funnel | {"triggers": int(cells.size), "draws": n_draws}, laps


def main() -> None:
    """Hunt a study and write candidates and seconds."""
    study, folder, n_draws = Path(sys.argv[1]), Path(sys.argv[2]), int(sys.argv[3])
    table, funnel, laps = hunt(study, n_draws)
    folder.mkdir(parents=True, exist_ok=True)
    table.to_csv(folder / "candidates.csv", index=False)
    (folder / "run.json").write_text(json.dumps({"counts": funnel, "seconds": laps}))


if __name__ == "__main__":
    main()
