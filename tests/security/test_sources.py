"""What the program's own files may not contain."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import jinja2
import pytest

import miner

ROOT = Path(miner.__file__).parent
RUNS_CODE = {
    *("pickle", "cPickle", "_pickle", "dill", "cloudpickle", "marshal", "shelve", "joblib"),
    *("yaml", "subprocess", "pty", "code", "codeop", "runpy", "imp"),
}
CALLS = {"eval", "exec", "compile", "__import__", "breakpoint"}
METHODS = {
    *("system", "popen", "read_pickle", "to_pickle", "load_module", "exec_module", "from_string"),
    *("eval", "execv", "execve", "spawnv", "startfile", "memmap"),
}
CLOCK = {"now", "today", "utcnow", "time", "localtime", "gmtime"}
OWNERS = {"time", "datetime", "date", "dt", "Timestamp"}
STAMPS = {"ledger/ledger.py"}  # an entry says when it was made; nothing hangs on it


def findings(tree: ast.AST) -> Iterator[str]:
    """What in a module runs code, or could."""
    for node in ast.walk(tree):
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            names = [node.module or ""]
        yield from (name for name in names if name.split(".")[0] in RUNS_CODE)
        if isinstance(node, ast.Call):
            if isinstance(node.func, ast.Name) and node.func.id in CALLS:
                yield node.func.id
            if isinstance(node.func, ast.Attribute) and node.func.attr in METHODS:
                yield node.func.attr
            for keyword in node.keywords:
                is_on = isinstance(keyword.value, ast.Constant) and keyword.value.value is True
                if keyword.arg in ("allow_pickle", "shell") and is_on:
                    yield keyword.arg


def clock_readings(tree: ast.AST) -> Iterator[str]:
    """Calls that ask what time it is."""
    for node in ast.walk(tree):
        is_method = isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute)
        if is_method and node.func.attr in CLOCK:
            owner = ast.unparse(node.func.value)
            owners = {"time"} if node.func.attr == "time" else OWNERS
            if owner.split(".")[-1] in owners:
                yield ast.unparse(node.func)


def modules() -> list[Path]:
    return sorted(ROOT.rglob("*.py"))


def test_nothing_in_the_program_runs_what_it_reads():
    found = {
        str(path.relative_to(ROOT)): names
        for path in modules()
        if (names := list(findings(ast.parse(path.read_text(encoding="utf-8")))))
    }
    assert found == {}


def test_nothing_hangs_on_what_time_it_is():
    found = {
        str(path.relative_to(ROOT)): names
        for path in modules()
        if (names := list(clock_readings(ast.parse(path.read_text(encoding="utf-8")))))
    }
    assert set(found) <= STAMPS, found


@pytest.mark.parametrize(
    "text",
    [
        "import pickle",
        "from yaml import load",
        "eval('1')",
        "import numpy as np\nnp.load('x', allow_pickle=True)",
        "frame.eval('a')",
        "import os\nos.system('x')",
        "env.from_string(text)",
    ],
)
def test_the_search_would_find_it(text):
    assert list(findings(ast.parse(text)))


def test_the_search_would_find_a_clock():
    for text in ("time.time()", "dt.datetime.now()", "date.today()", "pd.Timestamp.now()"):
        assert list(clock_readings(ast.parse(text)))
    assert not list(clock_readings(ast.parse("time.perf_counter()")))


def test_templates_are_files_of_the_program_and_escape():
    from miner.report.html import environment

    made = environment()
    assert made.autoescape is True
    assert isinstance(made.loader, jinja2.PackageLoader)
    assert made.loader.package_name == "miner.report"
