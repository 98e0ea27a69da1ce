"""Runs one case through the real commands and holds what happens against what must."""

from __future__ import annotations

import hashlib
import json
import os
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from click.testing import CliRunner

from miner.cli import main

from .case import Answer, Case, Refused, Write, plainly
from .folder import Folder

ROOT = Path(__file__).parents[2]
SHAPE = re.compile(r"`[^`]+`: `.+?` must .+; got .+?[.?] .+[.?]", re.DOTALL)
RESULTS = ("candidates.csv", "rules.csv")


@dataclass(frozen=True)
class Ran:
    """What a command did."""

    status: int
    stdout: str
    stderr: str


def arguments(command: str, study: Path) -> list[str]:
    """The command line of a case's command."""
    if "{" not in command:
        return [command, str(study), "--workers", "1"]
    return [part.format(study=study, folder=study.parent) for part in shlex.split(command)]


def in_process(command: str, study: Path) -> Ran:
    """Run a command here."""
    result = CliRunner().invoke(main, arguments(command, study))
    if not isinstance(result.exception, SystemExit | None):
        raise AssertionError(f"miner {command} broke: {result.exception!r}") from result.exception
    return Ran(result.exit_code, result.stdout, result.stderr)


def in_subprocess(command: str, study: Path) -> Ran:
    """Run a command as a user does."""
    done = subprocess.run(
        [sys.executable, "-m", "miner", *arguments(command, study)],
        capture_output=True,
        encoding="utf-8",
        errors="surrogateescape",
        timeout=300,
        check=False,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
    )
    return Ran(done.returncode, done.stdout, done.stderr)


def listing(root: Path) -> dict[str, str]:
    """Every file and folder under a root, and what files hold."""
    found: dict[str, str] = {}
    for path in sorted(root.rglob("*")):
        name = os.fsencode(path.relative_to(root)).decode("utf-8", "backslashreplace")
        if path.is_file() and not path.is_symlink():
            with path.open("rb") as file:
                found[name] = hashlib.file_digest(file, "sha256").hexdigest()
        else:
            found[name] = "a folder" if path.is_dir() else "something else"
    return found


@contextmanager
def standing_in(folder: Path) -> Iterator[None]:
    """Run from a folder of its own, so that what lands there shows."""
    folder.mkdir(exist_ok=True)
    before = Path.cwd()
    os.chdir(folder)
    try:
        yield
    finally:
        os.chdir(before)


def run_case(case: Case, root: Path, run: object = in_process) -> None:
    """Write a case under an empty root, run its commands, and assert what must happen."""
    folder = Folder(root / "desk")
    case.write(folder)
    with standing_in(root / "elsewhere"):
        before = listing(root)
        said = {c: run(c, folder.path / "study.toml") for c in case.commands}  # type: ignore[operator]
        after = listing(root)
    for command, ran in said.items():
        where = f"miner {command}, {case.key}"
        assert "Traceback" not in ran.stdout + ran.stderr, f"{where}: {ran.stderr}"
        if isinstance(case.outcome, Refused):
            assert_refused(ran, case.outcome, folder.path, where)
        else:
            assert ran.status == 0, f"{where}: {ran.stderr}"
    if isinstance(case.outcome, Refused):
        assert after == before, f"{case.key}: files were written or changed"
        return
    new = {name for name in after if name not in before}
    assert {name: after.get(name) for name in before} == before, f"{case.key}: inputs changed"
    if "hunt" in said:
        assert all(Path(name).parts[:2] == ("desk", "study-run") for name in new), sorted(new)
        assert_answer(case, case.outcome, said, folder.path / "study-run", root)


def message_of(ran: Ran) -> str:
    """The one message of a command that refused."""
    lines = ran.stderr.splitlines()
    starts = [k for k, line in enumerate(lines) if line.startswith("error: ")]
    assert len(starts) == 1, ran.stderr
    assert all(line.endswith("...") for line in lines[: starts[0]]), ran.stderr
    return "\n".join(lines[starts[0] :]).removeprefix("error: ")


def assert_refused(ran: Ran, refused: Refused, folder: Path, where: str) -> None:
    """Exit 2, nothing on standard output, and the message, which has all four parts."""
    assert ran.status == 2, f"{where}: exit {ran.status}\n{ran.stdout}{ran.stderr}"
    assert ran.stdout == "", where
    message = message_of(ran)
    expected = refused.message.replace("{folder}", str(folder))
    pattern = ".*?".join(re.escape(part) for part in expected.split("..."))
    assert re.fullmatch(pattern, message, re.DOTALL), f"{where}:\n{message}\nnot\n{expected}"
    problems = [line for line in message.splitlines() if not line.startswith("  ")]
    for problem in problems:
        assert SHAPE.fullmatch(problem), f"{where}: a part is missing in {problem!r}"


def assert_answer(
    case: Case, answer: Answer, said: dict[str, Ran], run_folder: Path, root: Path
) -> None:
    """The counts, what check tells, and the results of the plainly written twin."""
    record = json.loads((run_folder / "run.json").read_text(encoding="utf-8"))
    counts = record["counts"]
    assert counts["tables"] == answer.counts, case.key
    assert (counts["entities"], counts["alert_types"]) == (answer.entities, answer.types), case.key
    for path, value in answer.expect.items():
        at = record
        for step in path.split("."):
            at = at[step]
        assert at == value, f"{case.key}: {path} is {at!r}, not {value!r}"
    if "check" in said:
        flat = " ".join(said["check"].stdout.split())
        for text in answer.told:
            assert text in flat, f"{case.key}: check does not tell {text!r}:\n{flat}"
        read = [ran.stdout.partition("Read ")[2].partition("\nSplit")[0] for ran in said.values()]
        assert read[0] == read[1] != "", case.key
    if answer.twin is not None:
        expected = results_of(answer.twin, root / "twin")
        found = {name: (run_folder / name).read_bytes() for name in RESULTS}
        assert found == expected, f"{case.key}: not the results of its twin"


_PLAIN: dict[str, bytes] = {}


def results_of(write: Write, folder: Path) -> dict[str, bytes]:
    """The results of a study that `write` makes; those of the plain one are kept."""
    if write is plainly and _PLAIN:
        return _PLAIN
    study = Folder(folder)
    write(study)
    ran = in_process("hunt", study.path / "study.toml")
    assert ran.status == 0, ran.stderr
    found = {name: (study.path / "study-run" / name).read_bytes() for name in RESULTS}
    if write is plainly:
        _PLAIN.update(found)
    return found
