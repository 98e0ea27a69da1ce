"""The command line: each command is parse, one library call, print.

Exit status 0 done, 2 the user's input or settings are wrong, 1 a fault of ours.
"""

from __future__ import annotations

import click

from miner.cli.check import check
from miner.cli.demo import demo
from miner.cli.hunt import hunt
from miner.cli.report import report
from miner.cli.rules import rules
from miner.cli.scan import scan
from miner.cli.trades import trades
from miner.errors import InputError

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


for command in (hunt, check, report, demo, rules, scan, trades):
    main.add_command(command)
