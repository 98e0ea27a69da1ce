"""One measured process, and one measured hunt with its stages."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

LAUNCHER = Path(__file__).with_name("launch.py")
HERE = Path(__file__).parents[2]
REST = "start, imports, writing"
DAY = 86_400.0


class BenchmarkError(Exception):
    """A measured process failed, or cannot be started as asked."""


@dataclass(frozen=True)
class Use:
    """What a process used: seconds of wall and processor time, peak bytes of memory."""

    wall: float
    cpu: float
    peak: int
    status: int
    is_cut: bool
    log: str


@dataclass(frozen=True)
class Hunted:
    """A finished hunt: what it used, seconds by stage, its run folder and record."""

    use: Use
    seconds: dict[str, float]
    folder: Path
    record: dict[str, Any]

    @property
    def family(self) -> int:
        """Combinations that could have been reported."""
        return sum(margins["family"] for margins in self.record["margins"])


def run(command: Sequence[str], *, cwd: Path = HERE, limit: float = DAY) -> Use:
    """Run a command as a process of its own, ended after ``limit`` seconds.

    Where it finds modules is up to ``cwd`` alone: PYTHONPATH is not handed on.
    """
    env = {name: value for name, value in os.environ.items() if name != "PYTHONPATH"}
    with tempfile.TemporaryDirectory() as folder:
        result, log = Path(folder, "result.json"), Path(folder, "log")
        launch = [sys.executable, "-I", "-S", str(LAUNCHER), str(result), str(log), str(limit)]
        subprocess.run([*launch, *command], cwd=cwd, env=env, check=True)
        said = log.read_text(encoding="utf-8", errors="replace")
        return Use(**json.loads(result.read_text()), log=said)


def hunt(study: Path, output: Path, *, checkout: Path = HERE, limit: float = DAY) -> Hunted:
    """Hunt from the command line of ``checkout``; an earlier ``output`` is replaced.

    Raises
    ------
    BenchmarkError : the command failed or took longer than ``limit`` seconds
    """
    shutil.rmtree(output, ignore_errors=True)
    command = [sys.executable, "-m", "miner", "hunt", str(study), "--output", str(output)]
    use = run(command, cwd=checkout, limit=limit)
    if use.is_cut or use.status != 0:
        how = f"was ended after {limit:g} s" if use.is_cut else f"failed with status {use.status}"
        raise BenchmarkError(f"{checkout}: the hunt on {study} {how}: {use.log[-2000:].strip()}")
    record = json.loads((output / "run.json").read_text())
    seconds = {name: float(value) for name, value in record["seconds"].items()}
    return Hunted(use, seconds | {REST: use.wall - sum(seconds.values())}, output, record)


def where_from(checkout: Path) -> Path:
    """Folder of the package that a hunt in ``checkout`` runs.

    Raises
    ------
    BenchmarkError : it is not the checkout's own
    """
    ask = [sys.executable, "-c", "import miner; print(miner.__file__)"]
    use = run(ask, cwd=checkout)
    found = Path(use.log.strip().splitlines()[-1]).parent if use.status == 0 else None
    if found is None or found.parent.resolve() != checkout.resolve():
        raise BenchmarkError(f"{checkout}: another package answers there: {use.log[-500:].strip()}")
    return found
