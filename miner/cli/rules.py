"""`miner rules`: make a rule book, show it, compare two."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show, shown_progress, workers_option


class BookCommands(click.Group):
    """A group whose first argument may be a run's folder instead of a command."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Take what is no command and no option for a run to make a book of."""
        if args and args[0] not in self.commands and not args[0].startswith("-"):
            args = ["make", *args]
        return super().resolve_command(ctx, args)


@click.group(cls=BookCommands, subcommand_metavar="RUN | COMMAND ...")
def rules() -> None:
    """Make the rule book of RUN, or show and compare rule books."""


@rules.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--output", type=click.Path(path_type=Path), default=Path("rules.toml"),
              show_default=True, help="File to write.")  # fmt: skip
@click.option("--study", type=click.Path(path_type=Path), default=None,
              help="The run's study, if it has moved.")  # fmt: skip
@click.option("--replace", is_flag=True,
              help="Replace a rule book; statuses and notes in it are kept.")  # fmt: skip
@workers_option
def make(run: Path, output: Path, study: Path | None, replace: bool, workers: int | None) -> None:
    """Write the rule book of RUN; `miner rules RUN` for short."""
    from miner.redundancy import redundancy_lines
    from miner.rule_book import book_lines, diff_lines
    from miner.rule_book.making import make_rule_book
    from miner.workers import n_default

    with shown_progress() as progress:
        made = make_rule_book(
            run,
            output,
            study,
            replace=replace,
            with_overlap=True,
            n_workers=workers or n_default(),
            progress=progress,
        )
    show(book_lines(made.book))
    for part in made.redundancy:
        show(redundancy_lines(part))
    if made.changes is not None:
        show(diff_lines(made.changes))
    click.echo(f"Written to {output}")


@rules.command("show")
@click.argument("book", type=click.Path(path_type=Path))
def show_book(book: Path) -> None:
    """Tell the rules of BOOK in words."""
    from miner.rule_book import book_lines, read_rule_book

    show(book_lines(read_rule_book(book)))


@rules.command()
@click.argument("old", type=click.Path(path_type=Path))
@click.argument("new", type=click.Path(path_type=Path))
def diff(old: Path, new: Path) -> None:
    """Tell what NEW changes in OLD."""
    from miner.rule_book import diff_lines, diff_rule_books, read_rule_book

    show(diff_lines(diff_rule_books(read_rule_book(old), read_rule_book(new))))
