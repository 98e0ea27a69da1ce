"""Ctrl-C and SIGTERM: one line, the usual status, nothing left, even while a kernel runs."""

from __future__ import annotations

import signal
import subprocess
import sys
from pathlib import Path

import pytest

from tests.faults.kills import Range
from tests.faults.stops import Stops, stop_many, stop_once

IN_A_KERNEL = """
import sys
from pathlib import Path
from miner import placing
from miner.cli import stopping
from miner.kernels.compiling import kernel

@kernel
def spin(n):
    x = 1
    while n > 0 or x == 0:
        x = (x * 1103515245 + 12345) % 2147483648
        n += x % 2 * 0
    return x

stopping.listen()
with placing.aside(Path(sys.argv[1]) / "run") as folder:
    (folder / "half").write_text("done")
    spin(0)
    print("ready", flush=True)
    spin(1)
"""


@pytest.mark.parametrize(("name", "status"), [("SIGINT", 130), ("SIGTERM", 143), ("SIGHUP", 129)])
def test_a_kernel_that_never_ends_is_stopped_and_nothing_is_left(name, status, tmp_path: Path):
    process = subprocess.Popen(
        [sys.executable, "-c", IN_A_KERNEL, str(tmp_path)],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert process.stdout is not None
    assert process.stdout.readline() == "ready\n"
    assert [path.name.startswith(".run.unfinished-") for path in tmp_path.iterdir()] == [True]
    process.send_signal(getattr(signal, name))
    _, told = process.communicate(timeout=60)
    assert process.returncode == status
    assert told.splitlines() == [f"stopped by {name}; nothing unfinished is left"]
    assert list(tmp_path.iterdir()) == []


def test_a_signal_that_is_ignored_stays_ignored():
    """As under nohup, or in the background of a script."""
    script = (
        "import os, signal\nsignal.signal(signal.SIGHUP, signal.SIG_IGN)\n"
        "from miner.cli import stopping\nstopping.listen()\n"
        "os.kill(os.getpid(), signal.SIGHUP)\nprint('still there')"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert (done.returncode, done.stdout, done.stderr) == (0, "still there\n", "")


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Range:
    return Range(tmp_path_factory.mktemp("range"))


@pytest.mark.slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
@pytest.mark.parametrize("is_replacing", [False, True])
def test_a_hunt_that_is_stopped_while_it_writes(number, is_replacing, place: Range):
    stops = Stops()
    stop_once(place, "writing ...", 0.01, is_replacing, number, stops)
    assert stops.faults == []


@pytest.mark.slow
def test_hunts_stopped_anywhere(place: Range):
    stops = stop_many(place, 16)
    assert stops.faults == []
    assert len(stops.seconds) > 5
