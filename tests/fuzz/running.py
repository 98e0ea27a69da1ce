"""Hands on `run`: one command in this process, and what is allowed to come of it.

Allowed are exit 0, and exit 2 with one message and no folder. Anything else, an example that takes
longer than its deadline (the process then prints where it is and dies), or memory beyond its
bound, is a failure.
"""

from __future__ import annotations

import faulthandler
import resource
from pathlib import Path

from click.testing import CliRunner

from miner.cli import main

DEADLINE = 60.0  # seconds for one example
MOST_MEMORY = 2_500  # megabytes of the whole process


class FaultError(AssertionError):
    """Something happened that no input may bring about."""


def run(arguments: list[str], folder: Path) -> int:
    """Run ``miner`` with arguments; returns the exit code, raises `FaultError` where not allowed.

    Parameters
    ----------
    folder : where the run's folder would appear as ``run``
    """
    faulthandler.dump_traceback_later(DEADLINE, exit=True)
    try:
        result = CliRunner().invoke(main, arguments)
    finally:
        faulthandler.cancel_dump_traceback_later()
    error = result.exception
    if error is not None and not isinstance(error, SystemExit):
        raise FaultError(f"{' '.join(arguments)}: {type(error).__name__}: {error}") from error
    if result.exit_code not in (0, 2):
        raise FaultError(f"{' '.join(arguments)}: exit {result.exit_code}: {result.stderr}")
    if result.exit_code == 2:
        said = result.stderr[result.stderr.rfind("error: ") :].strip()
        if not said.startswith("error: ") or len(said) < 20:
            raise FaultError(f"no message: {result.stderr!r}")
        if "Traceback" in result.stderr or "\n\n" in said:
            raise FaultError(f"not one message: {said!r}")
        if arguments[0] == "hunt" and (folder / "run").exists():
            raise FaultError(f"a folder was left: {said!r}")
    most = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    if most > MOST_MEMORY:
        raise FaultError(f"{most:,.0f} MB of memory")
    return result.exit_code


def warm_up() -> None:
    """Hunt and trade once, so that what has to be compiled is, before anything has a deadline."""
    from tempfile import TemporaryDirectory

    from tiny_worlds import random_world, write_study

    from miner import hunt

    with TemporaryDirectory() as name:
        hunt(write_study(random_world(3), Path(name)), n_workers=1)
