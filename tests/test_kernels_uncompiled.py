"""The kernels as plain Python: what numba compiles is what is written, and coverage tools see every line."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

HERE = Path(__file__).parent
FILES = ["test_kernels_exact.py", "test_kernels_paths.py", "test_reach.py", "test_sequences_and_stopping.py"]


def test_kernel_tests_pass_without_the_compiler() -> None:
    """Fewer and smaller examples: see COMPILED in these files."""
    ran = subprocess.run(
        [sys.executable, "-m", "pytest", "-p", "no:cacheprovider", "-rf", *(str(HERE / file) for file in FILES)],
        cwd=HERE.parent,
        env=os.environ | {"NUMBA_DISABLE_JIT": "1"},
        capture_output=True,
        text=True,
        timeout=400,
    )
    assert ran.returncode == 0, ran.stdout[-5000:] + ran.stderr[-2000:]
    passed = re.search(r"(\d+) passed", ran.stdout)
    assert passed is not None
    assert int(passed[1]) > 100
    assert "skipped" not in ran.stdout
    assert "failed" not in ran.stdout
