"""`miner hunt`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("study", type=click.Path(path_type=Path))
@click.option(
    "--output",
    type=click.Path(path_type=Path),
    default=None,
    help="Folder to write.  [default: NAME-run beside the study]",
)
@click.option("--replace", is_flag=True, help="Replace the folder of an earlier run.")
@click.option("--compare-models", is_flag=True,
              help="Fit classifiers too, and set their precision beside the rules'.")  # fmt: skip
@workers_option
def hunt(
    study: Path, output: Path | None, replace: bool, compare_models: bool, workers: int | None
) -> None:
    """Find rules in STUDY (a settings file) and judge them on later data."""
    from miner.hunting import hunt as run
    from miner.settings import load_study
    from miner.summary import hunt_lines

    with shown_progress() as progress:
        settings = load_study(study)
        folder = output or study.with_name(f"{study.stem}-run")
        result = run(
            settings,
            folder,
            n_workers=workers,
            replace=replace,
            compare=compare_models,
            progress=progress,
        )
    show(hunt_lines(result))
