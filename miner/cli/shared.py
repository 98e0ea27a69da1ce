"""What the commands share: options, printing, and progress on standard error."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from miner.workers import Progress

workers_option = click.option(
    "--workers",
    type=click.IntRange(min=1),
    default=None,
    help="Threads to use; the answer does not depend on it.  [default: all cores]",
)


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
