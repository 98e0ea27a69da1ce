"""`miner review`."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


@click.command()
@click.argument("book", type=click.Path(path_type=Path))
@click.argument("study", type=click.Path(path_type=Path))
@click.option("--quarter", required=True, help="Calendar quarter to review, as 2025Q3.")
@click.option("--ledger", required=True, help="Path of a SQLite file, or a database URL.")
@click.option("--output", type=click.Path(path_type=Path), default=None,
              help="Folder to write.  [default: BOOK-QUARTER beside the book]")  # fmt: skip
@click.option("--replace", is_flag=True, help="Replace the folder of an earlier review.")
@click.option("--accept", is_flag=True,
              help="Carry the proposals out, in the ledger and the book's statuses.")  # fmt: skip
@click.option("--dry-run", is_flag=True, help="Only look: enter nothing in the ledger.")
@click.option("--no-hunt", is_flag=True, help="Do not hunt the window that ends with the quarter.")
@click.option("--who", default=None, help="Who reviews.  [default: the login name]")
@click.option("--why", default="quarterly review", show_default=True, help="The reason entered.")
@workers_option
def review(
    book: Path,
    study: Path,
    quarter: str,
    ledger: str,
    output: Path | None,
    replace: bool,
    accept: bool,
    dry_run: bool,
    no_hunt: bool,
    who: str | None,
    why: str,
    workers: int | None,
) -> None:
    """Review the rules of BOOK at the end of a quarter, with the tables of STUDY."""
    from miner.review import review as run
    from miner.review.words import review_lines

    folder = output or book.with_name(f"{book.stem}-{quarter.strip().upper()}")
    with shown_progress() as progress:
        result = run(
            book,
            study,
            quarter,
            ledger,
            folder,
            accept=accept,
            dry_run=dry_run,
            who=who,
            why=why,
            with_hunt=not no_hunt,
            replace_output=replace,
            n_workers=workers,
            progress=progress,
        )
    show(review_lines(result))
    click.echo(f"\nWritten to {folder}")
