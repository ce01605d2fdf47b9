"""The walls between the rooms, the public names, and the checkers that keep the house tidy."""

from __future__ import annotations

import ast
import importlib
import subprocess
import sys
from pathlib import Path

import pytest

HOUSE = Path(__file__).parent.parent
PACKAGE = HOUSE / "pipeline" / "isthmus"
MODULES = sorted(
    ".".join(path.relative_to(PACKAGE.parent).with_suffix("").parts).removesuffix(".__init__")
    for path in PACKAGE.rglob("*.py")
    if path.name != "__main__.py"
)


def run(*command: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run([*map(str, command)], cwd=HOUSE, capture_output=True, text=True)


@pytest.mark.parametrize(
    "command",
    [
        pytest.param(["-m", "ruff", "check", "."], id="ruff check"),
        pytest.param(["-m", "ruff", "format", "--check", "."], id="ruff format"),
        pytest.param(["-m", "mypy"], id="mypy"),
        pytest.param(
            ["-c", "from importlinter.cli import lint_imports_command as run; run()", "--no-cache"], id="import-linter"
        ),
    ],
)
def test_checker_is_content(command: list[str]) -> None:
    ran = run(sys.executable, *command)
    assert ran.returncode == 0, ran.stdout + ran.stderr


def test_importing_the_package_compiles_and_starts_nothing() -> None:
    heavy = {"networkit", "dask", "distributed", "numba", "pyarrow", "rich", "typer", "duckdb", "isthmus.nightly"}
    ran = run(sys.executable, "-c", f"import isthmus, sys; print(sorted({heavy} & set(sys.modules)))")
    assert ran.stdout.strip() == "[]", ran.stderr


def test_public_names_are_exactly_those_declared() -> None:
    code = """
import types, isthmus
names = {n for n, v in vars(isthmus).items() if not isinstance(v, types.ModuleType) and n != "annotations"}
print(sorted(n for n in names if not n.startswith("_")))
"""
    ran = run(sys.executable, "-c", code)
    declared = ["Estimate", "Graph", "IsthmusError", "betweenness", "companions", "read", "score"]
    assert ran.stdout.strip() == str(declared), ran.stderr
    isthmus = importlib.import_module("isthmus")
    assert sorted(isthmus.__all__) == sorted([*declared, "__version__"])


@pytest.mark.parametrize("name", MODULES)
def test_every_module_says_what_it_is_and_what_it_gives(name: str) -> None:
    module = importlib.import_module(name)
    assert (module.__doc__ or "").strip()
    assert [given for given in getattr(module, "__all__", ()) if not hasattr(module, given)] == []
    lines = Path(str(module.__file__)).read_text(encoding="utf-8").splitlines()
    assert len(lines) < 400


def test_oracles_import_nothing_from_the_package() -> None:
    tree = ast.parse((HOUSE / "tests" / "oracles.py").read_text(encoding="utf-8"))
    named = [node.module or "" for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)]
    named += [alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names]
    assert named
    assert not [name for name in named if name.split(".")[0] == "isthmus"]
