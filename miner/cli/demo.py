"""`miner demo`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("demo"))
@click.option("--seed", type=click.IntRange(min=0), default=None, help="Another invented world.")
@click.option("--hunt-only", is_flag=True, help="Leave out the four quarters after the hunt.")
@workers_option
def demo(folder: Path, seed: int | None, hunt_only: bool, workers: int | None) -> None:
    """Write an invented scenario into FOLDER, hunt in it, and compare with what was planted.

    Then four more quarters pass, and the rules are reviewed at the end of each. An earlier demo in
    FOLDER is written over.
    """
    from miner.demo.play import demo_lines, play

    with shown_progress() as progress:
        played = play(
            folder, seed=seed, with_quarters=not hunt_only, n_workers=workers, progress=progress
        )
    show(demo_lines(played))
