"""A made-up review of any size and with any names, as the records of a review. Nothing is run."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from miner.review.records import (
    EntityChange,
    Evidence,
    EvidencePoint,
    ListedRule,
    MovedInputs,
    NewRule,
    QuarterLine,
    Review,
    Revision,
    RuleReview,
    Span,
    Status,
    Trigger,
    TypeChange,
    TypeQuarter,
    TypeWeeks,
    WindowHunt,
    Workload,
)

QUARTERS = ("2024Q2", "2024Q3", "2024Q4", "2025Q1", "2025Q2", "2025Q3")
FIRST = dt.date(2024, 4, 1)
STATUSES: tuple[Status, ...] = ("keep", "retire", "watch", "too early")
E = {"keep": 0.0123, "retire": 214.0, "watch": 7.25, "too early": 1.0}


def made_up_review(
    n_rules: int = 6,
    *,
    seed: int = 0,
    types: Sequence[str] = ("amber", "birch", "cedar", "dune", "ember"),
    target: str = "upset",
    strata: Sequence[str] = ("all", "large"),
    entities: Sequence[str] = ("Ardent Loom", "Brisk Quay", "Calm Ridge"),
    study: str = "a made-up desk",
    statuses: Sequence[Status] = STATUSES,
    **changes: Any,
) -> Review:
    """Numbers are drawn, and hang together only loosely; ``changes`` replace fields."""
    rng = np.random.default_rng(seed)
    rules = tuple(
        _rule(rng, i, types, target, strata[i % len(strata)], entities, statuses)
        for i in range(n_rules)
    )
    review = Review(
        study=study, book="rules.toml", ledger="desk.db", quarter=QUARTERS[-1], first="2025-07-01",
        last="2025-09-30", sessions=1761, program="0.1.0", who="ines", why="the autumn meeting",
        alpha=0.05, keep_share=0.9, watch_at=5.0, min_triggers=10, restart_quarters=4,
        hang_together="peers",
        counts={s: sum(rule.status == s for rule in rules)
                for s in ("retire", "watch", "keep", "too early")},
        rules=rules,
        retired=(ListedRule("ff", f"{types[0]} + {types[1]}", target, "all", "shocks only"),),
        workload=tuple(Workload(q, n_rules, 70 + i, 60 + i, 20, 2.25)
                       for i, q in enumerate(QUARTERS)),
        hunt=_hunt(types, target, rules),
        inputs=_inputs(rng, types, entities),
        warnings=(f"{types[0]} was written by hand.",),
        entries=(1201, 1297),
        is_accepted=False,
    )  # fmt: skip
    return replace(review, **changes)


def nothing_to_say() -> Review:
    """A review of an empty book whose inputs did not move."""
    still = MovedInputs((QUARTERS[-1],), (), (), (), 0.05, 0, (), ())
    return made_up_review(
        0, hunt=None, inputs=still, workload=(), retired=(), warnings=(), entries=None
    )


def _rule(
    rng: np.random.Generator,
    i: int,
    types: Sequence[str],
    target: str,
    stratum: str,
    entities: Sequence[str],
    statuses: Sequence[Status],
) -> RuleReview:
    status = statuses[i % len(statuses)]
    combination = tuple(dict.fromkeys((types[i % len(types)], types[(i + 1) % len(types)])))
    is_new = i % 11 == 10  # not adopted yet
    triggers, lines, points = [], [], []
    log = 0.0
    for q, quarter in enumerate(() if is_new else QUARTERS):
        n = int(rng.poisson(2 if status == "too early" else 12))
        days = sorted(int(day) for day in rng.integers(0, 84, n))
        hits = 0
        for day in days:
            date = FIRST + dt.timedelta(91 * q + day)
            hit = bool(rng.random() < (0.05 if status == "retire" else 0.4))
            hits += hit
            log += (-0.5 if hit else 0.35) if status != "keep" else -0.05
            entity = entities[len(triggers) % len(entities)]
            close = str(date + dt.timedelta(7))
            triggers.append(Trigger(quarter, entity, str(date), close, hit, 0.04, "banks"))
            e = float(np.exp(np.clip(log, -40, 40)))
            points.append(EvidencePoint(close, quarter, len(triggers), 1 / e, e))
        last = points[-1] if points else EvidencePoint("", quarter, 0, 1.0, 1.0)
        share = hits / n if n else None
        lines.append(
            QuarterLine(quarter, n, hits, 0.04 * n, share, last.e_works, last.e_broken,
                        "ledger" if q < len(QUARTERS) - 1 else "now")
        )  # fmt: skip
    has_promise = i % 7 != 6 or status == "retire"
    e = E[status]
    return RuleReview(
        id=f"{i:010x}", name=" + ".join(combination), target=target, stratum=stratum,
        combination=combination, lookback=5, horizon=5, status_before="live", status_after="live",
        note="ask Dana first" if i == 1 else "", adopted=str(FIRST),
        promise=0.44 if has_promise else None, keep_above=0.396 if has_promise else None,
        expected_then=0.04,
        this_quarter=None if is_new else _span(lines[-1:]),
        last_year=None if is_new else _span(lines[-4:]),
        since=None if is_new else _span(lines),
        works=Evidence(1e9 / e, 2e9, QUARTERS[-1], 1e9, 5.5, "2025Q2", True, 1e-9),
        broken=Evidence(e, 2 * e, QUARTERS[-2], e, e / 2, "2025Q2", e > 100, min(1.0, 3 / e))
        if has_promise else None,
        clusters=40, in_evidence=max(len(triggers) - 2, 0), waiting=min(len(triggers), 2),
        status=status,
        reasons=(f"the reason for {status}", *(["the log was revised"] if i == 2 else [])),
        marks=("amber came 2.4 times as often",) if i % 5 == 3 else (),
        quarters=tuple(lines), evidence=tuple(points), triggers=tuple(triggers),
        revisions=(Revision("2025Q1", 1, 0, 2, 3),) if i == 2 else (),
    )  # fmt: skip


def _span(lines: Sequence[QuarterLine]) -> Span:
    n, hits = sum(line.triggers for line in lines), sum(line.hits for line in lines)
    share = hits / n if n else None
    return Span(
        lines[0].quarter, lines[-1].quarter, n, hits, sum(line.expected_hits for line in lines),
        share, None if share is None else max(0.0, share - 0.12),
        None if share is None else min(1.0, share + 0.15), n < 30,
    )  # fmt: skip


def _hunt(types: Sequence[str], target: str, rules: Sequence[RuleReview]) -> WindowHunt:
    base = NewRule(
        "aa", f"{types[2]} + {types[3]}", target, "all", (types[2], types[3]), "new", None, 0.08,
        "confirmed", 80, 30, 0.375, 26, 10, 0.385, 0.22, 0.58, 1.1, 2e-7, 0.0026, True, "lord++",
        False, "p 2e-07 is at most the level 0.0026",
    )  # fmt: skip
    untested = replace(base, level=None, is_rejected=None, procedure=None)
    like = rules[0].id if rules else None
    others = (
        replace(base, id="ab", name=types[4], fate="new", p_holdout=0.3, is_rejected=False),
        replace(untested, id=like or "0", fate="persisting", reason="in the book"),
        replace(untested, id="bb", fate="explained", like=like, overlap=0.83, reason="near"),
        replace(
            untested, id=rules[1].id if len(rules) > 1 else "1", fate="gone", overlap=None,
            holdout_triggers=None, holdout_hits=None, holdout_precision=None, holdout_low=None,
            holdout_high=None, holdout_expected_hits=None, p_holdout=None, reason="did not pass",
        ),
    )  # fmt: skip
    return WindowHunt(
        "2019-01-02", "2025-09-30", "2023-09-06", "2023-09-21", 536, 120, "lord++", 0.05, 17, 4,
        (base, *others),
    )  # fmt: skip


def _inputs(rng: np.random.Generator, types: Sequence[str], entities: Sequence[str]) -> MovedInputs:
    weeks = tuple(str(dt.date(2023, 10, 9) + dt.timedelta(7 * w)) for w in range(103))
    rows = tuple(
        TypeQuarter(t, q, int(rng.poisson(400)), 298.0, 0.6, 0.021, 15.5, (11.0, 17.2), 0.06,
                    types[0], 0.11, 0.1)
        for t in types for q in QUARTERS
    )  # fmt: skip
    changes = (
        TypeChange(types[0], "level", "2025-07-21", 4e-4, 1e-3, 2.4, f"{types[0]} came more often"),
        TypeChange("drone pass", "new", "2025-08-04", None, None, None, "drone pass is new"),
    )
    moved = (
        EntityChange(entities[0], "joined", "2025-08-01", "coverage", 12),
        EntityChange(entities[-1], "left", "2025-09-12", "coverage", 3),
    )
    weekly = tuple(TypeWeeks(t, tuple(rng.poisson(40, len(weeks)).tolist())) for t in types)
    return MovedInputs(QUARTERS, rows, changes, moved, 0.05, len(types), weeks, weekly)
