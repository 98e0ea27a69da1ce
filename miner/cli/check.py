"""`miner check`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("study", type=click.Path(path_type=Path))
@workers_option
def check(study: Path, workers: int | None) -> None:
    """Tell what STUDY's tables hold, what could be found in them, and what looks wrong."""
    from miner.checking import check as run
    from miner.summary import check_lines

    with shown_progress() as progress:
        result = run(study, n_workers=workers, progress=progress)
    show(check_lines(result))
