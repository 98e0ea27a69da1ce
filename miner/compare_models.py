"""What an explainable rule costs: its precision beside that of fitted classifiers.

The classifiers see the same windows, and features of entity and calendar on top; everything about
them is chosen inside discovery. On the holdout each is given the threshold at which it triggers
as often as the rules do.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from miner.chosen import ChosenRule
from miner.columns import POOLED
from miner.judged import judge_rules
from miner.kernels import windows as kernels
from miner.seeds import stream
from miner.settings import Study
from miner.time_split import DiscoverySlice, HoldoutSlice, Segment
from miner.units import Case, bare_cases

MOST_ROWS = 60_000  # cells to fit on: all in an event window, or half of this, and a sample
RECENT_SESSIONS = (20, 60)
SHRINK_SESSIONS = 250.0

Cells = tuple[np.ndarray, np.ndarray]


def compare_models(
    early: DiscoverySlice,
    late: HoldoutSlice,
    dates: np.ndarray,
    rules: Sequence[ChosenRule],
    is_confirmed: Sequence[bool],
    study: Study,
    n_workers: int = 1,
) -> list[dict[str, Any]]:
    """One record a target with rules: precision on the holdout at equal numbers of triggers.

    ``rules`` are taken together: their triggers on the holdout, each entity-session once. The
    classifiers' triggers keep ``rest`` sessions apart on an entity, as the rules' do.
    """
    records = []
    for target in sorted({rule.target for rule in rules}):
        mine = [i for i, rule in enumerate(rules) if rule.target == target]
        case_early, case_late = _case(early, target, study), _case(late, target, study)
        models = _fit(case_early, dates, study)
        kinds = {"rules": mine, "confirmed rules": [i for i in mine if is_confirmed[i]]}
        for kind, members in kinds.items():
            cells = _triggers_of([rules[i] for i in members], late, study, n_workers)
            n = cells[0].size
            if n == 0:
                continue
            record: dict[str, Any] = {"target": target, "against": kind, "triggers": n}
            record[kind] = float(case_late.is_window_et[cells].mean())
            for name, score in models.items():
                chosen = _loudest(case_late, score(case_late), n, study.windows.rest)
                record[name] = float(case_late.is_window_et[chosen].mean())
                record[f"{name} triggers"] = int(chosen[0].size)
            records.append(record)
    return records


def _case(segment: Segment, target: str, study: Study) -> Case:
    """All entities together, without combinations."""
    return bare_cases(segment, [target], {POOLED: None}, **study.windows.model_dump())[0]


def _triggers_of(
    rules: Sequence[ChosenRule], segment: Segment, study: Study, n_workers: int
) -> Cells:
    """Entity-sessions on which any of the rules triggers."""
    judged = judge_rules(segment, rules, n_workers=n_workers, **study.windows.model_dump())
    parts = [unit.case.unit.triggers.of(row) for unit, row in judged]
    if not parts:
        return np.empty(0, dtype=np.int32), np.empty(0, dtype=np.int32)
    pairs = np.unique(np.concatenate([np.stack(part) for part in parts], axis=1), axis=1)
    return pairs[0], pairs[1]


class _Features:
    """Features of cells, each known at the cell's session.

    Flags of the alert types on within the look-back and their number; the entity's shrunk rate of
    event windows in discovery; events of the entity, and of its peer group by entity, in the last
    20 and 60 sessions; season and weekday.
    """

    def __init__(self, discovery: Case, dates: np.ndarray) -> None:
        is_open_et = discovery.unit.is_open_et
        cells_e = is_open_et.sum(axis=1)
        windows_e = (is_open_et & discovery.is_window_et).sum(axis=1)
        overall = windows_e.sum() / max(1, cells_e.sum())
        rate_e = (windows_e + SHRINK_SESSIONS * overall) / (cells_e + SHRINK_SESSIONS)
        self.rate_e = np.log(np.maximum(rate_e, 1e-9))
        self.day = dates.astype("datetime64[D]").astype(int)

    def of(self, case: Case, cells: Cells) -> np.ndarray:
        """float32 [cells, features]."""
        entity, session = cells
        unit = case.unit
        panel = unit.segment.panel
        is_on = kernels.types_before(entity, session + 1, panel.alert_ekw, unit.lookback)
        event_et = np.zeros((panel.n_entities, panel.n_sessions + 1), dtype=np.int32)
        own_entity, own_session = panel.events[case.target]
        event_et[own_entity, own_session + 1] = 1
        before_et = np.cumsum(event_et, axis=1)  # events on sessions < t
        peers = panel.peers
        n_groups = len(peers.names)
        group = peers.code_et[entity, session]
        event_gt = np.zeros((n_groups, panel.n_sessions + 1))
        np.add.at(event_gt, (peers.code_et[own_entity, own_session], own_session + 1), 1.0)
        size_g = np.bincount(peers.code_et[:, -1], minlength=n_groups)
        before_gt = np.cumsum(event_gt, axis=1) / np.maximum(size_g, 1)[:, None]
        columns = [is_on, is_on.sum(axis=1), self.rate_e[entity]]
        for span in RECENT_SESSIONS:
            start = np.maximum(session + 1 - span, 0)
            columns += [
                before_et[entity, session + 1] - before_et[entity, start],
                before_gt[group, session + 1] - before_gt[group, start],
            ]
        day = self.day[session]
        angle = 2 * np.pi * (day % 365.25) / 365.25
        columns += [np.sin(angle), np.cos(angle), np.sin(4 * angle), np.cos(4 * angle)]
        columns += [(day + 3) % 7 == weekday for weekday in range(5)]
        return np.column_stack([np.asarray(c, dtype=np.float32) for c in columns])


def _fit(case: Case, dates: np.ndarray, study: Study) -> dict[str, Any]:
    """Functions from a case to the scores of its open cells, by name of the classifier.

    Each is tuned on the last three tenths of discovery, an embargo after the first seven, by
    average precision, and refitted on all of discovery.
    """
    from sklearn.ensemble import HistGradientBoostingClassifier
    from sklearn.linear_model import LogisticRegression
    from sklearn.metrics import average_precision_score
    from sklearn.pipeline import make_pipeline
    from sklearn.preprocessing import StandardScaler

    features = _Features(case, dates)
    rng = stream(study.testing.seed, "compare models", case.target)
    entity, session = _sample(case, rng)
    x = features.of(case, (entity, session))
    y = case.is_window_et[entity, session]
    cut = int(0.7 * case.unit.segment.last)
    is_first = session <= cut - study.holdout.embargo
    is_second = session > cut
    grids: dict[str, list[Any]] = {
        "gradient boosting": [
            HistGradientBoostingClassifier(
                learning_rate=rate, max_leaf_nodes=leaves, max_iter=100, random_state=0
            )
            for rate in (0.03, 0.1)
            for leaves in (7, 31)
        ],
        "logistic regression": [
            make_pipeline(StandardScaler(), LogisticRegression(C=c, max_iter=500))
            for c in (0.01, 0.1, 1.0)
        ],
    }
    scores = {}
    for name, grid in grids.items():
        best = max(
            grid,
            key=lambda model: average_precision_score(
                y[is_second],
                model.fit(x[is_first], y[is_first]).predict_proba(x[is_second])[:, 1],
            ),
        ).fit(x, y)
        scores[name] = lambda other, model=best: _score(model, features, other)
    return scores


def _sample(case: Case, rng: np.random.Generator) -> Cells:
    """Open cells to fit on, in order of entity and session."""
    entity, session = np.nonzero(case.unit.is_open_et)
    is_set = case.is_window_et[entity, session]
    chosen = []
    for members in (np.flatnonzero(is_set), np.flatnonzero(~is_set)):
        keep = min(members.size, MOST_ROWS // 2)
        chosen.append(rng.choice(members, keep, replace=False))
    rows = np.sort(np.concatenate(chosen))
    return entity[rows], session[rows]


def _score(model: Any, features: _Features, case: Case) -> np.ndarray:
    """Scores of all open cells in a float64 array [entities, sessions], -inf elsewhere."""
    score_et = np.full(case.unit.is_open_et.shape, -np.inf)
    entity, session = np.nonzero(case.unit.is_open_et)
    for start in range(0, entity.size, 500_000):
        part = slice(start, start + 500_000)
        cells = entity[part], session[part]
        score_et[cells] = model.predict_proba(features.of(case, cells))[:, 1]
    return score_et


def _loudest(case: Case, score_et: np.ndarray, n: int, rest: int) -> Cells:
    """The triggers of the lowest threshold that gives at most ``n``, ``rest`` sessions apart.

    Cells at the threshold itself are told apart by a rank, so that the number comes out near n.
    """
    flat = score_et[case.unit.is_open_et]
    order = np.argsort(-flat, kind="stable")
    rank = np.empty(flat.size, dtype=np.int64)
    rank[order] = np.arange(flat.size)
    rank_et = np.full(score_et.shape, flat.size, dtype=np.int64)
    rank_et[case.unit.is_open_et] = rank
    low, high = n, min(flat.size, 200 * n)
    best = kernels.spaced(rank_et, low, rest)
    while low <= high:
        middle = (low + high) // 2
        found = kernels.spaced(rank_et, middle, rest)
        if found[0].size <= n:
            best, low = found, middle + 1
        else:
            high = middle - 1
    return best
