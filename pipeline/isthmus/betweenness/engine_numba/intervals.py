"""Intervals that hold for all parties at once, from counts at a fixed number of samples.

Every function takes `alpha`, the chance of missing that one party may spend. Sharing delta = 1 - confidence
out over the parties (and the planned looks) and adding up (Bonferroni) makes the statement simultaneous;
certain zeros need no share. The bounds for sampled sources, which are drawn without replacement, are in
`sequences`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import betainccinv, betaincinv

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Bounds:
    """float64[n] each, Freeman's scale 0..1, lower <= estimate <= upper."""

    estimate: Floats
    lower: Floats
    upper: Floats
    std_error: Floats

    @property
    def half_width(self) -> Floats:
        return (self.upper - self.lower) / 2


def clopper_pearson(counts: NDArray[np.int64], samples: int, alpha: float) -> tuple[Floats, Floats]:
    """Exact binomial interval for each count, alpha / 2 on each side; computed once per distinct count.

    Clopper, Pearson (1934), The use of confidence or fiducial limits illustrated in the case of the binomial.
    """
    distinct, which = np.unique(counts, return_inverse=True)
    c = distinct.astype(np.float64)
    lower, upper = np.zeros(c.size), np.ones(c.size)
    some, not_all = c > 0, c < samples
    lower[some] = betaincinv(c[some], samples - c[some] + 1, alpha / 2)
    upper[not_all] = betainccinv(c[not_all] + 1, samples - c[not_all], alpha / 2)
    none = c == 0
    upper[none] = -np.expm1(np.log(alpha / 2) / samples)
    return lower[which], upper[which]


def path_bounds(
    hits: NDArray[np.int64],
    samples: int,
    exact: Floats,
    ceiling: Floats,
    settled: NDArray[np.bool_],
    delta: float,
) -> Bounds:
    """Bounds from path counts: `exact` plus the sampled part, which comes to Freeman's scale here alone.

    hits: int64[n]; exact, ceiling: float64[n], Freeman's scale: what is known without sampling, and what
    cannot be exceeded; settled: bool[n], nothing left to sample. Pairs were drawn from all n (n - 1),
    Freeman's divisor leaves out the party itself, hence the factor n / (n - 2).
    """
    n = hits.size
    scale = n / (n - 2) if n > 2 else 0.0
    open_ = int(n - settled.sum())
    share = hits / samples
    lower, upper = clopper_pearson(hits, samples, delta / max(open_, 1))
    spread = np.where(settled, 0.0, scale)
    estimate = np.minimum(exact + spread * share, ceiling)
    lower = np.minimum(exact + spread * lower, estimate)
    upper = np.maximum(np.minimum(exact + spread * upper, ceiling), estimate)
    return Bounds(estimate, lower, upper, spread * np.sqrt(share * (1 - share) / samples))
