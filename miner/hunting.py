"""The hunt: the stages in order. The only place that holds both parts of the calendar."""

from __future__ import annotations

import platform
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from miner import run_folder, workers
from miner.assemble import Inputs, assemble
from miner.by_quarter import by_quarter
from miner.candidates import candidates_table, rules_table
from miner.chosen import ChosenRule
from miner.columns import CONFIRMED, JOINER, ODDS
from miner.compare_models import compare_models
from miner.errors import SettingsError, explain
from miner.evidence import gather
from miner.explain_away import Rule
from miner.holdout import Outcome, judge_holdout
from miner.input_warnings import find_warnings
from miner.nulls.plain_shuffle import PlainShuffleNull
from miner.price_moves import moves_summary, moves_table
from miner.search import Search, codes_of, placebo_rules, search
from miner.settings import Study, load_study
from miner.time_split import discovery_slice, holdout_slice
from miner.units import bare_cases
from miner.walk_forward import FoldRule, walk_forward
from miner.wording import combination_name
from miner.workers import Progress, silent

PACKAGES = (
    "combination-signal-miner",
    "numpy",
    "scipy",
    "pandas",
    "scikit-learn",
    "mlxtend",
    "numba",
    "pyarrow",
    "exchange_calendars",
)


@dataclass(frozen=True)
class Hunt:
    """A hunt's whole result.

    Attributes
    ----------
    candidates, rules : tables with the columns of ``miner.columns``
    quarters : precision of each rule by quarter, over the whole study
    walk_forward : rules of each fold with what the next fold said
    evidence : what ``evidence.json`` holds: what the report shows beyond the tables
    record : what ``run.json`` holds: settings, counts, placebo, steps, versions, timings
    set_aside : unreadable rows that the study asked to set aside
    moves : the price moves that were targets, or None
    folder : the run's folder, None if nothing was written
    """

    candidates: pd.DataFrame
    rules: pd.DataFrame
    quarters: pd.DataFrame
    walk_forward: pd.DataFrame
    plain_shuffle: pd.DataFrame | None
    record: dict[str, Any]
    evidence: dict[str, Any]
    set_aside: pd.DataFrame
    moves: pd.DataFrame | None = None
    folder: Path | None = None


@dataclass
class Stages:
    """Times the stages and tells a listener of each."""

    listener: Progress = silent
    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time what runs inside under ``name``."""
        self.listener(name)
        start = time.perf_counter()
        yield
        self.seconds[name] = round(time.perf_counter() - start, 3)


def split_sessions(inputs: Inputs) -> tuple[int, int]:
    """Last session of discovery and first of the holdout.

    Raises
    ------
    SettingsError : one of the two would be too short to hold a trigger with its horizon
    """
    study, n_sessions = inputs.study, inputs.panel.n_sessions
    windows, holdout = study.windows, study.holdout
    if holdout.start is not None:
        first = int(inputs.calendar.index_of_date(holdout.start))
        said = f"start = {holdout.start}"
    else:
        first = n_sessions - round((holdout.share or 0.0) * n_sessions)
        said = f"share = {holdout.share}"
    last = first - holdout.embargo - 1
    needed = windows.lookback + windows.horizon
    if last + 1 < needed or n_sessions - first < needed:
        raise SettingsError(
            explain(
                "[holdout]",
                said,
                f"leave at least {needed} sessions on either side of the {holdout.embargo}-session "
                "embargo",
                f"{max(last + 1, 0)} before and {max(n_sessions - first, 0)} from it on, of "
                f"{n_sessions} sessions in all",
                "Move the start, or widen [sessions] start and end.",
            )
        )
    return last, first


def hunt(
    study: Study | str | Path,
    output: str | Path | None = None,
    *,
    n_workers: int | None = None,
    replace: bool = False,
    compare: bool = False,
    progress: Progress = silent,
) -> Hunt:
    """Find the combinations of alerts that precede events, and judge them on later data.

    Parameters
    ----------
    study : settings, or the path of a settings file
    output : folder to write; it appears whole or not at all. None writes nothing
    n_workers : threads; the answer does not depend on it
    replace : put the new folder in the place of one that exists
    compare : fit classifiers too, and set their precision on the holdout beside the rules'
    progress : called with the name of each stage as it begins, and with the share done of some

    Raises
    ------
    InputError : the settings or a table cannot be used; the message says what to change
    """
    if not isinstance(study, Study):
        study = load_study(study)
    if output is not None:
        run_folder.check_free(Path(output), replace)
    n_workers = n_workers or workers.n_default()
    stages = Stages(progress)
    windows, testing = study.windows, study.testing

    with stages.stage("reading"):
        inputs = assemble(study, progress)
        last, first = split_sessions(inputs)
    panel = inputs.panel
    early = discovery_slice(panel, last)
    late = holdout_slice(panel, first, panel.n_sessions - 1)
    with stages.stage("searching"):
        found = search(early, inputs.targets, study, progress=progress, n_workers=n_workers)
    with stages.stage("placebo worlds"):
        placebo = placebo_rules(found, study, n_workers, progress)
    rules = found.chosen()
    with stages.stage("holdout"):
        outcomes = judge_holdout(
            late,
            rules,
            alpha=study.holdout.alpha,
            lookback=windows.lookback,
            horizon=windows.horizon,
            rest=windows.rest,
            n_workers=n_workers,
        )
    with stages.stage("own timing and intervals"):
        candidates = candidates_table(found, outcomes, n_workers)
    with stages.stage("walk-forward"):
        folds, fold_rules = walk_forward(panel, inputs.targets, study, n_workers)
        quarters = by_quarter(panel, inputs.calendar.dates, rules, study, n_workers)
    models = None
    if compare:
        with stages.stage("fitting classifiers"):
            models = compare_models(
                early,
                late,
                inputs.calendar.dates,
                rules,
                [outcome.verdict == CONFIRMED for outcome in outcomes],
                study,
                n_workers,
            )
    with stages.stage("evidence"):
        bare = bare_cases(late, inputs.targets, codes_of(panel, study), **windows.model_dump())
        seen = tuple(
            find_warnings(inputs, [f.case for f in found.found], bare, inputs.calendar.dates)
        )
        evidence = gather(
            found,
            outcomes,
            candidates,
            panel,
            inputs.calendar.dates,
            study,
            holdout_first=first,
            warnings=seen,
            n_workers=n_workers,
        )
    shuffled = None
    if testing.shuffle:
        with stages.stage("plain shuffle"):
            shuffled = _plain_shuffle(found, study, n_workers)

    record = {
        "study": study.name,
        "command": f"miner hunt {study.path.name}" if study.path else None,
        "settings": study.as_dict(),
        "warnings": [*study.warnings, *_distrust(found, study)],
        "versions": {"python": platform.python_version()} | {p: version(p) for p in PACKAGES},
        "calendar": {
            "name": inputs.calendar.name,
            "timezone": inputs.calendar.timezone,
            "sessions": panel.n_sessions,
            "first": str(inputs.calendar.dates[0]),
            "last": str(inputs.calendar.dates[-1]),
            "fingerprint": inputs.calendar.fingerprint,
        },
        "split": {
            "discovery_last": str(inputs.calendar.dates[last]),
            "holdout_first": str(inputs.calendar.dates[first]),
            "embargo": study.holdout.embargo,
            "discovery_sessions": last + 1,
            "holdout_sessions": panel.n_sessions - first,
        },
        "inputs": inputs.fingerprints,
        "counts": {
            "tables": inputs.counts,
            "entities": panel.n_entities,
            "alert_types": len(panel.type_names),
        }
        | _counts(found, outcomes, testing.fdr),
        "margins": [
            {
                "target": f.case.target,
                "stratum": f.case.unit.stratum,
                "sweeps": f.margins.n_sweeps,
                "largest_miss": f.margins.miss,
                "events": int(f.case.events[0].size),
                "family": f.size,
                "proposed": f.n_proposed,
                "base_rate": _open_rate(f.case.unit.is_open_et, f.case.is_window_et),
            }
            for f in found.found
        ],
        "placebo": {
            "worlds": len(placebo),
            "rules": placebo,
            "mean_rules": float(np.mean(placebo)) if placebo else None,
            "share_with_any": float(np.mean(np.array(placebo) > 0)) if placebo else None,
        },
        "rules": [
            _step(found, rule, chosen, outcome, order)
            for order, (rule, chosen, outcome) in enumerate(
                zip(found.explanation.rules, rules, outcomes, strict=True), start=1
            )
        ],
        "walk_forward": [
            {
                "fold": number,
                "found_until": str(inputs.calendar.dates[until]),
                "judged_from": str(inputs.calendar.dates[start]),
                "judged_to": str(inputs.calendar.dates[stop]),
                "rules": sum(r.fold == number for r in fold_rules),
                "triggers": sum(r.triggers for r in fold_rules if r.fold == number),
                "hits": sum(r.hits for r in fold_rules if r.fold == number),
                "expected_hits": sum(r.expected for r in fold_rules if r.fold == number),
            }
            for number, (until, start, stop) in enumerate(folds, start=1)
        ],
        "moves": None if inputs.moves is None else moves_summary(inputs.moves),
        "models": models,
        "seconds": stages.seconds,
    }
    result = Hunt(
        candidates,
        rules_table(candidates),
        quarters,
        _walk_table(inputs, fold_rules),
        shuffled,
        record,
        evidence.as_dict(),
        inputs.set_aside,
        None
        if inputs.moves is None
        else moves_table(inputs.moves, panel.entity_names, inputs.calendar.dates),
        None if output is None else Path(output),
    )
    if output is not None:
        progress("writing")
        run_folder.write(result, Path(output), replace)
    return result


LEANING = 0.01
HIGH_BASE_RATE = 0.1


def _distrust(found: Search, study: Study) -> Iterator[str]:
    """Reasons not to believe a hunt that the hunt itself can see."""
    for f in found.found:
        rate = _open_rate(f.case.unit.is_open_et, f.case.is_window_et)
        if study.testing.margins == ODDS and rate is not None and rate > HIGH_BASE_RATE:
            yield (
                f"target {f.case.target!r}, stratum {f.case.unit.stratum!r}: at a base rate of "
                f"{rate:.0%} odds that multiply can expect too few hits where busy names meet busy "
                'dates; margins = "hazard" in [testing] holds its level there.'
            )
    for f, lean in zip(found.found, found.leans, strict=False):
        if lean <= LEANING:
            yield (
                f"target {f.case.target!r}, stratum {f.case.unit.stratum!r}: the family as a whole "
                f"leans towards events (p {lean:.2g}), not only the rules. A peer column may be "
                "missing, or names have busy spells of their own; no null here removes those."
            )


def _counts(found: Search, outcomes: list[Outcome], fdr: float) -> dict[str, Any]:
    p = [f.p for f in found.found]
    passed = {}
    for how in ("bh", "by", "westfall-young"):
        if how != "westfall-young" or found.adjuster.has_draws:
            adjusted = np.concatenate(found.adjuster.adjusted(p, how))
            passed[how] = int((adjusted <= fdr).sum())
    return {
        "family": found.adjuster.family,
        "proposed": sum(f.n_proposed for f in found.found),
        "candidates": sum(int(f.rows.size) for f in found.found),
        "passed": passed,
        "rules": len(outcomes),
        "confirmed": sum(outcome.verdict == CONFIRMED for outcome in outcomes),
    }


def _open_rate(is_open_et: np.ndarray, is_window_et: np.ndarray) -> float | None:
    cells = int(is_open_et.sum())
    return float((is_open_et & is_window_et).sum() / cells) if cells else None


def _step(
    found: Search, rule: Rule, chosen: ChosenRule, outcome: Outcome, order: int
) -> dict[str, Any]:
    """A rule's numbers at the step at which it was taken, and its holdout beyond the table."""
    panel = found.found[rule.case].case.unit.segment.panel
    explained = sum(place == order - 1 for place in found.explanation.explained_by.values())
    return {
        "order": order,
        "target": chosen.target,
        "stratum": chosen.stratum,
        "combination": combination_name(panel, chosen.combo),
        "step": {
            "triggers": rule.triggers,
            "hits": rule.hits,
            "expected_hits": rule.expected,
            "standardised_excess": rule.excess,
            "p": rule.p,
            "adjusted": rule.adjusted,
        },
        "instead_of": None if rule.instead_of is None else combination_name(panel, rule.instead_of),
        "sharpens": None if chosen.sharpens is None else combination_name(panel, chosen.sharpens),
        "p_sharper": rule.p_sharper,
        "explains": explained,
        "holdout": {
            "p_holm": outcome.p_holm,
            "power": outcome.power,
            "p_sharper": outcome.p_sharper,
            "too_few_clusters": outcome.is_few,
            "verdict": outcome.verdict,
        },
    }


def _walk_table(inputs: Inputs, rows: list[FoldRule]) -> pd.DataFrame:
    dates = inputs.calendar.dates
    return pd.DataFrame(
        [
            {
                "fold": row.fold,
                "found_until": str(dates[row.found_until]),
                "judged_from": str(dates[row.first]),
                "judged_to": str(dates[row.last]),
                "target": row.target,
                "stratum": row.stratum,
                "combination": JOINER.join(inputs.panel.type_names[k] for k in row.combo),
                "triggers": row.triggers,
                "hits": row.hits,
                "expected_hits": row.expected,
                "p_value": row.p,
            }
            for row in rows
        ],
        columns=[
            "fold",
            "found_until",
            "judged_from",
            "judged_to",
            "target",
            "stratum",
            "combination",
            "triggers",
            "hits",
            "expected_hits",
            "p_value",
        ],
    )


def _plain_shuffle(found: Search, study: Study, n_workers: int) -> pd.DataFrame:
    """What the plain shuffle says of the candidates, for comparison only."""
    null = PlainShuffleNull(study.testing.shuffle, study.testing.seed)
    parts = []
    for f in found.found:
        verdict = null.judge(f.case, f.rows, n_workers)
        table, panel = f.case.unit.triggers, f.case.unit.segment.panel
        parts.append(
            pd.DataFrame(
                {
                    "target": f.case.target,
                    "stratum": f.case.unit.stratum,
                    "combination": [combination_name(panel, table.combos[r]) for r in f.rows],
                    "triggers": table.count_c[f.rows],
                    "hits": f.hits[f.rows],
                    "expected_hits": verdict.expected_hits,
                    "p_plain_shuffle": verdict.p_value,
                    "p_margins": f.p[f.rows],
                }
            )
        )
    return pd.concat(parts, ignore_index=True)
