"""Sampled sources (`pivots`): a simple random sample of sources without replacement, in the order they were drawn.

Brandes and Pich (2007). Source s gives party v the score x_s(v) = dependency / R(v) in [0, 1], where R(v) is the
number of vertices that it can reach, at most: more end points than that it cannot lie in front of.

Structure is used where one source still shows what it showed before. Hanging trees come off (undirected, no hop
limit): a source in a tree is swept from where the tree hangs, and pairs that a tree settles are counted, not sampled.
Twins are merged: they have the same dependencies, so a class of them shares its statistics, and a source sweeps as any
other of its class. Blocks are not cut: a source would then no longer see past its own block.

Blocks of draws follow their order, so the first j blocks are themselves a simple random sample without replacement,
whatever j is: a run may stop, and an interval may look, after any block. Inside a block the sources are sorted by the
locality numbering, so that the lanes of a batch are near each other, and those that sweep alike are swept once.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from isthmus.betweenness.engine_numba.exact import GO_ON, MOST_LANES, check_lengths, sweep
from isthmus.betweenness.engine_numba.kernels_moments import MOMENTS
from isthmus.betweenness.engine_numba.kernels_structure import anchor_trees, peel
from isthmus.betweenness.engine_numba.reach import reach_limits
from isthmus.betweenness.engine_numba.reductions import Reduced, reduce
from isthmus.betweenness.engine_numba.sequences import Scale, draw_order
from isthmus.betweenness.engine_numba.subgraphs import Bytes, Floats
from isthmus.betweenness.engine_numba.trees import component_sizes
from isthmus.betweenness.engine_numba.zeros import certain_zeros
from isthmus.graph.arrays import Arrays, Ids

# Draws in the first blocks. Bets are placed block by block, so long blocks are less sharp, and short ones leave lanes
# empty. A block may be longer the more draws came before it: at a quarter of them it costs a fiftieth of the width, and
# the more sources it sorts, the nearer they are to each other.
BLOCK, SHARE, LONGEST = 64, 4, 1024


@dataclass(frozen=True)
class Sources:
    """The draws, ready to run. draws: int32[n], all parties in random order; a run takes the first.

    reduced: what is swept, r vertices; seen_from: int32[n], where the sweep of each source starts, -1: it shows nothing
    that is not counted; unit: float64[r], 1 / R; scale: from means of x to Freeman's scale.
    """

    reduced: Reduced
    draws: Ids
    seen_from: Ids
    unit: Floats
    scale: Scale
    lanes: int
    max_hops: int = 0


class PivotPartial(NamedTuple):
    """One block: its number of draws and, by reduced vertex, float64[r] sums of x, float64[r, MOMENTS] moments."""

    draws: int
    sums: Floats
    moments: Floats


def prepare_sources(
    graph: Arrays, seed: int, *, lanes: int = MOST_LANES, max_hops: int = 0, structure: bool = True
) -> Sources:
    """Order all sources at random. Raises ValueError for lengths that cannot be added exactly.

    structure=False takes nothing off and merges nothing (for tests).
    """
    check_lengths(graph, max_hops)
    n = graph.n
    fold = structure and not graph.directed and not max_hops
    reduced = reduce(graph, fold=fold, blocks=False, twins=structure, max_hops=max_hops)
    classes = reduced.arrays.n
    holder = np.full(n, -1, np.int32)
    holder[reduced.member] = reduced.holder
    seen_from = np.arange(n, dtype=np.int32)
    if fold:
        anchor_trees(*peel(graph.out_ptr, graph.out_adj), seen_from)
    company = component_sizes(graph)
    before, after = reach_limits(graph)
    largest = np.ones(classes)
    np.maximum.at(largest, reduced.holder, np.minimum(company - 2, after)[reduced.member])
    pairs = max(1.0, (n - 1.0) * (n - 2.0))
    scale = Scale(
        factor=n * largest / pairs,
        settled=certain_zeros(reduced.arrays),
        exact=reduced.settled / pairs,
        ceiling=np.minimum((company - 1) * (company - 2), before * after) / pairs,
        holder=holder,
    )
    if graph.out_lengths is not None:
        lanes = 1
    return Sources(
        reduced, draw_order(n, seed).astype(np.int32), holder[seen_from], 1.0 / largest, scale, lanes, max_hops
    )


def plan_blocks(most: int) -> Iterator[tuple[int, int]]:
    """(first draw, draws) of each block, until `most` draws are taken."""
    start = 0
    while start < most:
        size = min(max(BLOCK, start // SHARE // BLOCK * BLOCK), LONGEST, most - start)
        yield start, size
        start += size


def run_block(sources: Sources, start: int, size: int, stop: Bytes = GO_ON) -> PivotPartial:
    """Draws [start, start + size); needs nothing but its arguments, so it may run in any process."""
    reduced = sources.reduced
    drawn = sources.seen_from[sources.draws[start : start + size]]
    drawn, times = np.unique(drawn[drawn >= 0], return_counts=True)
    score, moments = np.zeros(reduced.arrays.n), np.zeros((reduced.arrays.n, MOMENTS))
    sweep(
        reduced.arrays, drawn, times.astype(np.float64), score, np.zeros(0), sources.unit, moments, stop,
        copies=reduced.copies, targets=reduced.target_weight, lanes=sources.lanes, max_hops=sources.max_hops,
    )  # fmt: skip
    return PivotPartial(size, score * sources.unit, moments)


def bytes_per_thread(n: int, arcs: int, lanes: int, weighted: bool) -> int:
    """Memory in bytes of one running block beside the graph: the sweep's own, and moments twice over, one waiting."""
    from isthmus.betweenness.engine_numba.exact import bytes_per_thread as of_sweep

    return of_sweep(n, arcs, lanes, weighted) + 8 * n * (3 * MOMENTS + 4)
