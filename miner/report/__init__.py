"""The report people read: ``report.html`` and ``candidates.xlsx``, from a run's folder alone."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from miner.report.read_run import Run

PAGE = "report.html"
WORKBOOK = "candidates.xlsx"


def render(run_folder: str | Path) -> Path:
    """Write the report of a whole run into its folder and return the page's path.

    Raises
    ------
    OutputError : the folder is no whole run, or it cannot be written
    """
    from miner import placing
    from miner.errors import OutputError, explain
    from miner.report.read_run import read_run

    folder = Path(run_folder)
    run = read_run(folder)
    try:
        whole = folder.resolve()
        with placing.aside(whole) as aside:
            _write(run, aside)
            placing.put_files(aside, whole)
        return folder / PAGE
    except OSError as error:
        raise OutputError(
            explain(
                "report",
                str(folder),
                "be writable",
                f"the system's error: {error.strerror or error}",
                "Free some space, or copy the run's folder to where it can be written.",
            )
        ) from error


def render_into(folder: Path) -> Path:
    """As ``render``, for a folder that is being written; errors of the system come as they are."""
    from miner.report.read_run import read_run

    _write(read_run(folder), folder)
    return folder / PAGE


def _write(run: Run, folder: Path) -> None:
    from miner.report.page import page
    from miner.report.workbook import write_workbook

    text = page(run)
    write_workbook(run, folder / WORKBOOK)
    (folder / PAGE).write_text(text, encoding="utf-8")
