"""The command line: each command is parse, one library call, print.

Exit status 0 done, 2 the user's input or settings are wrong, 1 a fault of ours.
"""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from miner.errors import InputError

if TYPE_CHECKING:
    from miner.workers import Progress

OVERVIEW = """Find which combinations of alerts come before events more often than chance, the
calendar and busy names explain.

Research, not advice."""


class Commands(click.Group):
    """A group whose commands report wrong input in one message."""

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except InputError as error:
            click.echo(f"error: {error}", err=True)
            ctx.exit(2)


@click.group(cls=Commands, help=OVERVIEW, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="combination-signal-miner", prog_name="miner")
def main() -> None:
    """The program."""


workers_option = click.option(
    "--workers",
    type=click.IntRange(min=1),
    default=None,
    help="Threads to use; the answer does not depend on it.  [default: all cores]",
)


@main.command()
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
    from miner.summary import hunt_lines

    with shown_progress() as progress:
        folder = output or study.with_name(f"{study.stem}-run")
        result = run(
            study,
            folder,
            n_workers=workers,
            replace=replace,
            compare=compare_models,
            progress=progress,
        )
    show(hunt_lines(result))


@main.command()
@click.argument("study", type=click.Path(path_type=Path))
@workers_option
def check(study: Path, workers: int | None) -> None:
    """Tell what STUDY's tables hold, what could be found in them, and what looks wrong."""
    from miner.checking import check as run
    from miner.summary import check_lines

    with shown_progress() as progress:
        result = run(study, n_workers=workers, progress=progress)
    show(check_lines(result))


@main.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--open", "show_it", is_flag=True, help="Open it in the browser.")
def report(run: Path, show_it: bool) -> None:
    """Render the report of RUN (a run's folder) again."""
    from miner.report import render

    page = render(run)
    click.echo(f"Written to {page}")
    if show_it:
        click.launch(str(page.resolve()))


@main.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("demo"))
@click.option("--seed", type=click.IntRange(min=0), default=None, help="Another invented world.")
@workers_option
def demo(folder: Path, seed: int | None, workers: int | None) -> None:
    """Write an invented scenario into FOLDER, hunt in it, and compare with what was planted."""
    from miner.demo.play import demo_lines, play

    with shown_progress() as progress:
        played = play(folder, seed=seed, n_workers=workers, progress=progress)
    show(demo_lines(played))


def show(lines: Iterable[str]) -> None:
    """Print lines."""
    for line in lines:
        click.echo(line)


@contextmanager
def shown_progress() -> Iterator[Progress]:
    """Progress on standard error: a live bar on a terminal, a line a stage elsewhere."""
    if not sys.stderr.isatty():
        yield _line
        return
    from rich import progress as bars
    from rich.console import Console

    columns = (
        bars.TextColumn("{task.description:<32}"),
        bars.BarColumn(),
        bars.TimeElapsedColumn(),
    )
    with bars.Progress(*columns, console=Console(stderr=True), transient=True) as shown:
        task = shown.add_task("starting", total=None)

        def tell(stage: str, share: float | None = None) -> None:
            if share is None:
                shown.reset(task, description=stage, total=None)
            else:
                shown.update(task, description=stage, total=1.0, completed=share)

        yield tell


def _line(stage: str, share: float | None = None) -> None:
    if share is None:
        click.echo(f"{stage} ...", err=True)


if __name__ == "__main__":
    main()
