"""A small desk: four quarters of alerts and events as plain sets, a rule book, and its reviews.

Names of types and companies are letters; the world is the twin's (`naive.World`), so that every
count can be made again by brute force.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
from naive import World
from tiny_worlds import FIRST_DAY, write_study

from miner import load_study
from miner.review import Review, review
from miner.rule_book import BookRule, RuleBook, rule_id, write_rule_book
from miner.rule_book.records import RunOrigin

TYPES = ("a", "b", "c", "d")
LOOKBACK, HORIZON, REST = 3, 4, 4
N_SESSIONS = 372  # from 2021-01-01, every day: four quarters and a week
QUARTERS = {"2021Q1": (0, 89), "2021Q2": (90, 180), "2021Q3": (181, 272), "2021Q4": (273, 364)}
ADOPTED = "2021-02-11"  # session 41
HELD_TO = "2021-02-10"


def small_world(
    seed: int,
    *,
    hold: float = 0.6,
    sectors: bool = True,
    coverage: bool = False,
    n_entities: int = 18,
    pair_every: int = 9,
) -> World:
    """A world in which the pair a + b is followed by an upset in a share ``hold`` of cases."""
    rng = np.random.default_rng(seed)
    names = [f"n{i:02d}" for i in range(n_entities)]
    alerts: set[tuple[str, str, int]] = set()
    events: set[tuple[str, str, int]] = set()
    shocks = set(rng.integers(0, N_SESSIONS, 6).tolist())
    for i, name in enumerate(names):
        busy = rng.uniform(0.5, 1.5)
        for t in range(N_SESSIONS):
            alerts |= {(name, k, t) for k in TYPES if rng.random() < 0.02 * busy}
            chance = 0.012 * busy * (12.0 if t in shocks and i % 3 == 0 else 1.0)
            if rng.random() < chance:
                events.add((name, "upset", t))
        t = int(rng.integers(1, 2 * pair_every))
        while t < N_SESSIONS:
            alerts |= {(name, "a", t), (name, "b", t - int(rng.integers(0, 2)))}
            if rng.random() < hold:
                events.add((name, "upset", t + int(rng.integers(1, HORIZON + 1))))
            t += HORIZON + int(rng.integers(2, 2 * pair_every))
    events = {event for event in events if event[2] < N_SESSIONS}
    peers = tuple((name, None, None, ("x", "y", "z")[i % 3]) for i, name in enumerate(names))
    rows = None
    if coverage:
        rows = tuple(
            (name, "", 30 * (i % 3 == 0), 300 if i % 5 == 0 else None)
            for i, name in enumerate(names)
        )
    return World(
        n_sessions=N_SESSIONS,
        alerts=frozenset(alerts),
        events=frozenset(events),
        known=tuple(names),
        targets=("upset",),
        lookback=LOOKBACK,
        horizon=HORIZON,
        rest=REST,
        max_size=2,
        min_triggers=8,
        min_hits=2,
        discovery_end=230,
        holdout_start=240,
        coverage=rows,
        peers=peers if sectors else None,
    )


def rule(
    *combination: str,
    run: str | None = "first",
    precision: float | None = 0.5,
    status: str = "live",
    target: str = "upset",
    **more: Any,
) -> BookRule:
    """A rule of the book; ``run`` None: written by hand."""
    return BookRule(
        id=rule_id(target, "all", combination, LOOKBACK, HORIZON, REST),
        target=target,
        combination=combination,
        lookback=LOOKBACK,
        horizon=HORIZON,
        rest=REST,
        run=run,
        precision=precision,
        status=status,
        **{"expected": 0.06, **more},
    )


@dataclass
class Desk:
    """A folder with a study and a rule book, and where its reviews go."""

    folder: Path
    settings: dict[str, Any]

    @property
    def book(self) -> Path:
        """The rule book."""
        return self.folder / "rules.toml"

    @property
    def ledger(self) -> Path:
        """The ledger."""
        return self.folder / "ledger.sqlite"

    def review(self, quarter: str, **options: Any) -> Review:
        """Review without the hunt unless asked."""
        study = load_study(self.folder / "study.toml")
        study = replace(study, review=study.review.model_copy(update=self.settings))
        how = {"with_hunt": False, "who": "ada", "n_workers": 2} | options
        return review(self.book, study, quarter, how.pop("ledger", self.ledger), **how)


def make_desk(
    folder: Path,
    world: World,
    rules: list[BookRule],
    *,
    held_to: str = HELD_TO,
    **settings: Any,
) -> Desk:
    """Write a world and a book of rules; ``settings`` are keys of [review]."""
    write_study(world, folder)
    run = RunOrigin(
        study="small",
        version="0",
        discovery_to="2020-06-30",
        holdout_from="2020-07-15",
        holdout_to=held_to,
        rules_sha256="0",
    )
    used = {"first": run} if any(r.run == "first" for r in rules) else {}
    book = RuleBook(format=1, sessions={"calendar": "daily"}, run=used, rule=tuple(rules))
    write_rule_book(book, folder / "rules.toml", replace=True)
    return Desk(folder, settings)


def session(day: str) -> int:
    """Session of a date."""
    return (date.fromisoformat(day) - FIRST_DAY).days
