"""Reads a review's folder: all its page knows."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from miner.errors import OutputError, explain

RECORD = "review.json"
FORMAT = 1


def read_review(folder: Path) -> dict[str, Any]:
    """What a review wrote into ``review.json``.

    Raises
    ------
    OutputError : the folder is no review's, or one of another version
    """
    try:
        review = json.loads((folder / RECORD).read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise _no_review(folder, f"no {RECORD} in it") from error
    except (OSError, ValueError) as error:
        raise _no_review(folder, f"one that cannot be read ({error})") from error
    found = review.get("format") if isinstance(review, dict) else None
    if found != FORMAT:
        raise _no_review(folder, f"{RECORD} of format {found}")
    return dict(review)


def _no_review(folder: Path, found: str) -> OutputError:
    return OutputError(
        explain(
            "report",
            str(folder),
            "be the folder of a review of this version",
            found,
            "Name the folder a review has written, or review again.",
        )
    )
