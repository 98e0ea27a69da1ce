"""Hunts measured several times, and two states of the program in turn, with the same answer."""

from __future__ import annotations

import io
import subprocess
import tarfile
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from tests.benchmarks.answers import TABLES, columns_apart, differences
from tests.benchmarks.measure import HERE, BenchmarkError, Hunted, hunt, where_from


@dataclass(frozen=True)
class Compared:
    """Hunts of each checkout in the order given; with any ``differences`` no speed holds.

    Attributes
    ----------
    hunts : one list a checkout
    differences : how answers differ, between runs of one checkout or between checkouts
    new_columns : columns that only one of the checkouts writes
    """

    hunts: list[list[Hunted]]
    differences: list[str]
    new_columns: list[str]

    @property
    def void(self) -> str | None:
        """Why no speed may be told, None if one may."""
        if not self.differences:
            return None
        return "void: answers differ: " + "; ".join(self.differences)


def compare(
    study: Path,
    checkouts: Sequence[Path],
    folder: Path,
    *,
    repeats: int,
    warm_up: Path | None = None,
) -> Compared:
    """Hunt ``repeats`` times from each checkout in turn and compare every answer with the first.

    Parameters
    ----------
    folder : where run folders go
    warm_up : a small study that each checkout hunts first, uncounted: it compiles what is not kept

    Raises
    ------
    BenchmarkError : a hunt failed
    """
    for checkout in checkouts:
        where_from(checkout)
        if warm_up is not None:
            hunt(warm_up, folder / "warm-up", checkout=checkout)
    hunts: list[list[Hunted]] = [[] for _ in checkouts]
    found: list[str] = []
    columns: list[str] = []
    for number in range(repeats):
        for i, checkout in enumerate(checkouts):
            done = hunt(study, folder / f"run-{i}-{number}", checkout=checkout)
            hunts[i].append(done)
            first = hunts[0][0].folder
            if done.folder == first:
                continue
            if i == 0 or number > 0:  # the same program has to write the same bytes
                mine = hunts[i][0].folder
                found += [
                    f"run {number + 1} of one state wrote another {name} than its first"
                    for name in TABLES
                    if (mine / name).read_bytes() != (done.folder / name).read_bytes()
                ]
            else:
                found += differences(first, done.folder)
                columns += columns_apart(first, done.folder)
    return Compared(hunts, found, columns)


@contextmanager
def checked_out(revision: str) -> Iterator[tuple[str, Path]]:
    """The name and, for as long as the context lasts, a folder with the files of a revision.

    Taken with ``git archive``, which leaves the repository as it was.

    Raises
    ------
    BenchmarkError : there is no such revision, or no repository
    """
    asked = _git("rev-parse", "--short", "--verify", f"{revision}^{{commit}}")
    if asked.returncode != 0:
        raise BenchmarkError(
            f"--against: {revision} must be a revision of {HERE}; "
            f"git says {asked.stderr.decode().strip()}. Name a commit, branch or tag."
        )
    name = asked.stdout.decode().strip()
    with tempfile.TemporaryDirectory(prefix=f"miner-{name}-") as folder:
        packed = _git("archive", "--format=tar", name)
        if packed.returncode != 0:
            raise BenchmarkError(f"git archive {name}: {packed.stderr.decode().strip()}")
        with tarfile.open(fileobj=io.BytesIO(packed.stdout)) as files:
            files.extractall(folder, filter="data")
        yield name, Path(folder)


def _git(*words: str) -> subprocess.CompletedProcess[bytes]:
    return subprocess.run(["git", *words], cwd=HERE, capture_output=True, check=False)
