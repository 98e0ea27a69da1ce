"""The sources themselves: docstrings everywhere, output in one place, kernels on their own."""

import ast
from pathlib import Path

import pytest

import miner

ROOT = Path(miner.__file__).parent
SOURCES = sorted(ROOT.rglob("*.py"))
KERNELS = sorted((ROOT / "kernels").glob("*.py"))


def tree_of(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"))


def name_of(path: Path) -> str:
    return str(path.relative_to(ROOT))


def imported(tree: ast.Module, package: str) -> list[str]:
    """Full names of what a module imports, wherever in it."""
    names = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = package.split(".")[: len(package.split(".")) - node.level + 1]
            start = ".".join(base) + "." if node.level else ""
            module = start + (node.module or "")
            names += [f"{module}.{alias.name}" for alias in node.names]
    return names


def test_the_sources_are_there():
    assert len(SOURCES) > 40
    assert len(KERNELS) > 7


@pytest.mark.parametrize("path", SOURCES, ids=name_of)
def test_everything_public_says_what_it_is(path):
    tree = tree_of(path)
    missing = []
    if not ast.get_docstring(tree) and path.name != "__main__.py":
        missing.append("module")
    scopes: list[tuple[str, ast.AST]] = [("", tree)]
    while scopes:
        prefix, scope = scopes.pop()
        for node in ast.iter_child_nodes(scope):
            if isinstance(node, ast.ClassDef | ast.FunctionDef | ast.AsyncFunctionDef):
                if node.name.startswith("_"):
                    continue
                # a method that overrides a library's keeps the library's meaning
                is_override = isinstance(scope, ast.ClassDef) and scope.name == "Commands"
                if not ast.get_docstring(node) and not is_override:
                    missing.append(prefix + node.name)
                if isinstance(node, ast.ClassDef):
                    scopes.append((f"{prefix}{node.name}.", node))
    assert missing == []


@pytest.mark.parametrize("path", SOURCES, ids=name_of)
def test_only_the_command_line_prints(path):
    calls = [
        node.func.id
        for node in ast.walk(tree_of(path))
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
    ]
    assert "print" not in calls
    if path.parent.name != "cli":
        assert not [n for n in imported(tree_of(path), "miner") if n.startswith(("click", "rich"))]


@pytest.mark.parametrize("path", KERNELS, ids=name_of)
def test_kernels_import_nothing_of_ours_but_kernels(path):
    names = imported(tree_of(path), "miner.kernels")
    ours = [name for name in names if name.split(".")[0] == "miner"]
    assert all(name.startswith("miner.kernels") for name in ours)
    assert not [name for name in names if name.split(".")[0] in ("pandas", "scipy", "sklearn")]
    assert not [name for name in names if "random" in name]


def test_one_file_imports_the_library_of_itemsets_and_one_makes_generators():
    users = [name_of(p) for p in SOURCES
             if any(n.startswith("mlxtend") for n in imported(tree_of(p), "miner"))]  # fmt: skip
    assert users == ["proposals.py"]
    makers = [
        name_of(path)
        for path in SOURCES
        for node in ast.walk(tree_of(path))
        if isinstance(node, ast.Attribute) and node.attr in ("default_rng", "PCG64", "RandomState")
    ]
    assert set(makers) == {"seeds.py"}


@pytest.mark.parametrize("path", SOURCES, ids=name_of)
def test_faults_are_not_swallowed_and_input_is_not_asserted(path):
    for node in ast.walk(tree_of(path)):
        assert not isinstance(node, ast.Assert)
        assert not (isinstance(node, ast.ExceptHandler) and node.type is None)


def test_every_public_name_can_be_had():
    for name in miner.__all__:
        assert getattr(miner, name).__doc__
    with pytest.raises(AttributeError, match="no attribute 'hunts'"):
        miner.hunts  # noqa: B018
