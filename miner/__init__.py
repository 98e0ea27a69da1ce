"""Combinations of alerts that come before events more often than chance explains.

``hunt(study)`` and ``check(study)`` are what the commands of the same names call; ``load_study``
reads a settings file and ``study_from_dict`` takes settings as a dictionary. Everything is
imported when first asked for.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from miner.checking import Check, check
    from miner.errors import InputError, MinerError
    from miner.hunting import Hunt, hunt
    from miner.settings import Study, load_study, study_from_dict

__all__ = [
    "Check",
    "Hunt",
    "InputError",
    "MinerError",
    "Study",
    "check",
    "hunt",
    "load_study",
    "study_from_dict",
]

_HOME = {
    "Check": "checking",
    "check": "checking",
    "Hunt": "hunting",
    "hunt": "hunting",
    "InputError": "errors",
    "MinerError": "errors",
    "Study": "settings",
    "load_study": "settings",
    "study_from_dict": "settings",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'miner' has no attribute {name!r}")
    import importlib

    return getattr(importlib.import_module(f"miner.{_HOME[name]}"), name)
