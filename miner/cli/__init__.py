"""The command line: each command is parse, one library call, print.

Exit status 0 done, 2 the user's input or settings are wrong or the machine has too little room,
1 a fault of ours, 128 + n stopped by signal n (130 by Ctrl-C).
"""

from __future__ import annotations

from typing import Any

import click

from miner.cli import faults, stopping
from miner.cli.check import check
from miner.cli.demo import demo
from miner.cli.hunt import hunt
from miner.cli.ledger import ledger
from miner.cli.report import report
from miner.cli.review import review
from miner.cli.rules import rules
from miner.cli.scan import scan
from miner.cli.trades import trades

OVERVIEW = """Find which combinations of alerts come before events more often than chance, the
calendar and busy names explain.

Research, not advice."""


class Commands(click.Group):
    """A group whose commands report wrong input in one message."""

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except Exception as error:
            message = faults.as_message(error)
            if message is None:
                raise
            faults.let_go_of_output()
            click.echo(f"error: {message}", err=True)
            ctx.exit(2)

    def main(self, args: Any = None, *rest: Any, **extra: Any) -> Any:
        """As click has it; as a program of its own it also ends at once when told to."""
        if args is None:
            stopping.listen()
        return super().main(args, *rest, **extra)


@click.group(cls=Commands, help=OVERVIEW, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="combination-signal-miner", prog_name="miner")
def main() -> None:
    """The program."""


for command in (hunt, check, report, demo, rules, scan, trades, ledger, review):
    main.add_command(command)
