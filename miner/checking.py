"""What to know before hunting: what the tables hold, what could be found, what looks wrong."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from miner import workers
from miner.assemble import Inputs, assemble
from miner.hunting import split_sessions
from miner.input_warnings import find_warnings
from miner.kernels import bits
from miner.search import cases_of, codes_of
from miner.settings import Study, load_study
from miner.time_split import discovery_slice, holdout_slice
from miner.units import Case, bare_cases
from miner.workers import Progress, silent

TRIGGER_COUNTS = (20, 50, 100, 200)


@dataclass(frozen=True)
class Check:
    """What ``miner check`` tells.

    Attributes
    ----------
    record : counts of rows, sessions, the split, the family's size
    types : one row an alert type: alerts (distinct sessions), entities with any, entities ever
        covered, share followed by the same type within the look-back
    targets : one row a target and stratum: events and base rate in discovery and holdout
    power : per target, stratum and number of triggers, the fewest hits, and the precision, that
        would pass discovery as the only finding of a family of this size, and the holdout as the
        only rule, were every trigger's chance the base rate
    warnings : what looks wrong, in words
    """

    record: dict[str, Any]
    types: pd.DataFrame
    targets: pd.DataFrame
    power: pd.DataFrame
    warnings: tuple[str, ...]

    def __repr__(self) -> str:
        said = self.record
        return (
            f"Check({said['study']!r}, {said['first']} to {said['last']}: {said['entities']:,} "
            f"entities, {len(self.types):,} alert types, family {said['family']:,}, "
            f"{len(self.warnings)} warnings)"
        )


def check(
    study: Study | str | Path,
    *,
    n_workers: int | None = None,
    progress: Progress = silent,
) -> Check:
    """Read a study's tables and tell what a hunt would have to work with.

    Raises
    ------
    InputError : the settings or a table cannot be used; the message says what to change
    """
    if not isinstance(study, Study):
        study = load_study(study)
    n_workers = n_workers or workers.n_default()
    inputs = assemble(study, progress)
    last, first = split_sessions(inputs)
    panel, calendar = inputs.panel, inputs.calendar
    progress("counting combinations")
    early = cases_of(discovery_slice(panel, last), inputs.targets, study, n_workers=n_workers)
    late = bare_cases(
        holdout_slice(panel, first, panel.n_sessions - 1),
        inputs.targets,
        codes_of(panel, study),
        **study.windows.model_dump(),
    )
    family = sum(len(case.unit.triggers.combos) for case in early)
    record = {
        "study": study.name,
        "calendar": calendar.name,
        "timezone": calendar.timezone,
        "sessions": panel.n_sessions,
        "first": str(calendar.dates[0]),
        "last": str(calendar.dates[-1]),
        "discovery_last": str(calendar.dates[last]),
        "holdout_first": str(calendar.dates[first]),
        "entities": panel.n_entities,
        "tables": inputs.counts,
        "family": family,
        "fdr": study.testing.fdr,
        "alpha": study.holdout.alpha,
    }
    targets = _targets(early, late)
    return Check(
        record,
        _types(inputs),
        targets,
        _power(targets, family, study),
        (
            *study.warnings,
            *inputs.clock_notes,
            *find_warnings(inputs, early, late, calendar.dates),
        ),
    )


def _types(inputs: Inputs) -> pd.DataFrame:
    panel, lookback = inputs.panel, inputs.study.windows.lookback
    sessions, followed, entities = bits.repeats(panel.alert_ekw, lookback)
    covered = (panel.cover_eqw != 0).any(axis=2).sum(axis=0)
    share = np.full(sessions.size, np.nan)
    np.divide(followed, sessions, out=share, where=sessions > 0)
    return pd.DataFrame(
        {
            "type": panel.type_names,
            "alerts": sessions,
            "entities": entities,
            "entities_covered": covered[panel.class_k],
            "followed_within_lookback": share,
        }
    )


def _base_rate(case: Case) -> float:
    cells = int(case.unit.is_open_et.sum())
    return float((case.unit.is_open_et & case.is_window_et).sum() / cells) if cells else np.nan


def _targets(early: list[Case], late: list[Case]) -> pd.DataFrame:
    return pd.DataFrame(
        [
            {
                "target": a.target,
                "stratum": a.unit.stratum,
                "family": len(a.unit.triggers.combos),
                "events_discovery": a.events[0].size,
                "events_holdout": b.events[0].size,
                "base_rate_discovery": _base_rate(a),
                "base_rate_holdout": _base_rate(b),
            }
            for a, b in zip(early, late, strict=True)
        ]
    )


def _power(targets: pd.DataFrame, family: int, study: Study) -> pd.DataFrame:
    rows = []
    for target in targets.itertuples():
        for n in TRIGGER_COUNTS:
            found = least_hits(n, target.base_rate_discovery, study.testing.fdr / max(1, family))
            held = least_hits(n, target.base_rate_holdout, study.holdout.alpha)
            rows.append(
                {
                    "target": target.target,
                    "stratum": target.stratum,
                    "triggers": n,
                    "hits_discovery": found,
                    "precision_discovery": found / n if found <= n else np.nan,
                    "hits_holdout": held,
                    "precision_holdout": held / n if held <= n else np.nan,
                }
            )
    return pd.DataFrame(rows)


def least_hits(n: int, rate: float, level: float) -> int:
    """Fewest hits in ``n`` triggers with a binomial tail of at most ``level``; n + 1 if none."""
    if not np.isfinite(rate):
        return n + 1
    tail = stats.binom.sf(np.arange(n + 1) - 1, n, rate)
    return int(np.argmax(tail <= level)) if (tail <= level).any() else n + 1
