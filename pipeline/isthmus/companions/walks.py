"""Who is joined to the well joined: eigenvector centrality and PageRank.

Rows are multiplied by scipy on one thread and sums are numpy's own, never BLAS: its dot products split long vectors
among threads, and then the last bits depend on their number.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.linalg import eigh_tridiagonal

__all__ = ["DAMPING", "DECIMALS", "eigenvector", "pagerank"]

Floats = NDArray[np.float64]

DAMPING = 0.85
# eigenvector centralities are iterated until the rest is below this share of the eigenvalue, and rounded
RESIDUAL, DECIMALS = 1e-11, 9
STEPS, CYCLES = 24, 100
# PageRank: the sum of the absolute moves of one more round; the distance from the limit is at most 0.85/0.15 of it
MOVED = 1e-12


def eigenvector(adjacency: sparse.csr_array) -> Floats | None:
    """Eigenvector of the largest eigenvalue, its largest entry 1, rounded to 9 decimals. Shape (n,).

    `adjacency`: symmetric, entries 0 or 1. Bonacich 1972, on the simple undirected graph. Parties outside the component
    with the largest eigenvalue have 0 by definition; among several such components each gets its share of the even
    start. Restarted Lanczos steps (Parlett 1980, ch. 13), because plain power iteration swings for ever on bipartite
    graphs. None when it has not settled after 2,400 steps, or when there is no tie.
    """
    n = adjacency.shape[0]
    if not adjacency.nnz:
        return None
    x = np.full(n, n**-0.5)
    for _ in range(CYCLES):
        product = adjacency @ x
        value = _dot(x, product)
        if _norm(product - value * x) <= RESIDUAL * value:
            # the sign is fixed by the start: its product with the even vector is positive
            found: Floats = np.round(np.abs(x) / np.abs(x).max(), DECIMALS)
            return found
        x = _lanczos(adjacency, x)
    return None


def _lanczos(adjacency: sparse.csr_array, start: Floats) -> Floats:
    """The best approximation within STEPS products from `start` (norm 1). Shape (n,).

    Two passes: the basis is made anew for the sum instead of kept, which would take STEPS vectors of memory.
    """
    diagonal: list[float] = []
    beside: list[float] = []
    for _, alpha, beta in _basis(adjacency, start):
        diagonal.append(alpha)
        beside.append(beta)
    last = len(diagonal) - 1
    _, vectors = eigh_tridiagonal(diagonal, beside[:last], select="i", select_range=(last, last))
    weights = vectors[:, 0] * (1 if vectors[0, 0] >= 0 else -1)
    x = np.zeros(len(start))
    for weight, (vector, _, _) in zip(weights, _basis(adjacency, start), strict=True):
        x += weight * vector
    x /= _norm(x)
    return x


def _basis(adjacency: sparse.csr_array, start: Floats) -> Iterator[tuple[Floats, float, float]]:
    """Lanczos vectors of norm 1, each with its diagonal entry and the one that leads to the next."""
    before, vector, beta = np.zeros(len(start)), start, 0.0
    for _ in range(STEPS):
        product = adjacency @ vector
        alpha = _dot(vector, product)
        rest = product - alpha * vector - beta * before
        beta = _norm(rest)
        yield vector, alpha, beta
        if beta < 1e-13 * max(abs(alpha), 1.0):
            return
        before, vector = vector, rest / beta


def pagerank(out: sparse.csr_array) -> Floats:
    """Share of time that a walker spends at each party. Shape (n,), sum 1.

    `out`: row v holds 1 for each party that v leads to. Brin and Page 1998: with 0.85 the walker takes one of the ties
    at even odds, else, and where no tie leads on, it starts again anywhere. Rounds until one moves less than 1e-12 in
    all, so at most 5.7e-12 from the limit.
    """
    n = out.shape[0]
    degree = np.diff(out.indptr)
    stuck = degree == 0
    back = out.T.tocsr()
    share = np.divide(1.0, degree, out=np.zeros(n), where=~stuck)
    x: Floats = np.full(n, 1 / n)
    while True:
        # one whole sum: rounding errors do not pile up over the rounds
        step = DAMPING * (back @ (x * share))
        step += (1 - step.sum()) / n
        moved = np.abs(step - x).sum()
        x = step
        if moved < MOVED:
            return x


def _dot(x: Floats, y: Floats) -> float:
    return float((x * y).sum())


def _norm(x: Floats) -> float:
    return float(np.sqrt((x * x).sum()))
