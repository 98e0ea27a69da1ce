"""What to tell about a path that leads to no file."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from pathlib import Path

_MOST_ENTRIES = 2000  # of a folder looked through for a similar name
_LEAST_LIKENESS = 0.75  # alerts.csv and events.csv are less alike


def is_file(path: Path) -> bool:
    """Tell whether a path is a file; one that no system could hold is none."""
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def similar(path: Path, endings: Sequence[str] = ()) -> str:
    """Return 'Did you mean "..."? ' for the file beside `path` that is most like it, else "".

    endings: of the only files that come into question, in lower case; none means all.
    """
    try:
        entries = sorted(entry.name for entry in path.parent.iterdir() if is_file(entry))
    except (OSError, ValueError):
        return ""
    names = [
        name
        for name in entries[:_MOST_ENTRIES]
        if not name.startswith(".") and (not endings or name.lower().endswith(tuple(endings)))
    ]
    folded = {name.casefold(): name for name in reversed(names)}
    near = difflib.get_close_matches(path.name.casefold(), folded, 1, _LEAST_LIKENESS)
    return f'Did you mean "{folded[near[0]]}"? ' if near else ""


def where_it_leads(source: str, folder: Path, endings: Sequence[str] = ()) -> str:
    """Return what to try for a path in a settings file that leads to no file."""
    path = folder / source
    at = f"Paths are relative to the folder of the settings, {absolute(folder)}"
    try:
        is_folder, has_parent = path.is_dir(), path.parent.is_dir()
    except (OSError, ValueError):
        is_folder, has_parent = False, True
    if is_folder:
        inside = f"{source.rstrip('/')}/*.csv"
        return f'That is a folder: write "{inside}" to read the files in it. {at}.'
    if not has_parent:
        return f"There is no folder {absolute(path.parent)}. {at}."
    return f"{similar(path, endings)}{at}."


def absolute(path: Path) -> Path:
    """Return a path from the root, links as they are."""
    try:
        return path.absolute()
    except (OSError, ValueError):
        return path
