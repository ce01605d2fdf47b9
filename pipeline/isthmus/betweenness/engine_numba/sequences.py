"""Bounds for means of values in [0, 1] drawn without replacement, valid at all times: for sampled sources.

For each party a bet is made against every candidate mean m. While x_1, x_2, ... come in, the bettor against
"m is too low" holds a capital that is multiplied by (1 + theta x) / (1 + theta m'), the one against "m is too
high" by (1 - theta x) / (1 - theta m'), where m' = (N m - S) / (N - k) is what m makes the mean of the N - k
values not drawn yet, S the sum of the k drawn. Under the true mean neither gains on average, so the chance
that it ever reaches 2 / alpha is at most alpha / 2 (Ville 1939); the m that it did reach it against are
excluded. Waudby-Smith, Ramdas (2023), Estimating means of bounded random variables by betting, sec. 5; theirs
is (1 + lambda (x - m)), which is the same with theta = lambda / (1 - lambda m), but in this form one theta
serves every m.

What makes it cheap:

- theta is fixed for a whole block of draws from what earlier blocks showed. Within a block the draws are
  taken as if with replacement, which by Hoeffding (1963, theorem 4) errs on the safe side, for the product is
  a convex function of a sum; so the order within a block does not matter, and a block is one addition;
- log(1 + theta x) is concave in x, so it is bounded below by linear interpolation between the points of
  `GRID`: each x is spread over its two neighbouring points, and a block is known by the weight at each point
  (`spread`). This costs about one per cent of width, and keeps what sums of squares lose: how large the rare
  large values are;
- log(1 + theta m') is bounded above by its tangent where the bound is expected, so that the excluded m are
  found in closed form from three numbers a side.

theta is best for one number of draws, the horizon. Without one, several horizons, each twice the one before,
share alpha.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from isthmus.betweenness.engine_numba.intervals import Bounds, Floats

GRID = 2.0 ** np.arange(-8, 1)  # and 0, whose weight is not needed
RISES = np.geomspace(0.02, 400, 24)  # theta against too low a mean
FALLS = 1 / (1 + 1 / np.geomspace(0.02, 60, 16))  # theta against too high a mean, < 1
STEEPEST = 0.98
FIRST_HORIZON = 256
EARLY, LATE = 16, 4  # a horizon h takes part from h / EARLY to LATE * h draws
REVIEW = 1.1  # bets are reviewed when the draws have grown by this factor


def spread(values: Floats) -> Floats:
    """Weights of values[..., draws] at GRID, summed over the draws: [..., 9]. The plain form of the kernel's.

    A value x between neighbours a < b adds (b - x) / (b - a) at a and (x - a) / (b - a) at b; weights at 0
    are dropped.
    """
    points = np.concatenate([[0.0], GRID])
    above = np.clip(np.searchsorted(points, values, side="right"), 1, GRID.size)
    share = (values - points[above - 1]) / (points[above] - points[above - 1])
    at = above[..., None] == np.arange(points.size)
    before = (above - 1)[..., None] == np.arange(points.size)
    weights: Floats = (share[..., None] * at + (1 - share)[..., None] * before).sum(-2)[..., 1:]
    return weights


class Bets:
    """The capitals of one horizon, for all parties. ell = ln(2 / alpha) is the log capital that excludes."""

    def __init__(self, parties: int, population: int, horizon: int, ell: float) -> None:
        self.population, self.horizon, self.ell = population, horizon, ell
        self.reviewed = 0
        # log capital against m is gain - slope * m (too low) and gain + slope * m (too high).
        self.gain_low, self.slope_low, self.gain_high, self.slope_high = np.zeros((4, parties))
        self.rise, self.fall = np.zeros((2, parties), np.int8)
        self.low, self.high = np.zeros(parties), np.ones(parties)

    def review(self, parties: NDArray[np.int64], draws: int, weights: Floats, sums: Floats) -> None:
        """Choose each party's theta: the one that promises the narrowest bound at the horizon if all went on so."""
        from isthmus.betweenness.engine_numba import kernels_bets

        if draws < REVIEW * self.reviewed:
            return
        self.reviewed = draws
        # Without replacement, k of N tell as much as N k / (N - k) with replacement.
        horizon = min(max(self.horizon, draws + 1), self.population - 1)
        cost = self.ell * (self.population - horizon) / (self.population * horizon)
        kernels_bets.review(
            parties, draws, weights, sums, np.log1p(np.outer(GRID, RISES)), np.log1p(-np.outer(GRID, FALLS)), RISES,
            FALLS, cost, self.rise, self.fall, self.low, self.high,
        )  # fmt: skip

    def settle(
        self,
        parties: NDArray[np.int64],
        draws: int,
        sums: Floats,
        size: int,
        weights: Floats,
        lowest: Floats,
        highest: Floats,
    ) -> None:
        """Book a block of `size` draws; draws, sums: before it; weights: of the block. Tightens lowest and highest."""
        from isthmus.betweenness.engine_numba import kernels_bets

        # Each draw says more the fewer are left: m' moves N / (N - k) times as fast as m.
        left = self.population - draws
        pull = self.population / left
        rises, falls = RISES * pull, np.minimum(FALLS * pull, STEEPEST)
        kernels_bets.settle(
            parties, float(size), weights, sums / left, pull, np.log1p(np.outer(GRID, rises)),
            np.log1p(-np.outer(GRID, falls)), rises, falls, self.rise, self.fall, self.low, self.high,
            self.gain_low, self.slope_low, self.gain_high, self.slope_high, self.ell, lowest, highest,
        )  # fmt: skip


@dataclass(frozen=True)
class Scale:
    """From means to Freeman's scale: betweenness = exact + factor * mean, never above ceiling.

    Parties that are alike share one mean, their class's. factor: float64[classes], N R / ((n - 1)(n - 2)) for N sources
    whose dependencies were divided by R; settled: bool[classes], nothing there to sample; exact, ceiling: float64[n],
    by party; holder: int32[n], each party's class, -1: `exact` is the whole of it.
    """

    factor: Floats
    settled: NDArray[np.bool_]
    exact: Floats
    ceiling: Floats
    holder: NDArray[np.int32]

    def of_parties(self, mean: Floats) -> Floats:
        """float64[n], from a mean of each class."""
        sampled = np.append(np.where(self.settled, 0.0, self.factor) * mean, 0.0)[self.holder]
        scaled: Floats = np.minimum(self.exact + sampled, self.ceiling)
        return scaled


class PivotEvidence:
    """Statistics of sources drawn without replacement, block by block, that may be looked at after any block.

    population: the N possible sources. horizon: the number of draws intended, if `samples` is the only rule,
    else 0. Memory: 8 * (13 + 6 * bets) bytes a class of parties; one set of bets with a horizon, else at most 7
    at a time.
    """

    def __init__(self, population: int, scale: Scale, delta: float, horizon: int = 0) -> None:
        self.population, self.scale = population, scale
        classes = scale.factor.size
        if horizon:
            horizons = [horizon]
        else:
            first = min(FIRST_HORIZON, population)
            horizons = [first << i for i in range(max(1, int(np.log2(population / first)) + 1))]
        alpha = delta / max(1, int(classes - scale.settled.sum()))
        self._ell = float(np.log(2 * len(horizons) / alpha))
        self._waiting, self._bets = horizons, list[Bets]()
        self._early = not horizon
        self.draws = 0
        self.weights = np.zeros((classes, GRID.size))
        self.sums, self.squares = np.zeros((2, classes))
        self._low, self._high = np.zeros(classes), np.ones(classes)
        self._open = np.flatnonzero(~scale.settled)

    @property
    def taken(self) -> int:
        return self.draws

    def __getstate__(self) -> dict[str, object]:
        """All that has been added up, without the scale: a checkpoint is put to a scale made anew."""
        return {key: value for key, value in self.__dict__.items() if key != "scale"}

    def add(self, size: int, weights: Floats, sums: Floats, squares: Floats) -> None:
        """Take the next block of `size` sources with values x in [0, 1].

        weights: float64[classes, 9], see `spread`; sums, squares: float64[classes], of x and of x ** 2. The blocks must
        be consecutive parts of one random order of all sources; the order within a block is free.
        """
        while self._waiting and (not self._early or self._waiting[0] <= EARLY * max(self.draws, 1)):
            self._bets.append(Bets(self.sums.size, self.population, self._waiting.pop(0), self._ell))
        if self._early:
            for bets in [b for b in self._bets if self.draws > LATE * b.horizon]:
                self._bets.remove(bets)
        for bets in self._bets:
            if self.draws > 0:
                bets.review(self._open, self.draws, self.weights, self.sums)
                bets.settle(self._open, self.draws, self.sums, size, weights, self._low, self._high)
        self.weights += weights
        self.sums += sums
        self.squares += squares
        self.draws += size

    def bounds(self, share: float = 1.0) -> Bounds:
        """Intervals now. share: always 1, for a sequence pays once for all looks."""
        if share != 1.0:
            raise ValueError("a sequence is looked at at full delta")
        k, population, scale = self.draws, self.population, self.scale
        mean = self.sums / k
        low = np.clip(np.maximum(self._low, self.sums / population), 0, mean)
        high = np.clip(np.minimum(self._high, (self.sums + (population - k)) / population), mean, 1)
        variance = np.maximum(self.squares - self.sums * mean, 0) / max(k - 1, 1)
        error = np.sqrt(variance * (1 - k / population) / k)
        estimate = scale.of_parties(mean)
        return Bounds(
            estimate,
            np.minimum(scale.of_parties(low), estimate),
            np.maximum(scale.of_parties(high), estimate),
            np.append(np.where(scale.settled, 0.0, scale.factor) * error, 0.0)[scale.holder],
        )


def draw_order(population: int, seed: int) -> NDArray[np.int64]:
    """A random order of the possible sources, from raw words, so that no release of numpy changes it.

    Two equal words among n would keep their order: a chance of n ** 2 / 2 ** 65, not worth a second draw.
    """
    words = np.random.PCG64(np.random.SeedSequence(seed)).random_raw(population)
    order: NDArray[np.int64] = np.argsort(words, kind="stable")
    return order
