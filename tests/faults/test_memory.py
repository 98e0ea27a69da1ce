"""Memory is foreseen within a third, and what does not fit is refused before it is taken."""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
from click.testing import CliRunner

from miner import memory_estimate
from miner.cli import main
from miner.errors import SettingsError
from miner.memory_estimate import CELLS, DRAWS, TRIGGERS, Growing, Need, free_bytes, refuse
from tests.faults.studies import run, small_study
from tests.faults.test_room import the_message
from tests.worlds import make_world, write_world

GIGABYTE = 1e9
SIZES = {  # what they mostly take memory for: triggers, draws, cells
    TRIGGERS: ({"n_entities": 1000, "n_sessions": 1000, "n_types": 25, "alerts_per_type": 22_000},
               {"testing": {"permutations": 100, "placebo": 2}}),
    DRAWS: ({"n_entities": 400, "n_sessions": 800, "n_types": 28, "alerts_per_type": 6_000},
            {"testing": {"permutations": 2500, "placebo": 2}}),
    CELLS: ({"n_entities": 5000, "n_sessions": 2000, "n_types": 4, "alerts_per_type": 4000},
            {"testing": {"permutations": 100, "placebo": 2}}),
}  # fmt: skip


@pytest.mark.slow
@pytest.mark.parametrize("kind", SIZES)
def test_what_is_foreseen_is_what_is_taken(kind, tmp_path: Path):
    options, settings = SIZES[kind]
    study = write_world(make_world(5, base_rate=0.03, **options), tmp_path, settings=settings)
    done = subprocess.run(
        [sys.executable, "-m", "tests.faults.peak", str(study)],
        capture_output=True, text=True, check=True, cwd=Path(__file__).parents[2],
    )  # fmt: skip
    told = json.loads(done.stdout)
    assert told["peak"] > 300, told
    assert told["foreseen"] == pytest.approx(told["peak"], rel=0.3), told


@pytest.mark.slow
@pytest.mark.parametrize("command", ["hunt", "check"])
def test_what_does_not_fit_is_refused_with_what_to_change(command, tmp_path: Path):
    study = small_study(tmp_path)
    before = sorted(tmp_path.iterdir())
    said = the_message(run(command, study, env=os.environ | {memory_estimate.SETTING: "0.05"}))
    assert "must fit into" in said
    assert "MINER_MEMORY=off" in said
    assert sorted(tmp_path.iterdir()) == before
    done = run(command, study, env=os.environ | {memory_estimate.SETTING: "off"})
    assert done.returncode == 0, done.stderr


@pytest.mark.slow
@pytest.mark.parametrize("megabytes", [300, 400])
def test_under_a_limit_of_the_system_it_ends_with_a_message(megabytes, tmp_path: Path):
    """The limit hits while libraries are loaded."""
    study = small_study(tmp_path)

    def limit() -> None:
        resource.setrlimit(resource.RLIMIT_AS, (megabytes << 20, megabytes << 20))

    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1", memory_estimate.SETTING: "off"}
    done = run("hunt", study, "--workers", 2, preexec_fn=limit, env=environment)
    assert "must fit into free memory" in the_message(done)
    assert not (tmp_path / "study-run").exists()


@pytest.mark.parametrize(
    ("error", "told"),
    [
        (MemoryError(), "fit into free memory"),
        (np._core._exceptions._ArrayMemoryError((9,), np.dtype("f8")), "fit into free memory"),
        (pa.ArrowMemoryError("malloc failed"), "fit into free memory"),
        (ImportError("x.so: failed to map segment from shared object"), "fit into free memory"),
        (RuntimeError("can't start new thread"), "fewer --workers"),
        (OSError(28, "No space left on device", "/full/file"), "/full/file"),
    ],
)
def test_what_the_machine_lacks_is_told_and_is_no_fault_of_ours(error, told, monkeypatch):
    def lacking(*args: object, **kwargs: object) -> None:
        raise error

    monkeypatch.setattr("miner.checking.check", lacking)
    done = CliRunner().invoke(main, ["check", "study.toml"])
    assert done.exit_code == 2
    assert told in done.stderr
    assert done.stderr.startswith("error: ")
    assert len(done.stderr.splitlines()) == 1


def test_the_largest_stage_counts_on_top_of_what_is_kept():
    need = Need({TRIGGERS: 1.0, CELLS: 2.0}, {TRIGGERS: 5.0, DRAWS: 5.5, CELLS: 3.0})
    assert need.total == 8.5
    assert need.largest == TRIGGERS  # 1 + 5
    assert Need({CELLS: 2.0}, {}).largest == CELLS


def test_more_of_anything_takes_more():
    def size(**more: object) -> float:
        base: dict = {
            "n_cells": 10**6, "n_units": 1, "triggers": [10**6], "family": [10**4],
            "events": [10**4], "n_draws": 2000, "n_workers": 2,
        }  # fmt: skip
        return memory_estimate.of_search(**(base | more)).total

    assert size(triggers=[10**8]) > 5 * size()
    assert size(family=[10**6]) > 10 * size()
    assert size(n_cells=10**9) > 10 * size()
    assert size(n_draws=0) < size()
    assert memory_estimate.of_panel(10**6, 10**4, 100, 0).total > 300 * GIGABYTE


def test_lists_that_grow_too_long_are_foreseen_from_the_first_blocks(monkeypatch):
    monkeypatch.setattr(memory_estimate, "free_bytes", lambda: 2 * GIGABYTE)
    growing = Growing(n_blocks=100)
    growing.add(10**5)  # 10 million in all
    with pytest.raises(SettingsError, match=r"triggers.*min_triggers"):
        growing.add(3 * 10**6)


def test_what_fits_is_let_through(monkeypatch):
    monkeypatch.setattr(memory_estimate, "free_bytes", lambda: 10.0)
    refuse(Need({CELLS: 10.0}, {}))
    with pytest.raises(SettingsError, match="must fit into"):
        refuse(Need({CELLS: 10.1}, {}))
    monkeypatch.setattr(memory_estimate, "free_bytes", lambda: None)
    refuse(Need({CELLS: 1e30}, {}))


@pytest.mark.parametrize("text", ["much", "-1", "0", "nan", "inf"])
def test_a_wrong_limit_is_told(text, monkeypatch):
    monkeypatch.setenv(memory_estimate.SETTING, text)
    with pytest.raises(SettingsError, match=r"MINER_MEMORY` must be a number of gigabytes"):
        free_bytes()


def test_limits_of_machine_group_and_process_all_count(tmp_path: Path, monkeypatch):
    group = tmp_path / "desk"
    group.mkdir()
    (group / "memory.max").write_text("3000000000\n")
    (group / "memory.current").write_text("2000000000\n")
    (group / "memory.stat").write_text("anon 5\ninactive_file 500000000\n")
    (tmp_path / "memory.max").write_text("max\n")
    files = {
        "/proc/meminfo": "MemTotal: 9 kB\nMemAvailable:    4000000 kB\n",
        "/proc/self/cgroup": f"0::{group}\n",
    }
    read = memory_estimate._lines
    monkeypatch.setattr(
        memory_estimate,
        "_lines",
        lambda path: (
            files[str(path)].splitlines()
            if str(path) in files
            else read(str(path).removeprefix("/sys/fs/cgroup"))
        ),
    )
    monkeypatch.delenv(memory_estimate.SETTING, raising=False)
    assert free_bytes() == 1.5e9
    files["/proc/self/cgroup"] = "0::/nowhere\n"
    assert free_bytes() == 4_096_000_000


def test_where_nothing_tells_nothing_is_refused(monkeypatch):
    monkeypatch.delenv(memory_estimate.SETTING, raising=False)
    monkeypatch.setattr(memory_estimate, "_limits", lambda: iter(()))
    assert free_bytes() is None
