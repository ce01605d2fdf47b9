"""What a measurement hands on: a value for every party and an interval that holds for all of them at once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import polars as pl
from numpy.typing import NDArray

from isthmus.betweenness.ranks import rank, rank_range, settle

__all__ = ["Estimate"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Estimate:
    """Betweenness of every party on Freeman's scale: the share, 0..1, of the pairs of other parties.

    `betweenness`, `lower`, `upper`, `std_error` have shape (n,), in the order of `parties`. With probability
    `confidence` (1 for the exact method) every party's exact value lies in its [lower, upper], all at once.
    `std_error` is NaN where the method has none. `samples` counts sources (pivots) or pairs (paths); for the exact
    method it is the number of parties.
    """

    parties: pl.Series
    directed: bool
    betweenness: Floats
    lower: Floats
    upper: Floats
    std_error: Floats
    method: str
    engine: str
    samples: int
    seed: int
    confidence: float
    stopped_because: str

    @property
    def pairs(self) -> Floats:
        """The measure unnormalised: pairs of other parties, unordered when undirected. Shape (n,)."""
        n = len(self.parties)
        return self.betweenness * ((n - 1) * (n - 2) / (1 if self.directed else 2))

    @property
    def half_widths(self) -> Floats:
        """Half the length of each interval. Shape (n,)."""
        return (self.upper - self.lower) / 2

    def frame(self, top: int = 100) -> pl.DataFrame:
        """One row per party, best rank first.

        Columns: party, betweenness, lower, upper, std_error, pairs, rank, rank_best, rank_worst, and `top`: whether
        the party is surely among the first `top` (`in`), surely not (`out`), or not settled (`open`).
        """
        best, worst = rank_range(self.lower, self.upper)
        return pl.DataFrame(
            {
                "party": self.parties,
                "betweenness": self.betweenness,
                "lower": self.lower,
                "upper": self.upper,
                "std_error": pl.Series(self.std_error, nan_to_null=True),
                "pairs": self.pairs,
                "rank": rank(self.betweenness),
                "rank_best": best,
                "rank_worst": worst,
                "top": settle(self.lower, self.upper, top),
            }
        ).sort("rank")
