"""`miner scan`."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from miner.cli.shared import show

if TYPE_CHECKING:
    from datetime import datetime


@click.command()
@click.argument("book", type=click.Path(path_type=Path))
@click.option("--alerts", required=True, help="The alert log: a path, a glob or a database URL.")
@click.option("--query", default=None, help="Of a database.")
@click.option("--as-of", type=click.DateTime(["%Y-%m-%d"]), default=None,
              help="Last date that counts.  [default: that of the last alert]")  # fmt: skip
@click.option("--format", "form", type=click.Choice(["table", "csv", "json"]), default="table",
              show_default=True)  # fmt: skip
def scan(book: Path, alerts: str, query: str | None, as_of: datetime | None, form: str) -> None:
    """Tell which rules of BOOK have triggered, and which are one alert short."""
    from miner.rule_book import read_rule_book
    from miner.scan import scan as run
    from miner.scan_output import scan_csv, scan_json, scan_lines

    result = run(
        read_rule_book(book),
        {"source": alerts, "query": query} if query else alerts,
        book_folder=book.parent,
        as_of=None if as_of is None else as_of.date(),
    )
    if form == "table":
        show(scan_lines(result))
    else:
        click.echo(scan_csv(result) if form == "csv" else scan_json(result), nl=False)
