"""Ranks, and the ranks that the intervals leave possible.

On the event that all intervals hold, no further error is spent here: a party is surely behind another when its
upper bound is below the other's lower bound. Equal bounds settle nothing.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["rank", "rank_range", "settle", "snap"]

Floats = NDArray[np.float64]

SIGNIFICANT_DIGITS = 11


def snap(values: Floats) -> Floats:
    """Round to 11 significant digits: the order in which floats were added must not decide a rank. Shape (n,)."""
    rounded = np.zeros(len(values))
    some = values > 0
    scale = 10.0 ** (SIGNIFICANT_DIGITS - 1 - np.floor(np.log10(values[some])))
    rounded[some] = np.rint(values[some] * scale) / scale
    return rounded


def rank(value: Floats) -> NDArray[np.int64]:
    """Ranks 1..n, highest value first; equal values in the order they are given. Shape (n,)."""
    ranks = np.empty(len(value), np.int64)
    ranks[np.argsort(-value, kind="stable")] = np.arange(1, len(value) + 1)
    return ranks


def rank_range(lower: Floats, upper: Floats) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Best and worst rank possible: 1 + #{u: L_u > U_v} and n - #{u: U_u < L_v}. Shapes (n,), (n,)."""
    surely_ahead = len(lower) - np.searchsorted(np.sort(lower), upper, side="right")
    surely_behind = np.searchsorted(np.sort(upper), lower, side="left")
    return 1 + surely_ahead.astype(np.int64), len(lower) - surely_behind.astype(np.int64)


def settle(lower: Floats, upper: Floats, top: int) -> NDArray[np.str_]:
    """`in` when fewer than `top` others can reach this party, `out` when `top` others surely beat it, else `open`.

    `top` = 0 asks nobody in: everyone is `out`.
    """
    best, worst = rank_range(lower, upper)
    # Another party u can reach v when U_u >= L_v; v itself always does, hence worst counts v once.
    return np.where(worst <= top, "in", np.where(best > top, "out", "open"))
