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
    from datetime import datetime

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
    """Write an invented scenario into FOLDER, hunt in it, and compare with what was planted.

    An earlier demo in FOLDER is written over.
    """
    from miner.demo.play import demo_lines, play

    with shown_progress() as progress:
        played = play(folder, seed=seed, n_workers=workers, progress=progress)
    show(demo_lines(played))


class BookCommands(click.Group):
    """A group whose first argument may be a run's folder instead of a command."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Take what is no command and no option for a run to make a book of."""
        if args and args[0] not in self.commands and not args[0].startswith("-"):
            args = ["make", *args]
        return super().resolve_command(ctx, args)


@main.group(cls=BookCommands, subcommand_metavar="RUN | COMMAND ...")
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


@main.command()
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


@main.command()
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
