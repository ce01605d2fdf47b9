"""Harmonic closeness: how near a party is to the others, exactly or from sampled targets with an interval."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from isthmus.companions.lanes import LANES, SCALE, nearness
from isthmus.graph import Arrays

__all__ = ["Closeness", "closeness", "is_affordable"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# arcs looked at in all, were each level pulled once per word of targets and there were ten levels: seconds
EXACT_WORK = 4_000_000_000
LEVELS = 10
# variance and mean that a party is supposed to have before anything is drawn, worth one draw
# (a fourth is the largest variance that values in 0..1 can have)
PRIOR_VARIANCE, PRIOR_MEAN = 0.25, 0.5
LARGEST_BET = 0.75


@dataclass(frozen=True, eq=False)
class Closeness:
    """`value`, `lower`, `upper`: shape (n,), 0..1. All equal when exact (`samples` = 0)."""

    value: Floats
    lower: Floats
    upper: Floats
    samples: int


def is_affordable(graph: Arrays) -> bool:
    """Whether exact closeness is a matter of seconds. Settled by counting, so the same on every machine."""
    return -(-graph.n // LANES) * LEVELS * (graph.arcs + graph.n) <= EXACT_WORK


def closeness(graph: Arrays, *, samples: int, confidence: float, seed: int, threads: int) -> Closeness:
    """(1/(n-1)) sum over the others t of 1/d(party, t), d in hops, 1/d = 0 where no path leads.

    Distances are those FROM the party, along the ties' direction: how fast it reaches others (Marchiori and Latora
    2000; Rochat 2009). Lengths of ties are not looked at, so that every term lies in [0, 1].

    Exact when that is affordable or `samples` >= n. Else `samples` targets are drawn with replacement, and with
    probability `confidence` every party's value lies in its interval, all at once. Neighbours are counted exactly;
    drawn terms therefore lie in [0, 1/2]. Interval: the predictable plug-in empirical Bernstein of Waudby-Smith and
    Ramdas (2023, Thm 2) at 1 - (1 - confidence)/m, m = parties whose value is not certain beforehand (union bound),
    bets and centres fixed before each word of 64 targets. It is met with what degree and component leave possible.
    """
    n = graph.n
    if n < 2:
        return Closeness(np.zeros(n), np.zeros(n), np.zeros(n), 0)
    near = np.diff(graph.out_ptr) / (n - 1)
    if samples >= n or is_affordable(graph):
        total = np.zeros(n, np.int64)
        for sums, _ in _swept(graph, np.arange(n), threads):
            total += sums
        value = near + total / (SCALE * (n - 1))
        return Closeness(value, value, value, 0)
    targets = np.random.default_rng(seed).integers(n, size=samples)
    certain_upper = _most(graph) / (n - 1)
    open_ = int((certain_upper > near).sum())
    mean, lower, upper = _bernstein(
        _swept(graph, targets, threads), n, samples, np.log(2 * max(open_, 1) / (1 - confidence))
    )
    # a term is twice what is drawn, and n targets can be drawn of which n - 1 count
    factor = n / (n - 1) / 2
    lower = np.clip(near + factor * lower, near, certain_upper)
    upper = np.clip(near + factor * upper, near, certain_upper)
    return Closeness(np.clip(near + factor * mean, lower, upper), lower, upper, samples)


def _swept(graph: Arrays, targets: Ints, threads: int) -> Iterator[tuple[Ints, Ints]]:
    """`nearness` word by word, in order whatever the number of threads."""
    words = [targets[at : at + LANES] for at in range(0, len(targets), LANES)]
    with ThreadPoolExecutor(max(threads, 1)) as pool:
        # a few ahead at a time: each result holds two whole numbers per party
        width = 4 * max(threads, 1)
        for at in range(0, len(words), width):
            yield from pool.map(lambda word: nearness(graph, word), words[at : at + width])


def _bernstein(
    words: Iterator[tuple[Ints, Ints]], n: int, samples: int, log_term: float
) -> tuple[Floats, Floats, Floats]:
    """Mean and interval of draws x in 0..1 (twice the nearness), `log_term` = ln(2/alpha). Shapes (n,) each.

    Centre sum(bet x) / sum(bet), half-width (log_term + sum((x - centre before)^2 (-ln(1 - bet) - bet))) / sum(bet).
    """
    total, squares = np.zeros(n), np.zeros(n)
    weighted, bets, spent = np.zeros(n), np.zeros(n), np.full(n, log_term)
    done = 0
    for word_sum, word_square in words:
        count = min(LANES, samples - done)
        x, xx = word_sum * (2 / SCALE), word_square * (4 / SCALE)
        # of what was drawn before this word only
        centre = (PRIOR_MEAN + total) / (1 + done)
        # (1/4 + the squares about the mean so far) / (1 + draws so far)
        variance = (PRIOR_VARIANCE + np.maximum(squares - total**2 / max(done, 1), 0.0)) / (1 + done)
        bet = np.minimum(np.sqrt(2 * log_term / (samples * variance)), LARGEST_BET)
        weighted += bet * x
        bets += bet * count
        spent += np.maximum(xx - 2 * centre * x + count * centre**2, 0.0) * (-np.log1p(-bet) - bet)
        total += x
        squares += xx
        done += count
    middle, half = weighted / bets, spent / bets
    return total / samples, middle - half, middle + half


def _most(graph: Arrays) -> Floats:
    """The largest sum of 1/d that degree and weak component leave possible: those not adjacent at two hops. (n,)."""
    n, degree = graph.n, np.diff(graph.out_ptr)
    matrix = sparse.csr_array((np.ones(graph.arcs, np.int8), graph.out_adj, graph.out_ptr), shape=(n, n))
    _, label = connected_components(matrix, directed=graph.directed, connection="weak")
    others = np.bincount(label)[label] - 1
    return np.where(degree == 0, 0.0, degree + (others - degree) / 2)
