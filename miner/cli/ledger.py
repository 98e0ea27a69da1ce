"""`miner ledger`: what was hunted, adopted, reviewed and decided, by whom and why."""

from __future__ import annotations

from pathlib import Path

import click

from miner.cli.shared import show

QUARTER = click.option("--quarter", default=None, help="Only what is about it, as 2025Q3.")
LEDGER_HELP = """LEDGER is a file, or a URL (sqlite:///..., postgresql://...)."""


class LedgerCommands(click.Group):
    """A group whose first argument may be a ledger instead of a command."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Take what is no command and no option for a ledger to list."""
        if args and args[0] not in self.commands and not args[0].startswith("-"):
            args = ["list", *args]
        return super().resolve_command(ctx, args)


@click.group(cls=LedgerCommands, subcommand_metavar="LEDGER | COMMAND ...", epilog=LEDGER_HELP)
def ledger() -> None:
    """List what LEDGER holds, show a rule's life, export, verify, or record a hunt."""


@ledger.command("list")
@click.argument("ledger")
@click.option("--kind", "kinds", multiple=True,
              type=click.Choice(["hunt", "rule", "outcome", "hypothesis", "review", "decision"]),
              help="Only of this kind; may be given several times.")  # fmt: skip
@click.option("--rule", default=None, help="Only about the rule with this id.")
@QUARTER
@click.option("--last", type=click.IntRange(min=1), default=50, show_default=True,
              help="How many, the last ones.")  # fmt: skip
def list_entries(
    ledger: str, kinds: tuple[str, ...], rule: str | None, quarter: str | None, last: int
) -> None:
    """List the entries of LEDGER; `miner ledger LEDGER` for short."""
    from miner.ledger import open_ledger
    from miner.ledger_words import last_of, list_lines

    with open_ledger(ledger, read_only=True) as opened:
        found = opened.entries(kinds=kinds or None, rule=rule, quarter=quarter)
        show(list_lines(*last_of(found, last)))


@ledger.command("show")
@click.argument("ledger")
@click.argument("rule")
def show_rule(ledger: str, rule: str) -> None:
    """Show the life of RULE (its id, or what only its id begins with) in LEDGER."""
    from miner.ledger import open_ledger
    from miner.ledger_words import life_lines

    with open_ledger(ledger, read_only=True) as opened:
        life = opened.life(rule, must_be_known=True)
        show(life_lines(life[0].rule or rule, life))


@ledger.command()
@click.argument("ledger")
@click.option("--format", "form", type=click.Choice(["csv", "json"]), default="csv",
              show_default=True)  # fmt: skip
@click.option("--output", type=click.Path(path_type=Path), default=None,
              help="File to write.  [default: print it]")  # fmt: skip
@click.option("--replace", is_flag=True, help="Replace a file that is there.")
def export(ledger: str, form: str, output: Path | None, replace: bool) -> None:
    """Write all of LEDGER as csv (for people) or json (every field exactly, hashes included)."""
    from miner.ledger import open_ledger
    from miner.ledger.exporting import export_lines, write_export

    with open_ledger(ledger, read_only=True) as opened:
        if output is None:
            for text in export_lines(opened.entries(), form):
                click.echo(text, nl=False)
        else:
            write_export(opened.entries(), form, output, replace=replace)
            click.echo(f"Written to {output}")


@ledger.command()
@click.argument("ledger")
@click.option("--known", default=None, metavar="HASH",
              help="A hash noted earlier: its entry has to be there still.")  # fmt: skip
def verify(ledger: str, known: str | None) -> None:
    """Check that LEDGER holds what was written, from its first entry to its last."""
    from miner.ledger import open_ledger
    from miner.ledger_words import verified_lines

    with open_ledger(ledger, read_only=True) as opened:
        verified = opened.verify(known)
    verified.raise_if_broken(opened.label)
    show(verified_lines(verified))


@ledger.command()
@click.argument("ledger")
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--book", type=click.Path(path_type=Path), default=None,
              help="A rule book whose rules are entered too.")  # fmt: skip
@click.option("--who", default=None, help="Who enters it.  [default: your login name]")
@click.option("--why", default=None, help="Why.  [default: that this command was given]")
def record(ledger: str, run: Path, book: Path | None, who: str | None, why: str | None) -> None:
    """Enter the hunt of RUN (a run's folder) in LEDGER, each thing once.

    LEDGER is made if it is not there.
    """
    from miner.ledger import login_name, open_ledger
    from miner.ledger.recording import items_of_run, record_new
    from miner.ledger_words import added_lines

    items = items_of_run(run, book)
    with open_ledger(ledger) as opened:
        added = record_new(
            opened, items, who=who or login_name(), why=why or f"miner ledger record {run}"
        )
        show(added_lines(added, opened.label))
