"""Sampled sources (`pivots`): a simple random sample of sources without replacement, in the order they were drawn.

Brandes and Pich (2007). Source s gives party v the score x_s(v) = dependency / R(v) in [0, 1], where R(v) is the
number of other vertices in its weak component less one: more end points than that it cannot lie in front of. No
reduction is applied: folding or merging would change which dependencies a single source shows.

Blocks follow the order of the draw, so the first j blocks are themselves a simple random sample without replacement,
whatever j is: a run may stop, and an interval may look, after any block. Inside a block the draws are sorted by the
locality numbering, so that the lanes of a batch are near each other.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from isthmus.betweenness.engine_numba.exact import MOST_LANES, check_lengths, sweep
from isthmus.betweenness.engine_numba.kernels_moments import MOMENTS
from isthmus.betweenness.engine_numba.sequences import Scale, draw_order
from isthmus.betweenness.engine_numba.subgraphs import Floats, breadth_first, permuted
from isthmus.betweenness.engine_numba.zeros import certain_zeros
from isthmus.graph.arrays import Arrays, Ids

# Draws per block: bets are placed block by block, so a longer block is a little less sharp (a fiftieth from 64 to
# 128), a shorter one leaves lanes empty.
BLOCK = 64


@dataclass(frozen=True)
class Sources:
    """The draws, ready to run. draws: int32[n], all vertices of `arrays` in random order; a run takes the first.

    arrays: the graph renumbered for locality; order: int32[n], original id of each of its vertices; unit: float64[n],
    1 / R by its vertices; scale: from means of x to Freeman's scale, by original vertices.
    """

    arrays: Arrays
    order: Ids
    draws: Ids
    unit: Floats
    scale: Scale
    lanes: int
    max_hops: int = 0


class PivotPartial(NamedTuple):
    """One block: its number of draws and, by original vertex, float64[n] sums of x, float64[n, MOMENTS] moments."""

    draws: int
    sums: Floats
    moments: Floats


def prepare_sources(graph: Arrays, seed: int, *, lanes: int = MOST_LANES, max_hops: int = 0) -> Sources:
    """Order all sources at random. Raises ValueError for lengths that cannot be added exactly."""
    check_lengths(graph, max_hops)
    n = graph.n
    arcs = csr_array((np.ones(graph.arcs, np.int8), graph.out_adj, graph.out_ptr), shape=(n, n))
    _, component = connected_components(arcs, directed=graph.directed, connection="weak")
    company = np.bincount(component)[component] if n else np.zeros(0)
    largest = np.maximum(company - 2.0, 1.0)
    pairs = max(1.0, (n - 1.0) * (n - 2.0))
    scale = Scale(
        factor=n * largest / pairs,
        exact=np.zeros(n),
        ceiling=np.maximum(company - 1.0, 0.0) * np.maximum(company - 2.0, 0.0) / pairs,
        settled=certain_zeros(graph),
    )
    order = breadth_first(graph)
    place = np.empty(n, np.int32)
    place[order] = np.arange(n, dtype=np.int32)
    draws = place[draw_order(n, seed)]
    if graph.out_lengths is not None:
        lanes = 1
    return Sources(permuted(graph, order), order, draws, 1.0 / largest[order], scale, lanes, max_hops)


def run_block(sources: Sources, index: int, samples: int) -> PivotPartial:
    """Draws [index * BLOCK, index * BLOCK + samples); needs nothing but its arguments, so it may run in any process."""
    graph, n = sources.arrays, sources.arrays.n
    drawn = np.sort(sources.draws[index * BLOCK : index * BLOCK + samples])
    score, moments, ones = np.zeros(n), np.zeros((n, MOMENTS)), np.ones(n)
    sweep(
        graph, drawn, np.ones(drawn.size), score, np.zeros(0), sources.unit, moments,
        copies=ones, targets=ones, lanes=sources.lanes, max_hops=sources.max_hops,
    )  # fmt: skip
    sums, by_party = np.empty(n), np.empty((n, MOMENTS))
    sums[sources.order] = score * sources.unit
    by_party[sources.order] = moments
    return PivotPartial(drawn.size, sums, by_party)


def bytes_per_thread(n: int, arcs: int, lanes: int, weighted: bool) -> int:
    """Memory in bytes of one running block beside the graph: the sweep's own, and moments twice over, one waiting."""
    from isthmus.betweenness.engine_numba.exact import bytes_per_thread as of_sweep

    return of_sweep(n, arcs, lanes, weighted) + 8 * n * (3 * MOMENTS + 4)
