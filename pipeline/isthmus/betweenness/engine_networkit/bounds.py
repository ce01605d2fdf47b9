"""How far a sampled mean can be from the truth, for all parties at once, when the sample size is fixed beforehand.

Both sampled methods average independent draws of known range, so one form serves both: with probability
1 - delta every party's estimate is within scale * sqrt(constant / samples) of its exact value.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from isthmus.graph import Graph

__all__ = ["Bound", "certain_zeros", "paths_bound", "pivots_bound"]

# Riondato and Kornaropoulos (2016, Data Min. Knowl. Disc. 30, Thm 1 and Sec. 4) need a constant that theory only
# says exists. Experiments put it near 0.5 (Loeffler and Phillips 2009); 1.0 leaves a factor of two in the sample.
UNIVERSAL_CONSTANT = 1.0


@dataclass(frozen=True)
class Bound:
    """Uniform bound on Freeman's scale. `scale`: range of one draw; `constant`: the exponent's share, >= 0."""

    scale: float
    constant: float

    def half_width(self, samples: int) -> float:
        """Half-width promised to every party by that many draws, before clipping to 0..1."""
        return self.scale * math.sqrt(self.constant / samples)

    def samples(self, half_width: float) -> int:
        """Draws needed to promise that half-width."""
        return math.ceil(self.constant * (self.scale / half_width) ** 2)


def certain_zeros(graph: Graph) -> NDArray[np.bool_]:
    """Parties that no path can pass through: nobody leads in, or out, or only one and the same does both.

    Shape (n,). They need no share of delta.
    """
    zeros: NDArray[np.bool_]
    out, into = np.diff(graph.out_ptr), np.diff(graph.in_ptr)
    if not graph.directed:
        zeros = out <= 1
        return zeros
    zeros = (out == 0) | (into == 0)
    single = np.flatnonzero((out == 1) & (into == 1))
    zeros[single] = graph.out_adj[graph.out_ptr[single]] == graph.in_adj[graph.in_ptr[single]]
    return zeros


def _all_at_once(uncertain: int, confidence: float) -> float:
    """ln(2 m / delta) / 2: Hoeffding (1963, Thm 2), two sides, delta shared evenly among m parties."""
    return math.log(2 * max(uncertain, 1) / (1 - confidence)) / 2


def pivots_bound(n: int, uncertain: int, confidence: float) -> Bound:
    """For `samples` sources drawn with replacement whose pairs are credited by distance.

    A source credits a party 2 d(s,v)/d(s,t) < 2 for each of the n - 2 targets at most, and the estimate multiplies
    by n / ((n-1)(n-2)): one draw lies in [0, 2n/(n-1)].
    """
    return Bound(2 * n / (n - 1), _all_at_once(uncertain, confidence))


def paths_bound(n: int, uncertain: int, confidence: float, dimension: int = 0) -> Bound:
    """For `samples` shortest paths of ordered pairs drawn with replacement: one draw is 0 or n/(n-2).

    `dimension` bounds the Vapnik-Chervonenkis dimension, floor(log2(vertex diameter - 2)) + 1, and gives Riondato
    and Kornaropoulos's bound; 0 where no valid one is known. Hoeffding's with delta shared needs no dimension and
    is taken where it is narrower. Both are fixed before the first draw, so the choice costs nothing.
    """
    constant = _all_at_once(uncertain, confidence)
    if dimension:
        constant = min(constant, UNIVERSAL_CONSTANT * (dimension + math.log(1 / (1 - confidence))))
    return Bound(n / (n - 2), constant)
