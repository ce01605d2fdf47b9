"""Burt's structural holes: how much a party's contacts know one another anyway.

Both figures are sums over triangles, and those are listed once: ties lead from the party with fewer ties to the one
with more, so that nobody has more than sqrt(2 ties) ways on, and two ways from one party are looked up as a tie.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

__all__ = ["burt"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# pairs of ways looked up at once: about 200 MiB
PAIRS = 2_000_000


def burt(strength: sparse.csr_array) -> tuple[Floats, Floats]:
    """Constraint and effective size of every party. Shapes (n,), (n,); NaN for parties without a tie.

    `strength`: symmetric, no diagonal, z[i, j] > 0 = contacts of i and j both ways together, columns ascending.
    Burt 1992, Structural Holes, ch. 2, with p[i, j] = z[i, j] / sum_k z[i, k] and m[j, q] = z[j, q] / max_k z[j, k]:

    - constraint(i) = sum over i's contacts j of (p[i, j] + sum_q p[i, q] p[q, j])^2, q another contact of i's and j's;
    - effective size(i) = sum over i's contacts j of (1 - sum_q p[i, q] m[j, q]), q as above.
    """
    n, ptr = strength.shape[0], strength.indptr.astype(np.int64)
    degree = np.diff(ptr)
    tail, head = np.repeat(np.arange(n), degree), strength.indices.astype(np.int64)
    z = strength.data.astype(np.float64)
    filled = np.flatnonzero(degree)
    total, most = np.ones(n), np.ones(n)
    if len(filled):
        total[filled] = np.add.reduceat(z, ptr[filled])
        most[filled] = np.maximum.reduceat(z, ptr[filled])
    p, m = z / total[tail], z / most[tail]
    # place of the arc j -> i for each arc i -> j: sorting by head, then tail, lists the reverses in order
    reverse = np.empty(len(tail), np.int64)
    reverse[np.lexsort((tail, head))] = np.arange(len(tail))
    indirect, redundant = np.zeros(len(tail)), np.zeros(n)
    for ab, ac, bc in _triangles(n, tail, head, degree):
        ba, ca, cb = reverse[ab], reverse[ac], reverse[bc]
        for direct, one, two in ((ab, ac, cb), (ba, bc, ca), (ac, ab, bc), (ca, cb, ba), (bc, ba, ac), (cb, ca, ab)):
            # direct = i -> j, one = i -> q, two = q -> j
            np.add.at(indirect, direct, p[one] * p[two])
            np.add.at(redundant, tail[direct], p[one] * m[reverse[two]])
    constraint = np.bincount(tail, (p + indirect) ** 2, n)
    alone = degree == 0
    return np.where(alone, np.nan, constraint), np.where(alone, np.nan, degree - redundant)


def _triangles(n: int, tail: Ints, head: Ints, degree: Ints) -> Iterator[tuple[Ints, Ints, Ints]]:
    """Every triangle a, b, c once, as the places of its arcs a -> b, a -> c, b -> c among the arcs."""
    order = np.empty(n, np.int64)
    order[np.lexsort((np.arange(n), degree))] = np.arange(n)
    up = np.flatnonzero(order[tail] < order[head])
    # sorted by (order of tail, order of head), so that keys ascend
    key = order[tail[up]] * n + order[head[up]]
    sort = np.argsort(key)
    up, key = up[sort], key[sort]
    first = key // n
    # ways on from the same party that come later in the list
    ends = np.searchsorted(first, first, side="right")
    later = ends - np.arange(len(up)) - 1
    sums = np.concatenate(([0], np.cumsum(later)))
    start = 0
    while start < len(up):
        stop = max(start + 1, int(np.searchsorted(sums, sums[start] + PAIRS, side="right")) - 1)
        ab = np.repeat(np.arange(start, stop), later[start:stop])
        ac = ab + 1 + np.arange(len(ab)) - (sums[ab] - sums[start])
        wanted = (key[ab] % n) * n + key[ac] % n
        bc = np.minimum(np.searchsorted(key, wanted), len(key) - 1)
        found = key[bc] == wanted
        if found.any():
            yield up[ab[found]], up[ac[found]], up[bc[found]]
        start = stop
