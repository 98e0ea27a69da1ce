"""`miner report`."""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--open", "show_it", is_flag=True, help="Open it in the browser.")
def report(run: Path, show_it: bool) -> None:
    """Render the report of RUN (a run's folder) again."""
    from miner.report import render

    page = render(run)
    click.echo(f"Written to {page}")
    if show_it:
        click.launch(str(page.resolve()))
