"""`miner demo`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("demo"))
@click.option("--seed", type=click.IntRange(min=0), default=None, help="Another invented world.")
@workers_option
def demo(folder: Path, seed: int | None, workers: int | None) -> None:
    """Write an invented scenario into FOLDER, hunt in it, and compare with what was planted.

    An earlier demo in FOLDER is written over.
    """
    from miner.demo.play import demo_lines, play

    with shown_progress() as progress:
        played = play(folder, seed=seed, n_workers=workers, progress=progress)
    show(demo_lines(played))
