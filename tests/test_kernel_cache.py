"""Compiled kernels on disk: never stale, never in the way."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from isthmus.betweenness.engine_numba import accelerate

PACKAGE = Path(accelerate.__file__).parent
# compiles one kernel, or loads it, and runs it
PROGRAM = """
import numpy as np
from isthmus.betweenness.engine_numba.kernels_moments import MOMENTS, note
moments = np.zeros((1, MOMENTS))
note(moments, 0, 1.0, 1.0)
assert moments[0, 8] == 1.0
"""


def run(home: Path, **environment: str) -> dict[Path, int]:
    """The program with everything that names a home set to `home`: the files there afterwards, and their times."""
    known = {key: value for key, value in os.environ.items() if key not in ("ISTHMUS_KERNEL_CACHE", "NUMBA_CACHE_DIR")}
    places = {"HOME": str(home), "XDG_CACHE_HOME": str(home / ".cache")}
    ran = subprocess.run(
        [sys.executable, "-c", PROGRAM], cwd=home, env=known | places | environment, capture_output=True, text=True
    )
    assert ran.returncode == 0, ran.stderr
    return {path: path.stat().st_mtime_ns for path in home.rglob("*") if path.is_file()}


@pytest.fixture
def copy(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A copy of the package's modules, which the cache's name is made of, and a place for the cache."""
    copied = tmp_path / "modules"
    shutil.copytree(PACKAGE, copied, ignore=shutil.ignore_patterns("__pycache__"))
    monkeypatch.setattr(accelerate, "__file__", str(copied / "accelerate.py"))
    monkeypatch.setenv("ISTHMUS_KERNEL_CACHE", str(tmp_path / "kernels"))
    return copied


def test_an_edit_of_any_module_makes_another_folder(copy: Path) -> None:
    names = {accelerate._cache_folder()}
    modules = sorted(copy.glob("*.py"))
    assert len(modules) > 15
    for module in modules:
        text = module.read_text()
        module.write_text(text + "# edited\n")
        names.add(accelerate._cache_folder())
        module.write_text(text)
    (copy / "another.py").write_text("")
    names.add(accelerate._cache_folder())
    assert len(names) == 2 + len(modules)
    (copy / "another.py").unlink()
    assert accelerate._cache_folder() in names


def test_another_compiler_makes_another_folder(copy: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = accelerate._cache_folder()
    monkeypatch.setattr(accelerate.numba, "__version__", "0.0")
    assert before != accelerate._cache_folder()


def test_kernels_are_kept_and_used_again(tmp_path: Path) -> None:
    first = run(tmp_path)
    assert any(path.suffix == ".nbc" for path in first)
    assert all(path.is_relative_to(tmp_path / ".cache" / "isthmus") for path in first)
    assert run(tmp_path) == first


def test_off_writes_nothing(tmp_path: Path) -> None:
    def beside_the_code() -> set[Path]:
        return set(PACKAGE.rglob("*.nb[ic]"))

    before = beside_the_code()
    assert run(tmp_path, ISTHMUS_KERNEL_CACHE="off") == {}
    assert beside_the_code() == before


def test_a_place_that_cannot_be_written_does_not_stop_the_run(tmp_path: Path) -> None:
    (tmp_path / "file").touch()
    assert list(run(tmp_path, ISTHMUS_KERNEL_CACHE=str(tmp_path / "file"))) == [tmp_path / "file"]


def test_a_user_without_a_home(monkeypatch: pytest.MonkeyPatch) -> None:
    """As in a container that runs under a number of its own."""

    def nowhere() -> Path:
        raise RuntimeError("Could not determine home directory.")

    monkeypatch.delenv("ISTHMUS_KERNEL_CACHE", raising=False)
    monkeypatch.delenv("XDG_CACHE_HOME", raising=False)
    monkeypatch.setattr(Path, "home", nowhere)
    assert accelerate._cache_folder() == ""
