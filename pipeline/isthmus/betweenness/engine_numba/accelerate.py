"""The one door to numba: every compiled kernel takes its defaults from here.

nogil lets blocks of work run on threads. No fastmath: sums are added in the order written, so a result has the same
bits on every machine and for every number of threads. error_model="numpy" because a checked division cannot be
vectorised.

Compiled kernels are kept on disk, in a folder whose name is a hash of everything that they are made of: the text of
every module of this package, numba's version, Python's. An edit anywhere gives another folder, so nothing in it can be
stale. ISTHMUS_KERNEL_CACHE names another place, or `off`.

With NUMBA_DISABLE_JIT=1 the kernels run as plain Python; the two bit operations, which are single machine
instructions when compiled, have a Python form for that case.
"""

from __future__ import annotations

import hashlib
import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
import numpy as np
from numba.core import types
from numba.extending import intrinsic

__all__ = ["COMPILED", "count_bits", "kernel", "lowest_bit"]

COMPILED: bool = not numba.config.DISABLE_JIT


def _cache_folder() -> str:
    """A folder for this very code, or "" when none can be had."""
    place = os.environ.get("ISTHMUS_KERNEL_CACHE", "")
    if place == "off" or not COMPILED:
        return ""
    made_of = hashlib.blake2b(f"{numba.__version__} {np.__version__} {sys.version}".encode(), digest_size=8)
    for module in sorted(Path(__file__).parent.glob("*.py")):
        made_of.update(module.name.encode() + module.read_bytes())
    try:
        home = Path(place or os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
        folder = home / "isthmus" / f"kernels-{made_of.hexdigest()}"
        folder.mkdir(parents=True, exist_ok=True)
    except (OSError, RuntimeError):  # RuntimeError: a user without a home
        return ""
    return str(folder) if os.access(folder, os.W_OK) else ""


_folder = _cache_folder()
if _folder:
    numba.config.CACHE_DIR = _folder


def kernel(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile a function on first call with the project's defaults."""
    compiled: Callable[..., Any] = numba.njit(nogil=True, error_model="numpy", cache=bool(_folder))(function)
    return compiled


if COMPILED:

    @intrinsic
    def lowest_bit(typing_context, word):
        """Position of the lowest set bit of a non-zero uint64, as int64."""

        def generate(context, builder, signature, arguments):
            return builder.cttz(arguments[0], context.get_constant(types.boolean, True))

        return types.int64(types.uint64), generate

    @intrinsic
    def count_bits(typing_context, word):
        """Number of set bits of a uint64, as int64."""

        def generate(context, builder, signature, arguments):
            return builder.ctpop(arguments[0])

        return types.int64(types.uint64), generate

else:

    def lowest_bit(word: np.uint64) -> int:
        """Position of the lowest set bit of a non-zero uint64."""
        return (int(word) & -int(word)).bit_length() - 1

    def count_bits(word: np.uint64) -> int:
        """Number of set bits of a uint64."""
        return int(word).bit_count()
