"""The whole study: load it, check it, and hand on one frozen record."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any

from ..errors import SettingsError, explain
from .checks import (
    Problems,
    check_holdout,
    check_sessions,
    check_table,
    check_testing,
    read_section,
)
from .paths import similar
from .sections import (
    SECTIONS,
    EventSettings,
    GroupSettings,
    HoldoutSettings,
    MiningSettings,
    PriceSettings,
    ReviewSettings,
    Section,
    SessionSettings,
    TableSettings,
    TestingSettings,
    WindowSettings,
)
from .toml_errors import TOO_DEEP, toml_advice
from .values import nearest, redact_url


@dataclass(frozen=True)
class Study:
    """One study's settings, every default filled in. `path` is None for a study from a dict."""

    path: Path | None
    folder: Path
    name: str
    alerts: TableSettings
    events: EventSettings
    groups: GroupSettings | None
    coverage: TableSettings | None
    prices: PriceSettings | None
    sessions: SessionSettings
    windows: WindowSettings
    mining: MiningSettings
    testing: TestingSettings
    holdout: HoldoutSettings
    review: ReviewSettings
    warnings: tuple[str, ...] = ()

    def as_dict(self) -> dict[str, Any]:
        """Return the settings ready for JSON, laid out as in the file, URLs redacted."""
        out: dict[str, Any] = {"study": {"name": self.name}}
        for item in fields(self):
            section = getattr(self, item.name)
            if isinstance(section, Section):
                out[item.name] = section.model_dump(mode="json", exclude_none=True)
            if isinstance(section, TableSettings):
                out[item.name]["source"] = redact_url(section.source)
        return out


def load_study(path: str | Path) -> Study:
    """Read and check a settings file.

    Raises `SettingsError`, one line per problem, all problems at once.
    """
    path = Path(path)

    def refuse(rule: str, found: str, advice: str) -> SettingsError:
        return SettingsError(explain(str(path), "file", rule, found, advice))

    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise refuse("be UTF-8 text", "other bytes", "Save it as UTF-8.") from error
    except (OSError, ValueError) as error:  # ValueError: a name that no system could hold
        found = getattr(error, "strerror", None) or str(error)
        raise refuse("be a settings file", found, _instead_of(path)) from error
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        found = TOO_DEEP if isinstance(error, RecursionError) else f"an error: {error}"
        raise refuse("be valid TOML", found, toml_advice(text, found)) from error
    return _build(raw, str(path), path, path.parent, path.stem)


def _instead_of(path: Path) -> str:
    """Return what to try for a path that is no settings file."""
    try:
        inside = sorted(path.glob("*.toml")) if path.is_dir() else []
    except (OSError, ValueError):
        inside = []
    if inside:
        return f"Name the settings file in that folder: {inside[0]}."
    return f"{similar(path, ('.toml',))}Check the path; the folder it starts from is {Path.cwd()}."


def study_from_dict(d: Mapping[str, Any], folder: str | Path) -> Study:
    """Check settings given as nested dicts, laid out as study.toml; None means "left out".

    Paths are relative to `folder`. Raises `SettingsError` as `load_study` does.
    """
    return _build(d, "settings", None, Path(folder), "study")


def _build(raw: Mapping[str, Any], where: str, path: Path | None, folder: Path, stem: str) -> Study:
    problems = Problems(where)
    for key in raw:
        if key not in SECTIONS:
            advice = nearest(key, SECTIONS)
            problems.add("settings", "hold known tables only", f"`[{key}]`", advice)
    # the two defaults that hang on something outside their own section
    raw = {
        **raw,
        "study": _with_default(raw.get("study"), "name", stem),
        "holdout": _with_default(raw.get("holdout"), "embargo", _reach(raw.get("windows"))),
    }
    parts: dict[str, Any] = {name: read_section(name, raw.get(name), problems) for name in SECTIONS}
    for name, part in parts.items():
        if isinstance(part, TableSettings):
            check_table(name, part, problems)
    sessions: SessionSettings = parts["sessions"] or SessionSettings()
    windows: WindowSettings = parts["windows"] or WindowSettings()
    check_sessions(sessions, problems)
    check_holdout(parts["holdout"] or HoldoutSettings(), sessions, windows, problems)
    check_testing(parts["testing"] or TestingSettings(), problems)
    if problems.lines:
        raise SettingsError("\n".join(problems.lines))
    name = parts.pop("study").name
    study = Study(path, folder, name, **parts)
    return replace(study, warnings=_warnings(study))


def _with_default(section: Any, key: str, value: Any) -> Any:
    if section is None:
        return {key: value}
    if isinstance(section, Mapping) and section.get(key) is None:
        return {**section, key: value}
    return section


def _reach(windows: Any) -> int:
    """Return horizon + lookback, with the default 5 for what is missing or wrong."""
    given = windows if isinstance(windows, Mapping) else {}
    sizes = (given.get("horizon"), given.get("lookback"))
    return sum(size if type(size) is int and 0 < size <= 10**9 else 5 for size in sizes)


def _warnings(study: Study) -> tuple[str, ...]:
    found = []
    windows, groups = study.windows, study.groups
    if windows.rest < windows.horizon:
        found.append(
            f"[windows] rest = {windows.rest} is below horizon = {windows.horizon}: windows "
            "overlap, one event can be counted twice, and p-values lose their meaning."
        )
    if groups is not None and groups.pooled and groups.strata is None:
        found.append("[groups] pooled = true changes nothing without strata.")
    prices, targets = study.prices, study.events.targets
    has_moves = targets is None or any(target.startswith("move ") for target in targets)
    if prices is not None and prices.moves == "extremes" and has_moves:
        found.append(
            '[prices] moves = "extremes": a move up starts at a low by definition, so alerts drawn '
            "from the same prices (falls, new lows) come before it in a random walk too. For such "
            'alerts moves = "close-to-close" is safer; see what trades on the rules earn.'
        )
    return tuple(found)
