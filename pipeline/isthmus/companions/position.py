"""Where a party stands among all: percentiles, and what betweenness is left when being busy is taken off."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["percentile", "residual", "standardised"]

# squares are taken to be at least this share of their mean: one party on the line must not bend the line of spreads
SMALLEST_SQUARE = 1e-6

Floats = NDArray[np.float64]


def percentile(values: Floats) -> Floats:
    """Share of the parties that are lower, equals counted half, 0..100. Shape (n,).

    Whoever is in the middle, or equal to everyone, has 50.
    """
    ascending = np.sort(values)
    lower, not_higher = (np.searchsorted(ascending, values, side) for side in ("left", "right"))
    shares: Floats = (lower + not_higher).astype(np.float64) * (50 / max(len(values), 1))
    return shares


def residual(pairs: Floats, degree: Floats) -> Floats:
    """log(1 + pairs) less its least-squares line on log(degree), over parties with a tie. Shape (n,), NaN for others.

    Natural logarithms. When all degrees are equal no line can be told, the slope is 0, and the residual is the
    distance from the mean.
    """
    rest = np.full(len(pairs), np.nan)
    some = degree > 0
    if some.any():
        x, y = np.log(degree[some]), np.log1p(pairs[some])
        rest[some] = y - _line(x, y)
    return rest


def standardised(rest: Floats, degree: Floats) -> Floats:
    """Residuals over the spread usual at their degree; their mean square is 1. Shape (n,), NaN where `rest` is.

    Parties of two or three contacts scatter far more than those of twenty, so the largest plain residuals are theirs.
    The log of the squared residual is fitted on log(degree) (Harvey 1976, multiplicative heteroscedasticity).
    """
    told = np.full(len(rest), np.nan)
    some = np.isfinite(rest)
    square = rest[some] ** 2
    if not (square > 1e-24).any():
        told[some] = 0.0
        return told
    log_square = np.log(np.maximum(square, SMALLEST_SQUARE * square.mean()))
    z = rest[some] / np.exp(_line(np.log(degree[some]), log_square) / 2)
    told[some] = z / np.sqrt((z**2).mean())
    return told


def _line(x: Floats, y: Floats) -> Floats:
    """The least-squares line of y on x at each x; the mean of y where all x are equal. Shape (n,)."""
    dx = x - x.mean()
    slope = 0.0 if x.min() == x.max() else (dx * (y - y.mean())).sum() / (dx * dx).sum()
    fitted: Floats = y.mean() + slope * dx
    return fitted
