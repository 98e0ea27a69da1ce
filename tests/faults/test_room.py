"""No room, no rights, no home, no memory: one message, exit 2, and what was there is there."""

from __future__ import annotations

import os
import resource
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from tests.faults.kills import Range
from tests.faults.studies import NOTE, digests, fault_of, left_over, run

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Range:
    return Range(tmp_path_factory.mktemp("range"))


def the_message(done: subprocess.CompletedProcess[str]) -> str:
    """The one message of a run that exits 2."""
    said = [line for line in done.stderr.splitlines() if not line.endswith("...")]
    assert done.returncode == 2, done.stderr
    assert "Traceback" not in done.stderr
    assert said[0].startswith("error: ")
    assert sum(line.startswith("error: ") for line in said) == 1
    return said[0]


def in_mount(script: str, *args: object) -> subprocess.CompletedProcess[str]:
    """Run a shell script where it may mount things that nobody else sees."""
    command = ["unshare", "--user", "--map-root-user", "--mount", "sh", "-ec", script, "sh"]
    return subprocess.run(
        [*command, *map(str, args)], capture_output=True, text=True, cwd=ROOT, check=False
    )


@pytest.mark.slow
@pytest.mark.parametrize("is_replacing", [False, True])
@pytest.mark.parametrize("n_bytes", [300, 2_000, 8_000, 12_000, 20_000, 60_000])
def test_a_file_that_may_not_grow(n_bytes, is_replacing, place: Range):
    """A limit on the size of files, like a full disk, hits one file after another."""
    place.clear()
    before = place.old_run() if is_replacing else None

    def limit() -> None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (n_bytes, n_bytes))

    done = run("hunt", place.study, *(["--replace"] if is_replacing else []), preexec_fn=limit)
    assert "File too large" in the_message(done)
    assert left_over(place.folder) == []
    assert place.target.exists() == is_replacing
    if before is not None:
        assert digests(place.target) == before


@pytest.mark.slow
@pytest.mark.parametrize("share", [0.1, 0.4, 0.7, 0.9])
def test_a_disk_that_is_full(share, place: Range, tmp_path: Path):
    size = round(share * sum(path.stat().st_size for path in place.kept.iterdir()))
    done = in_mount(
        'mount -t tmpfs -o "size=$1" none "$2"; "$3" -m miner hunt "$4" --output "$2/run" && s=0 '
        '|| s=$?; ls -A "$2"; exit $s',
        f"{size // 1024}k", tmp_path, sys.executable, place.study,
    )  # fmt: skip
    assert "No space left on device" in the_message(done)
    assert done.stdout == ""


@pytest.mark.slow
def test_a_disk_that_is_full_leaves_the_run_to_be_replaced(place: Range, tmp_path: Path):
    total = sum(path.stat().st_size for path in place.kept.iterdir())
    done = in_mount(
        'mount -t tmpfs -o "size=$1" none "$2"; cp -r "$5" "$2/run"; '
        '"$3" -m miner hunt "$4" --output "$2/run" --replace && s=0 || s=$?; ls -A "$2" >&2; '
        'diff -r "$5" "$2/run"; exit $s',
        f"{(total + 120_000) // 1024}k", tmp_path, sys.executable, place.study, place.kept,
    )  # fmt: skip
    assert "No space left on device" in the_message(done)
    assert done.stderr.splitlines()[-1] == "run"
    assert done.stdout == ""


@pytest.mark.slow
def test_a_place_that_is_read_only_is_told_before_the_work(place: Range, tmp_path: Path):
    done = in_mount(
        'mount -t tmpfs -o ro none "$1"; exec "$2" -m miner hunt "$3" --output "$1/run"',
        tmp_path, sys.executable, place.study,
    )  # fmt: skip
    assert "must be a folder that can be written" in the_message(done)
    assert "reading" not in done.stderr


@pytest.mark.slow
@pytest.mark.parametrize("has_temp", [True, False])
def test_no_home_and_a_read_only_installation(has_temp, place: Range, tmp_path: Path):
    """Compiled kernels are kept elsewhere, or nowhere; the answer is the same."""
    (tmp_path / "out").mkdir()
    (tmp_path / "temp").mkdir()
    if not has_temp:
        (tmp_path / "temp").rmdir()
    done = in_mount(
        'mount --bind "$1" "$1"; mount -o remount,ro,bind "$1"; cd "$1"; unset HOME XDG_CACHE_HOME '
        'PYTHONDONTWRITEBYTECODE; export HOME=/proc/none TMPDIR="$2"; '
        '[ -w "$1" ] && exit 99; "$3" -m miner hunt "$4" --output "$5" --workers 2',
        ROOT, tmp_path / "temp", sys.executable, place.study, tmp_path / "out" / "run",
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert fault_of(tmp_path / "out" / "run", place.whole) is None
    if has_temp:
        (kept,) = (tmp_path / "temp").glob("kernels-*")
        assert kept.stat().st_mode & 0o777 == 0o700


@pytest.mark.slow
def test_output_that_takes_nothing_more(place: Range):
    with Path("/dev/full").open("w") as full:
        done = run("check", place.study, stdout=full)
    assert "No space left on device" in the_message(done)


@pytest.mark.slow
def test_a_reader_that_goes_away(place: Range):
    script = '"$1" -m miner check "$2" --workers 1 2>&1 >&3 | cat'
    shell = f"exec 3>&1; {{ {script}; }} 3>&1 | head -n 1"
    done = subprocess.run(
        ["bash", "-c", shell, "bash", sys.executable, str(place.study)],
        capture_output=True, text=True, cwd=ROOT, check=False,
    )  # fmt: skip
    assert "Traceback" not in done.stdout + done.stderr


@pytest.mark.slow
@pytest.mark.parametrize("n_files", [12, 24])
def test_too_few_open_files(n_files, place: Range):
    place.clear()

    def limit() -> None:
        resource.setrlimit(resource.RLIMIT_NOFILE, (n_files, n_files))

    done = run("hunt", place.study, preexec_fn=limit)
    assert done.returncode in (0, 2), done.stderr
    assert (done.returncode == 0) == place.target.exists()
    if done.returncode == 2:
        the_message(done)


@pytest.mark.slow
def test_the_study_alone_may_be_read_only(place: Range, tmp_path: Path):
    """Nothing is written beside the inputs when the output goes elsewhere."""
    shutil.copytree(place.folder, tmp_path / "study", ignore=shutil.ignore_patterns("study-run"))
    before = sorted(os.listdir(tmp_path / "study"))
    (tmp_path / "study").chmod(0o555)
    done = run("hunt", tmp_path / "study" / place.study.name, "--output", tmp_path / "run")
    (tmp_path / "study").chmod(0o755)
    assert done.returncode == 0, done.stderr
    assert sorted(os.listdir(tmp_path / "study")) == before
    assert NOTE not in os.listdir(tmp_path / "run")
