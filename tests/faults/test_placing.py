"""Files and folders appear whole; what dead processes left is told from what live ones work on."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from miner import placing

DIE_BETWEEN = """
import os, signal, sys
from pathlib import Path
from miner import placing

target, calls, rename = Path(sys.argv[1]), [], Path.rename

def second_dies(self, to):
    calls.append(to)
    if len(calls) == 2:
        os.kill(os.getpid(), signal.SIGKILL)
    return rename(self, to)

placing._exchange = lambda made, place: False
Path.rename = second_dies
with placing.aside(target) as made:
    (made / "new").write_text("new")
    placing.put_folder(made, target)
"""
HOLD = """
import sys
from pathlib import Path
from miner import placing
with placing.aside(Path(sys.argv[1])) as made:
    (made / "half").write_text("half")
    print("holding", flush=True)
    sys.stdin.read()
"""


def tree(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def start(script: str, target: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", script, str(target)],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    )  # fmt: skip


@pytest.mark.parametrize("can_exchange", [True, False])
def test_a_new_folder_takes_the_place_of_the_old(can_exchange, tmp_path, monkeypatch):
    if not can_exchange:
        monkeypatch.setattr(placing, "_exchange", lambda made, target: False)
    target = tmp_path / "run"
    for name in ("first", "second"):
        with placing.aside(target) as made:
            (made / name).write_text(name)
            placing.put_folder(made, target)
        assert tree(tmp_path) == ["run", f"run/{name}"]


def test_this_system_can_let_folders_change_places(tmp_path):
    (tmp_path / "a" / "x").mkdir(parents=True)
    (tmp_path / "b").mkdir()
    assert placing._exchange(tmp_path / "a", tmp_path / "b") == sys.platform.startswith("linux")
    assert tree(tmp_path) == ["a", "b", "b/x"]


def test_killed_between_two_renames_the_old_folder_comes_back(tmp_path):
    target = tmp_path / "run"
    target.mkdir()
    (target / "old").write_text("old")
    process = start(DIE_BETWEEN, target)
    process.communicate()
    assert process.returncode == -signal.SIGKILL
    assert not target.exists()
    assert len(tree(tmp_path)) > 1
    placing.sweep(target)
    assert tree(tmp_path) == ["run", "run/old"]


def test_what_a_live_process_works_on_is_left_and_what_a_dead_one_left_is_not(tmp_path):
    target = tmp_path / "run"
    process = start(HOLD, target)
    assert process.stdout is not None
    assert process.stdout.readline() == "holding\n"
    (other,) = tmp_path.iterdir()
    placing.sweep(target)
    with placing.aside(target) as made:
        assert sorted(tmp_path.iterdir()) == sorted([made, other])
    assert list(tmp_path.iterdir()) == [other]
    process.kill()
    process.communicate()
    assert list(tmp_path.iterdir()) == [other]
    placing.sweep(tmp_path / "another")
    assert list(tmp_path.iterdir()) == [other]
    placing.sweep(target)
    assert list(tmp_path.iterdir()) == []


def test_a_fault_while_writing_leaves_nothing(tmp_path):
    def fail() -> None:
        with placing.aside(tmp_path / "run") as made:
            (made / "half").write_text("half")
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail()
    assert list(tmp_path.iterdir()) == []


def test_files_replace_those_of_their_names_and_leave_others(tmp_path):
    folder = tmp_path / "deep" / "folder"
    folder.mkdir(parents=True)
    (folder / "kept").write_text("kept")
    (folder / "a").write_text("old")
    with placing.aside(folder / "a") as made:
        (made / "a").write_text("new")
        assert (folder / "a").read_text() == "old"
        placing.put_files(made, folder)
    found = {path.name: path.read_text() for path in folder.iterdir()}
    assert found == {"a": "new", "kept": "kept"}


def test_abandoned_work_cannot_be_put_in_place_any_more(tmp_path):
    script = (
        "import sys, threading\nfrom pathlib import Path\nfrom miner import placing\n"
        "target = Path(sys.argv[1])\n"
        "with placing.aside(target) as made:\n"
        "    (made / 'x').write_text('x')\n"
        "    placing.abandon(1.0)\n"
        "    assert not made.exists() and placing.is_placing()\n"
    )
    done = subprocess.run([sys.executable, "-c", script, str(tmp_path / "run")], check=False)
    assert done.returncode == 0
    assert list(tmp_path.iterdir()) == []


def test_a_long_name_of_any_letters_is_no_obstacle(tmp_path):
    target = tmp_path / ("é" * 120)
    with placing.aside(target) as made:
        placing.put_folder(made, target)
    assert [path.name for path in tmp_path.iterdir()] == [target.name]


def test_rights_are_those_a_new_folder_has(tmp_path):
    before = os.umask(0o027)
    try:
        with placing.aside(tmp_path / "run") as made:
            (made / "file").write_text("x")
            placing.put_folder(made, tmp_path / "run")
    finally:
        os.umask(before)
    assert (tmp_path / "run").stat().st_mode & 0o777 == 0o750
    assert (tmp_path / "run" / "file").stat().st_mode & 0o777 == 0o640
