"""The hunt: the stages in order. The only place that holds both parts of the calendar."""

from __future__ import annotations

import platform
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from dataclasses import replace as replace_in
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from miner import run_folder, workers
from miner.assemble import Inputs, assemble
from miner.by_quarter import by_quarter
from miner.candidates import candidates_table, rules_table
from miner.columns import CONFIRMED
from miner.compare_models import compare_models
from miner.errors import SettingsError, explain
from miner.evidence import gather
from miner.holdout import judge_holdout
from miner.input_warnings import find_warnings
from miner.price_moves import moves_summary, moves_table
from miner.run_record import (
    counts_of,
    distrust,
    open_rate,
    shuffle_table,
    step_of,
    walk_table,
)
from miner.search import codes_of, families_of, families_until, placebo_rules, search
from miner.settings import Study, load_study
from miner.time_split import discovery_slice, holdout_slice
from miner.units import bare_cases
from miner.walk_forward import plan, walk_forward
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

    def __repr__(self) -> str:
        n, confirmed = (self.record["counts"][key] for key in ("rules", "confirmed"))
        return (
            f"Hunt({self.record['study']!r}: {len(self.candidates):,} candidates, "
            f"{n:,} rule{'s' * (n != 1)}, {confirmed:,} confirmed, folder {self.folder})"
        )


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
    inputs: Inputs | None = None,
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
    inputs : the study's tables, where they have been read; default: they are read
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
        inputs = assemble(study, progress) if inputs is None else replace_in(inputs, study=study)
        last, first = split_sessions(inputs)
    panel = inputs.panel
    early = discovery_slice(panel, last)
    late = holdout_slice(panel, first, panel.n_sessions - 1)
    folds = plan(panel.n_sessions, study)
    with stages.stage("triggers of every combination"):
        # label-blind: found once, up to the latest session any discovery here looks at
        latest = max([last, *(until for until, _, _ in folds)])
        families = families_of(discovery_slice(panel, latest), study, n_workers)
    with stages.stage("searching"):
        own = families_until(families, last, study, n_workers)
        found = search(early, inputs.targets, study, own, progress=progress, n_workers=n_workers)
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
        fold_rules = walk_forward(panel, inputs.targets, study, folds, families, n_workers)
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
            shuffled = shuffle_table(found, study, n_workers)

    record = {
        "study": study.name,
        "command": f"miner hunt {study.path.name}" if study.path else None,
        "settings": study.as_dict(),
        "warnings": [*study.warnings, *distrust(found, study)],
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
        | counts_of(found, outcomes, testing.fdr),
        "margins": [
            {
                "target": f.case.target,
                "stratum": f.case.unit.stratum,
                "sweeps": f.margins.n_sweeps,
                "largest_miss": f.margins.miss,
                "events": int(f.case.events[0].size),
                "family": f.size,
                "proposed": f.n_proposed,
                "base_rate": open_rate(f.case.unit.is_open_et, f.case.is_window_et),
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
            step_of(found, rule, chosen, outcome, order)
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
        walk_table(inputs, fold_rules),
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
