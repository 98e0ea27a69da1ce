"""The commands: exit status, one message and no traceback, the same bytes, light help."""

import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from tiny_worlds import random_world, write_study

from miner.cli import main

HEAVY = ("numpy", "pandas", "scipy", "numba", "sklearn", "mlxtend", "pyarrow", "pydantic")


def miner(*args: object) -> Result:
    return CliRunner().invoke(main, [str(arg) for arg in args])


@pytest.fixture
def study(tmp_path: Path) -> Path:
    return write_study(random_world(3), tmp_path, permutations=50)


def assert_one_message(result: Result) -> str:
    """Exit 2, nothing on standard output, one error without a traceback."""
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    messages = [line for line in result.stderr.splitlines() if not line.endswith("...")]
    assert messages[0].startswith("error: ")
    assert sum(line.startswith("error: ") for line in messages) == 1
    assert "Traceback" not in result.stderr
    assert isinstance(result.exception, SystemExit)
    return result.stderr


def test_a_hunt_writes_its_folder_and_tells_of_it(study):
    result = miner("hunt", study, "--workers", 1)
    assert result.exit_code == 0, result.stderr
    folder = study.parent / "study-run"
    assert {"candidates.csv", "candidates.parquet", "rules.csv", "run.json"} <= {
        path.name for path in folder.iterdir()
    }
    rules = (folder / "rules.csv").read_text().splitlines()[1:]
    assert rules
    assert all(rule.split(",")[2] in result.stdout for rule in rules)
    assert "reading ..." in result.stderr
    assert "..." not in result.stdout.splitlines()[0]


def test_two_hunts_write_the_same_bytes(study):
    for name, workers in (("a", 1), ("b", 3)):
        result = miner("hunt", study, "--output", study.parent / name, "--workers", workers)
        assert result.exit_code == 0
    for name in ("candidates.csv", "rules.csv"):
        one, other = ((study.parent / x / name).read_bytes() for x in "ab")
        assert one == other


def test_an_existing_folder_needs_replace(study):
    assert miner("hunt", study).exit_code == 0
    record = (study.parent / "study-run" / "run.json").read_bytes()
    assert "--replace" in assert_one_message(miner("hunt", study))
    assert (study.parent / "study-run" / "run.json").read_bytes() == record
    assert miner("hunt", study, "--replace").exit_code == 0
    assert (study.parent / "study-run" / "run.json").read_bytes() != record


def test_check_tells_without_writing(study):
    before = sorted(study.parent.iterdir())
    result = miner("check", study)
    assert result.exit_code == 0, result.stderr
    for word in ("delay", "upset", "Power", "Family"):
        assert word in result.stdout
    assert sorted(study.parent.iterdir()) == before


@pytest.mark.parametrize("command", ["hunt", "check"])
@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("lookback = ", "lookback = 0 #", "lookback"),
        ("[mining]", "[mining]\nmax_sise = 2", "max_size"),
        ("fdr = 0.05", 'fdr = "low"', "fdr"),
        ('source = "alerts.csv"', 'source = "nowhere.csv"', "nowhere.csv"),
        ("targets = [", 'targets = ["upsett", ', "upsett"),
        ("start = ", "start = 7 #", "start"),
        ("[alerts]", "[alerts", "TOML"),
        ('calendar = "daily"', 'calendar = "XNOW"', "XNOW"),
    ],
)
def test_wrong_settings_are_one_message(command, old, new, told, study):
    text = study.read_text()
    assert old in text
    study.write_text(text.replace(old, new, 1))
    assert told in assert_one_message(miner(command, study))
    assert not (study.parent / "study-run").exists()


@pytest.mark.parametrize("command", ["hunt", "check"])
def test_a_wrong_row_is_named(command, study):
    with (study.parent / "alerts.csv").open("a") as file:
        file.write("e1,half past nine,delay\n")
    message = assert_one_message(miner(command, study))
    assert "alerts.csv" in message
    assert "half past nine" in message


def test_a_missing_study_is_one_message(tmp_path):
    assert "settings file" in assert_one_message(miner("hunt", tmp_path / "none.toml"))
    assert "settings file" in assert_one_message(miner("check", tmp_path))


@pytest.mark.parametrize("option", [["--workers", "0"], ["--no-such"], ["--output"]])
def test_wrong_options_exit_2(option, study):
    result = miner("hunt", study, *option)
    assert result.exit_code == 2
    assert "Traceback" not in result.output


def test_a_fault_of_ours_is_not_called_the_users(study, monkeypatch):
    def broken(*args, **kwargs):
        raise ZeroDivisionError("ours")

    monkeypatch.setattr("miner.hunting.hunt", broken)
    result = miner("hunt", study)
    assert result.exit_code == 1
    assert isinstance(result.exception, ZeroDivisionError)


@pytest.mark.parametrize("command", [[], ["hunt"], ["check"], ["demo"]])
@pytest.mark.parametrize("flag", ["--help", "-h"])
def test_every_command_has_help(command, flag):
    result = miner(*command, flag)
    assert result.exit_code == 0
    assert result.stdout.startswith("Usage: ")
    assert len(result.stdout.splitlines()) > 5
    if not command:
        assert all(name in result.stdout for name in ("hunt", "check", "demo"))


def test_the_version_is_told():
    result = miner("--version")
    assert result.exit_code == 0
    assert result.stdout.startswith("miner, version ")


@pytest.mark.parametrize("args", [["--help"], ["hunt", "--help"], ["--version"]])
def test_help_imports_nothing_heavy(args):
    script = (
        "import sys\nfrom miner.cli import main\n"
        f"try:\n    main({args!r})\nexcept SystemExit as stop:\n    assert not stop.code\n"
        f"print([name for name in {HEAVY!r} if name in sys.modules])"
    )
    run = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert run.stdout.splitlines()[-1] == "[]"


def test_the_module_runs_as_the_command():
    run = subprocess.run(
        [sys.executable, "-m", "miner", "--help"], capture_output=True, text=True, check=True
    )
    assert run.stdout.startswith("Usage: ")
