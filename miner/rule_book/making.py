"""Makes a rule book from a run's folder and the tables the run read."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from miner.assemble import Inputs, assemble
from miner.columns import CANDIDATE_COLUMNS, CONFIRMED, JOINER, REFUTED
from miner.errors import InputError, SettingsError, TableError, explain
from miner.evidence.lead_times import lead_times, share_caught, workload
from miner.kernels import profiles
from miner.price_moves import wanted_moves
from miner.redundancy import Redundancy, redundancy
from miner.rule_cases import RuleCase, combo_of, rule_cases, stratum_code
from miner.settings import Study, load_study, study_from_dict
from miner.time_split import Segment
from miner.triggers import find_triggers
from miner.workers import Progress, silent

from .differences import BookDiff, diff_rule_books
from .reading import read_rule_book
from .records import (
    DIGITS,
    FORMAT,
    BookRule,
    Findings,
    History,
    Lead,
    RuleBook,
    RunOrigin,
    Workload,
    rule_id,
)
from .writing import check_free, write_rule_book, write_whole

STATUS_OF_VERDICT = {CONFIRMED: "candidate", REFUTED: "retired"}  # else "watch"
HISTORY_COLUMNS = ["rule", "entity", "session", "outcome"]
PARENTS = 3


@dataclass(frozen=True)
class Made:
    """A rule book, and what was found out on the way.

    Attributes
    ----------
    history : the triggers so far of each rule: columns HISTORY_COLUMNS, where ``outcome`` is "hit",
        "miss", or "open" for a horizon that reaches past the study
    redundancy : by target, which of the rules that are not retired say the same
    changes : from the book that was replaced, None where there was none
    """

    book: RuleBook
    history: pd.DataFrame
    redundancy: tuple[Redundancy, ...] = ()
    changes: BookDiff | None = None


def make_rule_book(
    run: str | Path,
    path: str | Path,
    study: Study | str | Path | None = None,
    *,
    replace: bool = False,
    with_overlap: bool = False,
    n_workers: int = 1,
    progress: Progress = silent,
) -> Made:
    """Make a run's rule book and write it, with its history beside it.

    Where a book is replaced, the statuses and notes people gave its rules are kept, and so are
    rules that the run did not find again.

    Raises
    ------
    InputError : see ``rules_of``; or the file exists and may not be replaced, or is no rule book
    """
    path = Path(path)
    check_free(path, replace)
    old = read_rule_book(path) if path.exists() else None
    made = rules_of(
        run,
        study,
        book_folder=path.parent,
        with_overlap=with_overlap,
        n_workers=n_workers,
        progress=progress,
    )
    book, history = made.book, made.history
    if old is not None:
        book, history = carried_over(old, book), _history_carried_over(old, path.parent, history)
    made = dataclasses.replace(made, book=book, history=history)
    book = write_history(made, path)
    write_rule_book(book, path, replace=replace)
    changes = None if old is None else diff_rule_books(old, book)
    return dataclasses.replace(made, book=book, changes=changes)


def _history_carried_over(old: RuleBook, folder: Path, history: pd.DataFrame) -> pd.DataFrame:
    """The new history, with that of rules only the old book has."""
    before = folder / old.history.source if old.history is not None else None
    if before is None or not before.is_file():
        return history
    table = pd.read_csv(before, dtype=str, keep_default_na=False)
    lost = table[~table["rule"].isin(set(history["rule"]))]
    return pd.concat([history, lost], ignore_index=True)


def rules_of(
    run: str | Path,
    study: Study | str | Path | None = None,
    *,
    book_folder: str | Path | None = None,
    with_overlap: bool = False,
    n_workers: int = 1,
    progress: Progress = silent,
) -> Made:
    """The rules of a run as a rule book.

    Confirmed rules begin as candidates, underpowered ones as watched, refuted ones as retired.

    Parameters
    ----------
    run : the run's folder
    study : its study; by default the settings in run.json, on tables found in one of the folders
        above the run's
    book_folder : where the book will be written: its paths are relative to it (default: the run's)
    with_overlap : compare the rules that are not retired with one another

    Raises
    ------
    InputError : the folder is no run, or its study's tables are gone or have changed since
    """
    run = Path(run)
    record, table = read_run(run)
    if study is None:
        study = study_of_run(run, record)
    elif not isinstance(study, Study):
        study = load_study(study)
    _check_settings(run, record, study)
    inputs = assemble(study, progress)
    _check_inputs(run, record, inputs)
    progress("making the rule book")
    panel = inputs.panel
    windows = study.windows
    keys = [
        _Key(row["target"], row["stratum"], tuple(row["combination"].split(JOINER)),
             windows.lookback, windows.horizon, windows.rest)
        for row in table
    ]  # fmt: skip
    whole = Segment(panel, 0, panel.n_sessions - 1)
    cases = rule_cases(whole, keys, n_workers=n_workers)
    origin = _origin(run, record)
    name = _run_name(origin, record)
    rules = tuple(
        BookRule.model_validate(
            _rounded(_rule(key, row, step, case, inputs.calendar.dates, name).model_dump())
        )
        for key, row, step, case in zip(keys, table, record["rules"], cases, strict=True)
    )
    folder = Path(book_folder) if book_folder is not None else run
    book = RuleBook(
        format=FORMAT,
        sessions=_sessions(study, folder, str(inputs.calendar.dates[0])),
        alerts={"columns": dict(study.alerts.columns)} if study.alerts.columns else {},
        groups=None if study.groups is None else _section(study.groups, study, folder),
        coverage=None if study.coverage is None else _section(study.coverage, study, folder),
        history=None,
        run={name: origin},
        rule=rules,
    )
    kept = [rule for rule in rules if rule.status != "retired"] if with_overlap else []
    alike = redundancy(whole, kept, inputs.calendar.dates, n_workers=n_workers)
    return Made(book, _history(inputs, rules, n_workers), tuple(alike))


def write_history(made: Made, book_path: str | Path) -> RuleBook:
    """Write the triggers so far beside the book, and return the book with a word of them."""
    path = Path(book_path)
    target = path.with_name(f"{path.stem}-history.csv")
    write_whole(target, made.history.to_csv(index=False, lineterminator="\n"))
    return made.book.model_copy(update={"history": History(source=target.name)})


def carried_over(old: RuleBook, new: RuleBook) -> RuleBook:
    """The new book with the statuses and notes people gave its rules in the old one.

    Rules of the old book that the new run did not find stay as they are, at the end: that a rule
    was not found again is no reason to drop a live one unseen.
    """
    known = old.by_id()
    rules = [
        rule.model_copy(update={"status": known[rule.id].status, "note": known[rule.id].note})
        if rule.id in known
        else rule
        for rule in new.rule
    ]
    again = {rule.id for rule in rules}
    rules += [rule for rule in old.rule if rule.id not in again]
    used = {rule.run for rule in rules}
    runs = {name: run for name, run in {**old.run, **new.run}.items() if name in used}
    return new.model_copy(update={"rule": tuple(rules), "run": runs})


def read_run(run: Path) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    """A run's record, and its rules table as rows; undefined values are None.

    Raises
    ------
    TableError : the folder is not that of a run
    """
    try:
        record = json.loads((run / "run.json").read_text(encoding="utf-8"))
        text = dict.fromkeys(("target", "stratum", "combination", "sharpens"), str)
        table = pd.read_csv(run / "rules.csv", dtype=text, keep_default_na=False,
                            na_values={c: [""] for c in _NUMBERS} | {"sharpens": [""]})  # fmt: skip
        rows = [
            {key: None if pd.isna(value) else value for key, value in row.items()}
            for row in table.to_dict("records")
        ]
        if len(rows) != len(record["rules"]):
            raise ValueError("run.json and rules.csv hold different rules")
    except (OSError, ValueError, KeyError) as error:
        found = (getattr(error, "strerror", None) or str(error)).splitlines()[0][:200]
        raise TableError(
            explain(str(run), "folder", "be that of a run", found, "Name what `miner hunt` wrote.")
        ) from error
    return record, rows


_NUMBERS = [name for name, kind in CANDIDATE_COLUMNS.items() if kind != "text"]


def study_of_run(run: Path, record: Mapping[str, Any]) -> Study:
    """The study of a run, from the settings in its record, where its tables still are.

    Raises
    ------
    SettingsError : they are in none of the three folders above the run's
    """
    source = record["settings"]["alerts"]["source"]
    for folder in list(run.resolve().parents)[:PARENTS]:
        study = study_from_dict(record["settings"], folder)
        if study.alerts.is_database:
            break
        if (folder / source).is_file() or any(folder.glob(source) if "*" in source else ()):
            return study
    raise SettingsError(
        explain(
            str(run),
            "study",
            "be found from its run",
            f'no table "{source}" in the folders above the run\'s',
            "Name the study's settings file (--study).",
        )
    )


def _check_settings(run: Path, record: Mapping[str, Any], study: Study) -> None:
    now = json.loads(json.dumps(study.as_dict()))
    sections = ["sessions", "windows", "groups", "coverage", "events", "holdout"]
    if wanted_moves(study):
        sections.append("prices")
    for section in sections:
        if now.get(section) != record["settings"].get(section):
            raise SettingsError(
                explain(
                    str(run),
                    f"[{section}]",
                    "be the same in the study as in the run",
                    "other settings",
                    "Hunt again, or name the study as it was.",
                )
            )


def _check_inputs(run: Path, record: Mapping[str, Any], inputs: Inputs) -> None:
    changed = sorted(
        path for path, sha in record["inputs"].items() if inputs.fingerprints.get(path) != sha
    )
    if changed:
        raise TableError(
            explain(
                str(run),
                ", ".join(changed),
                "be what the run read",
                "other contents (by SHA-256)",
                "Hunt again on the tables as they are now.",
            )
        )


@dataclass(frozen=True)
class _Key:
    target: str
    stratum: str
    combination: tuple[str, ...]
    lookback: int
    horizon: int
    rest: int

    @property
    def id(self) -> str:
        return rule_id(
            self.target, self.stratum, self.combination, self.lookback, self.horizon, self.rest
        )


def _rule(
    key: _Key,
    row: Mapping[str, Any],
    step: Mapping[str, Any],
    case: RuleCase,
    dates: np.ndarray,
    run: str,
) -> BookRule:
    held = step["holdout"]
    n = int(row["holdout_triggers"] or 0)
    lead = lead_times(case.case, case.row)
    quartiles = np.quantile(lead, [0.25, 0.5, 0.75]) if lead.size else None
    caught = share_caught(case.case, case.row)
    expected_hits = row["holdout_expected_hits"]
    return BookRule(
        id=key.id,
        status=STATUS_OF_VERDICT.get(row["verdict"], "watch"),  # type: ignore[arg-type]
        target=key.target,
        stratum=key.stratum,
        combination=key.combination,
        lookback=key.lookback,
        horizon=key.horizon,
        rest=key.rest,
        verdict=row["verdict"],
        sharpens=row["sharpens"],
        run=run,
        precision=row["holdout_precision"],
        precision_low=row["holdout_low"],
        precision_high=row["holdout_high"],
        expected=expected_hits / n if n and expected_hits is not None else None,
        discovery=Findings(
            triggers=int(row["triggers"]),
            hits=int(row["hits"]),
            **{
                name: row[name]
                for name in ("precision", "precision_low", "precision_high", "base_rate",
                             "expected_hits", "p_value", "q_value", "p_own_timing")
            },
        ),
        holdout=Findings(
            triggers=n,
            hits=int(row["holdout_hits"] or 0),
            precision=row["holdout_precision"],
            precision_low=row["holdout_low"],
            precision_high=row["holdout_high"],
            base_rate=row["holdout_base_rate"],
            expected_hits=expected_hits,
            p_value=row["holdout_p_value"],
            p_holm=held["p_holm"],
            power=held["power"],
        ),
        lead=None
        if quartiles is None
        else Lead(
            quarter=float(quartiles[0]),
            median=float(quartiles[1]),
            three_quarters=float(quartiles[2]),
            hits=int(lead.size),
        ),
        workload=Workload(
            triggers_a_month=workload(case.case, case.row, dates),
            share_of_events=caught if caught == caught else None,
        ),
    )  # fmt: skip


def _rounded(value: Any) -> Any:
    """Numbers as the book's file holds them, so that a book is the same before and after it."""
    if isinstance(value, dict):
        return {key: _rounded(item) for key, item in value.items()}
    return float(f"{value:.{DIGITS}g}") if isinstance(value, float) else value


def _origin(run: Path, record: Mapping[str, Any]) -> RunOrigin:
    return RunOrigin(
        study=record["study"],
        version=record["versions"]["combination-signal-miner"],
        discovery_to=record["split"]["discovery_last"],
        holdout_from=record["split"]["holdout_first"],
        holdout_to=record["calendar"]["last"],
        rules_sha256=hashlib.sha256((run / "rules.csv").read_bytes()).hexdigest(),
        inputs=dict(record["inputs"]),
    )


def _run_name(origin: RunOrigin, record: Mapping[str, Any]) -> str:
    text = json.dumps([origin.rules_sha256, origin.inputs, record["settings"]], sort_keys=True)
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()[:8]


def _sessions(study: Study, folder: Path, first: str) -> dict[str, Any]:
    sessions = study.sessions.model_dump(mode="json", exclude_none=True)
    sessions.pop("end", None)
    if study.sessions.kind == "dates":
        sessions["calendar"] = _relative(study.folder / sessions["calendar"], folder)
    return {**sessions, "start": first}


def _section(section: Any, study: Study, folder: Path) -> dict[str, Any]:
    values = section.model_dump(mode="json", exclude_none=True)
    values = {key: value for key, value in values.items() if value not in ({}, "error", False)}
    if section.is_database:
        raise InputError(
            explain(
                "rule book",
                "groups and coverage",
                "come from files",
                "a database",
                "Export the table, so that a scan needs no password from the book.",
            )
        )
    return {**values, "source": _relative(study.folder / values["source"], folder)}


def _relative(path: Path, folder: Path) -> str:
    return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()


def _history(inputs: Inputs, rules: Sequence[BookRule], n_workers: int) -> pd.DataFrame:
    rows = [row for rule in rules for row in _triggers_so_far(inputs, rule, n_workers)]
    return pd.DataFrame(rows, columns=HISTORY_COLUMNS)


def _triggers_so_far(
    inputs: Inputs, rule: BookRule, n_workers: int
) -> Iterator[tuple[str, str, str, str]]:
    """Every trigger of the study, those too whose horizon reaches past its end."""
    panel = inputs.panel
    last = panel.n_sessions - 1
    table = find_triggers(
        Segment(panel, 0, last),
        [combo_of(panel, rule.combination)],
        stratum_code(panel, rule.stratum),
        lookback=rule.lookback,
        horizon=0,
        rest=rule.rest,
        n_workers=n_workers,
    )
    entity, session = table.of(0)
    wait = profiles.sessions_to_event(entity, session, *panel.events[rule.target])
    for e, t, w in zip(entity.tolist(), session.tolist(), wait.tolist(), strict=True):
        is_hit = 0 < w <= rule.horizon
        outcome = "hit" if is_hit else "open" if t + rule.horizon > last else "miss"
        yield rule.id, panel.entity_names[e], str(inputs.calendar.dates[t]), outcome
