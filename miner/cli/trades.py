"""`miner trades`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("book", type=click.Path(path_type=Path))
@click.argument("study", type=click.Path(path_type=Path))
@click.option("--run", type=click.Path(path_type=Path), default=None,
              help="The run of the rules: the test then allows for all it tried.")  # fmt: skip
@click.option("--direction", type=click.Choice(["long", "short"]), default=None,
              help="For all rules.  [default: as the target says]")  # fmt: skip
@click.option("--output", type=click.Path(path_type=Path), default=None,
              help="Folder for the tables.")  # fmt: skip
@click.option("--replace", is_flag=True, help="Replace tables that are there.")
@workers_option
def trades(
    book: Path,
    study: Path,
    run: Path | None,
    direction: str | None,
    output: Path | None,
    replace: bool,
    workers: int | None,
) -> None:
    """Tell what trades on the rules of BOOK would have earned, with the prices of STUDY."""
    from miner.rule_book import read_rule_book
    from miner.settings import load_study
    from miner.trades import evaluate_trades, trade_lines, tried_in, write_trades
    from miner.workers import n_default

    with shown_progress() as progress:
        settings = load_study(study)
        result = evaluate_trades(
            read_rule_book(book),
            settings,
            tried=tried_in(run, settings) if run else (),
            direction=direction,
            n_workers=workers or n_default(),
            progress=progress,
        )
    if output is not None:
        write_trades(result, output, replace=replace)
    show(trade_lines(result))
