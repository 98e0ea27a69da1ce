"""New against old: the hunt on the window that ends with the quarter, beside the rule book.

A rule of the hunt is persisting when the book has it, explained when most of its triggers have one
of a book's rule nearby, and else new. New ones are put to an online false discovery procedure over
the ledger's whole history, each once.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from miner.assemble import Inputs
from miner.columns import JOINER
from miner.hunting import Hunt, hunt
from miner.ledger import Item
from miner.redundancy import share_near
from miner.review.history import History
from miner.review.outcomes import is_known
from miner.review.records import Fate, NewRule, WindowHunt
from miner.rule_book import BookRule, RuleBook
from miner.rule_cases import rule_cases
from miner.sequential.online import Tested, test_batch
from miner.settings import ReviewSettings, Study
from miner.time_split import Segment
from miner.workers import Progress, silent

MOST = 0.5  # share of a rule's triggers near another's from which that one explains it
DEFAULT_HOLDOUT = 0.3


@dataclass(frozen=True)
class Found:
    """What the window's hunt found, beside the book; the online procedure has not run yet.

    ``rows`` are the hunt's rules and, at the end, the book's that it did not find.
    """

    record: Mapping[str, Any]
    rows: tuple[NewRule, ...]
    not_looked_for: tuple[str, ...]

    @property
    def ids(self) -> list[str]:
        """Ids of the hunt's rules, in the order found."""
        return [row.id for row in self.rows if row.fate != "gone"]


def study_of_window(study: Study) -> Study:
    """The study with a holdout that moves with the window, and without what a review does not
    show: placebo worlds, folds, the plain shuffle."""
    share = study.review.holdout_share or study.holdout.share or DEFAULT_HOLDOUT
    return replace(
        study,
        holdout=study.holdout.model_copy(update={"start": None, "share": share, "folds": 0}),
        testing=study.testing.model_copy(update={"placebo": 0, "shuffle": 0}),
    )


def hunt_window(
    inputs: Inputs, book: RuleBook, *, n_workers: int = 1, progress: Progress = silent
) -> Found:
    """Hunt in inputs cut at the quarter's end, and sort what is found against the book.

    Raises
    ------
    SettingsError : the window is too short to be split
    """
    study = study_of_window(inputs.study)
    result = hunt(study, n_workers=n_workers, inputs=inputs, progress=progress)
    windows = study.windows
    rules = [
        _as_rule(row, windows.lookback, windows.horizon, windows.rest)
        for row in result.rules.to_dict("records")
    ]
    triggers = _triggers(inputs, [*rules, *book.rule], n_workers)
    known = book.by_id()
    rows = [
        _row(rule, row, book, known, triggers)
        for rule, row in zip(rules, result.rules.to_dict("records"), strict=True)
    ]
    found = {rule.id for rule in rules}
    lost, other = [], []
    for rule in book.rule:
        if rule.status == "retired" or rule.id in found:
            continue
        same = (windows.lookback, windows.horizon, windows.rest)
        if (rule.lookback, rule.horizon, rule.rest) != same or rule.target not in inputs.targets:
            other.append(rule.id)
        else:
            lost.append(_gone(rule, result))
    return Found(result.record, (*rows, *lost), tuple(other))


def _as_rule(row: Mapping[str, Any], lookback: int, horizon: int, rest: int) -> BookRule:
    rule = BookRule(
        id="x",
        target=row["target"],
        stratum=row["stratum"],
        combination=tuple(row["combination"].split(JOINER)),
        lookback=lookback,
        horizon=horizon,
        rest=rest,
    )
    return rule.model_copy(update={"id": rule.own_id})


def _triggers(
    inputs: Inputs, rules: Sequence[BookRule], n_workers: int
) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Triggers on the whole window of each rule that the panel knows, by id."""
    panel = inputs.panel
    known = list({rule.id: rule for rule in rules if is_known(panel, rule)}.values())
    cases = rule_cases(Segment(panel, 0, panel.n_sessions - 1), known, n_workers=n_workers)
    return {rule.id: case.triggers for rule, case in zip(known, cases, strict=True)}


def _row(
    rule: BookRule,
    row: Mapping[str, Any],
    book: RuleBook,
    known: Mapping[str, BookRule],
    triggers: Mapping[str, tuple[np.ndarray, np.ndarray]],
) -> NewRule:
    fate: Fate = "new"
    like, overlap, reason = None, None, "not in the book"
    if rule.id in known:
        fate, like, overlap = "persisting", rule.id, 1.0
        reason = f"in the book, {known[rule.id].status}"
    else:
        nearest = max(
            (
                (
                    share_near(triggers[rule.id], triggers[old.id], max(rule.horizon, old.horizon)),
                    old,
                )
                for old in book.rule
                if old.target == rule.target and old.id in triggers
            ),
            key=lambda pair: -1.0 if math.isnan(pair[0]) else pair[0],
            default=None,
        )
        if nearest is not None and not math.isnan(nearest[0]):
            overlap, like = nearest[0], nearest[1].id
            if overlap >= MOST and not row["sharpens"]:
                fate = "explained"
                reason = (
                    f"{overlap:.0%} of its triggers have one of {nearest[1].name} "
                    f"({nearest[1].stratum}, {nearest[1].status}) within the horizon"
                )
            else:
                reason += f"; {overlap:.0%} of its triggers near one of {nearest[1].name}"
    if row["sharpens"]:
        reason += f"; sharpens {row['sharpens']}"
    return NewRule(
        id=rule.id,
        name=rule.name,
        target=rule.target,
        stratum=rule.stratum,
        combination=rule.combination,
        fate=fate,
        like=like,
        overlap=overlap,
        verdict=row["verdict"],
        triggers=_whole(row["triggers"]),
        hits=_whole(row["hits"]),
        precision=_number(row["precision"]),
        holdout_triggers=_whole(row["holdout_triggers"]),
        holdout_hits=_whole(row["holdout_hits"]),
        holdout_precision=_number(row["holdout_precision"]),
        holdout_low=_number(row["holdout_low"]),
        holdout_high=_number(row["holdout_high"]),
        holdout_expected_hits=_number(row["holdout_expected_hits"]),
        p_holdout=_number(row["holdout_p_value"]),
        level=None,
        is_rejected=None,
        procedure=None,
        is_tested_before=False,
        reason=reason,
    )


def _gone(rule: BookRule, result: Hunt) -> NewRule:
    """A rule of the book that the window's hunt did not make one, and why as far as it is known."""
    table = result.candidates
    mine = table[
        (table["target"] == rule.target)
        & (table["stratum"] == rule.stratum)
        & (table["combination"] == JOINER.join(sorted(rule.combination)))
    ].to_dict("records")
    if not mine:
        reason, row = "too few triggers in the window, or too few of them before events", None
    else:
        row = mine[0]
        reason = "did not pass in the window"
        if row["explained_by"]:
            reason = f"passed, but {row['explained_by']} accounts for it"
    return NewRule(
        id=rule.id,
        name=rule.name,
        target=rule.target,
        stratum=rule.stratum,
        combination=tuple(rule.combination),
        fate="gone",
        like=None,
        overlap=None,
        verdict=None if row is None else row["verdict"],
        triggers=None if row is None else _whole(row["triggers"]),
        hits=None if row is None else _whole(row["hits"]),
        precision=None if row is None else _number(row["precision"]),
        holdout_triggers=None,
        holdout_hits=None,
        holdout_precision=None,
        holdout_low=None,
        holdout_high=None,
        holdout_expected_hits=None,
        p_holdout=None,
        level=None,
        is_rejected=None,
        procedure=None,
        is_tested_before=False,
        reason=reason,
    )


def put_to_test(
    found: Found, history: History, settings: ReviewSettings, quarter: str
) -> tuple[WindowHunt, list[Item]]:
    """Put the new rules that were never tested to the online procedure, in the order of their ids.

    What it returns as entries has to reach the ledger before anyone else reads its history.
    """
    fresh = sorted(
        (row for row in found.rows if row.fate == "new" and row.id not in history.tested_rules),
        key=lambda row: row.id,
    )
    p = [1.0 if row.p_holdout is None else row.p_holdout for row in fresh]
    tests = test_batch(settings.procedure, history.tested, np.array(p), alpha=settings.alpha)
    said = {row.id: test for row, test in zip(fresh, tests, strict=True)}
    items = [
        Item(
            "hypothesis",
            row.id,
            quarter,
            {
                "p": float(test.p),
                "level": float(test.level),
                "rejected": bool(test.is_rejected),
                "procedure": settings.procedure,
                "alpha": settings.alpha,
                "target": row.target,
                "stratum": row.stratum,
                "combination": list(row.combination),
            },
        )
        for row, test in zip(fresh, tests, strict=True)
    ]
    rows = []
    for row in found.rows:
        if row.id in said:
            rows.append(_tested(row, said[row.id], settings.procedure, None))
        elif row.fate == "new":
            when = history.test_quarter[row.id]
            rows.append(_tested(row, history.tested_rules[row.id], settings.procedure, when))
        else:
            rows.append(row)
    every = [*history.tested, *tests]
    record = found.record
    split, counts = record["split"], record["counts"]
    return (
        WindowHunt(
            record["calendar"]["first"],
            record["calendar"]["last"],
            split["discovery_last"],
            split["holdout_first"],
            counts["family"],
            counts["passed"].get(record["settings"]["testing"]["adjust"], 0),
            settings.procedure,
            settings.alpha,
            len(every),
            sum(test.is_rejected for test in every),
            tuple(rows),
        ),
        items,
    )


def _tested(row: NewRule, test: Tested, procedure: str, quarter: str | None) -> NewRule:
    verb = "is at most" if test.is_rejected else "is above"
    words = f"p {test.p:.2g} {verb} the level {test.level:.2g} of {procedure}"
    if quarter is not None:
        words += f", tested in {quarter} and never again"
    return replace(
        row,
        level=float(test.level),
        is_rejected=bool(test.is_rejected),
        procedure=procedure,
        is_tested_before=quarter is not None,
        reason=f"{row.reason}; {words}",
    )


def _whole(value: Any) -> int | None:
    return None if pd.isna(value) else int(value)


def _number(value: Any) -> float | None:
    return None if pd.isna(value) else float(value)
