"""Distances to many parties at once: one bit of a word per target, breadth first (Then et al. 2014).

A level is pulled (every party looks at all it leads to) when the front is wide and pushed when it is narrow (Beamer,
Asanovic, Patterson 2012). Sums are whole numbers, so they depend on no order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from isthmus.graph import Arrays

__all__ = ["LANES", "SCALE", "nearness"]

Ints = NDArray[np.int64]

LANES = 64
# 1/d as a whole number: exact for every d up to 16, else to 12 digits; 11 million of them fit 63 bits
SCALE = 720_720 * 2**20
# a push touches an arc at this many times the cost of a pull
PUSH_COST = 6


def nearness(graph: Arrays, targets: Ints) -> tuple[Ints, Ints]:
    """Sums of SCALE/d and SCALE/d^2 over `targets` whose distance d from the party, in hops, is 2 or more.

    Shapes (n,), (n,). At most LANES targets, repeats count again; unreachable targets and the party itself add nothing,
    nor do those one hop away, for they are known from the adjacency.
    """
    n = graph.n
    front = np.zeros(n, np.uint64)
    np.bitwise_or.at(front, targets, np.uint64(1) << np.arange(len(targets), dtype=np.uint64))
    seen = front.copy()
    sums, squares = np.zeros(n, np.int64), np.zeros(n, np.int64)
    degree = np.diff(graph.out_ptr)
    filled = np.flatnonzero(degree)
    starts = graph.out_ptr[filled]
    into = np.diff(graph.in_ptr)
    active = np.unique(targets)
    distance = 0
    while len(active):
        distance += 1
        if PUSH_COST * into[active].sum() < graph.arcs:
            reached, bits = _push(graph, active, front)
        else:
            reached, bits = filled, np.bitwise_or.reduceat(front[graph.out_adj], starts)
        bits &= ~seen[reached]
        fresh = bits != 0
        front[active] = 0
        active, bits = reached[fresh], bits[fresh]
        front[active] = bits
        seen[active] |= bits
        if distance > 1:
            count = np.bitwise_count(bits).astype(np.int64)
            sums[active] += count * round(SCALE / distance)
            squares[active] += count * round(SCALE / distance**2)
    return sums, squares


def _push(graph: Arrays, active: Ints, front: NDArray[np.uint64]) -> tuple[Ints, NDArray[np.uint64]]:
    """Who leads to the active parties, each once, and the bits they get."""
    begin, length = graph.in_ptr[active], graph.in_ptr[active + 1] - graph.in_ptr[active]
    skip = np.repeat(begin - (np.cumsum(length) - length), length)
    heads = graph.in_adj[skip + np.arange(len(skip))]
    order = np.argsort(heads, kind="stable")
    heads = heads[order]
    bits = np.repeat(front[active], length)[order]
    if not len(heads):
        return heads.astype(np.int64), bits
    starts = np.flatnonzero(np.concatenate(([True], heads[1:] != heads[:-1])))
    return heads[starts].astype(np.int64), np.bitwise_or.reduceat(bits, starts)
