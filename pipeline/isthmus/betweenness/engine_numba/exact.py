"""Exact betweenness: the plan, the blocks, and the driver that runs them on threads, adding in order."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from isthmus.betweenness.engine_numba.kernels_moments import MOMENTS
from isthmus.betweenness.engine_numba.reductions import Reduced
from isthmus.betweenness.engine_numba.subgraphs import Bytes, Floats
from isthmus.errors import SettingsError
from isthmus.graph.arrays import Arrays, Ids

# Work of a block, in arcs and vertices touched per batch of lanes: about an eighth of a second where neighbours are
# near each other, up to a second in a random graph, and Ctrl-C waits for it. It depends on nothing but the graph, so
# the blocks, and with them the bits of the result, are the same for any threads.
BLOCK_WORK = 1_000_000
MOST_LANES = 64
GO_ON = np.zeros(1, np.uint8)  # for blocks that nobody stops


@dataclass(frozen=True)
class Plan:
    """Which sources run together: sources int32[k], weights float64[k], `block_size` of them to a block."""

    sources: Ids
    weights: Floats
    lanes: int
    block_size: int
    max_hops: int = 0

    @property
    def blocks(self) -> int:
        return -(-self.sources.size // self.block_size)

    def block(self, index: int) -> slice:
        """The places in `sources` of one block."""
        return slice(index * self.block_size, min((index + 1) * self.block_size, self.sources.size))


class Partial(NamedTuple):
    """Sums over one block's sources. score, reached: float64[r]; reach: float64[sources of the block]."""

    score: Floats
    reached: Floats
    reach: Floats


def make_plan(reduced: Reduced, *, lanes: int = MOST_LANES, max_hops: int = 0) -> Plan:
    """Every vertex that can be a source, in the order of the numbering, cut in blocks of equal size."""
    graph = reduced.arrays
    sources = np.flatnonzero(np.diff(graph.out_ptr) > 0).astype(np.int32)
    if graph.out_lengths is not None:
        lanes = 1
    return Plan(sources, reduced.source_weight[sources], lanes, block_size(graph, lanes), max_hops)


def block_size(graph: Arrays, lanes: int) -> int:
    """Sources per block, a multiple of the lanes; with lengths, ten for every batch of lanes."""
    batches = BLOCK_WORK // (graph.arcs + 4 * graph.n + 1)
    return max(1, 10 * batches) if graph.out_lengths is not None else lanes * max(1, batches)


def bytes_per_thread(n: int, m: int, lanes: int, weighted: bool = False) -> int:
    """Memory in bytes that one running block takes beside the graph, n vertices and m arcs as reduced.

    Rows of lanes 8 n lanes; three masks 24 n; level starts 8 n; partial sums, of which one may wait to be
    added, 2 x 16 n; records of (level, vertex) 12 bytes each, two per vertex to start with, doubled when a
    batch needs more, which it does the sooner the more lanes it has: 48 n + n lanes, between what social graphs
    and random ones take.
    With lengths: distances, path counts, dependencies 24 n, predecessors and order 8 n, partial sums 32 n; queue
    entries 8 bytes each, one whenever a vertex is found to be nearer than known: 1.45 per vertex on a graph of
    co-authors, so 2 n are counted, or one per arc where that is fewer. The ring of buckets adds up to 17 MB when
    lengths lie far apart; the heap, where it takes over, 4 bytes an entry.
    """
    if weighted:
        return 64 * n + 8 * min(m, 2 * n)
    return (9 * lanes + 112) * n


def run_block(reduced: Reduced, plan: Plan, index: int, stop: Bytes = GO_ON) -> Partial:
    """One block; needs nothing but its arguments, so it may run in any process."""
    graph, place = reduced.arrays, plan.block(index)
    score = np.zeros(graph.n)
    reached = np.zeros(graph.n if reduced.needs_reach else 0)
    reach = sweep(
        graph, plan.sources[place], plan.weights[place], score, reached, np.zeros(0), np.zeros((0, MOMENTS)), stop,
        copies=reduced.copies, targets=reduced.target_weight, lanes=plan.lanes, max_hops=plan.max_hops,
    )  # fmt: skip
    return Partial(score, reached, reach)


def sweep(
    graph: Arrays, sources: Ids, weights: Floats, score: Floats, reached: Floats, unit: Floats, moments: Floats,
    stop: Bytes, *, copies: Floats, targets: Floats, lanes: int, max_hops: int,
) -> Floats:  # fmt: skip
    """The kernel that fits the graph, imported on first use; arguments as in kernels_lanes.lanes_sweep.

    Raises SettingsError when more shortest paths run to a vertex than float64 can count.
    """
    reach = _sweep(
        graph, sources, weights, score, reached, unit, moments, stop,
        copies=copies, targets=targets, lanes=lanes, max_hops=max_hops,
    )  # fmt: skip
    if np.isnan(reach).any():
        raise SettingsError(
            'more than 10^300 shortest paths run between two parties, too many to count; use score.method = "paths" or '
            'score.engine = "networkit"'
        )
    return reach


def _sweep(
    graph: Arrays, sources: Ids, weights: Floats, score: Floats, reached: Floats, unit: Floats, moments: Floats,
    stop: Bytes, *, copies: Floats, targets: Floats, lanes: int, max_hops: int,
) -> Floats:  # fmt: skip
    if graph.out_lengths is not None:
        from isthmus.betweenness.engine_numba.kernels_weighted import weighted_sweep

        return weighted_sweep(
            graph.out_ptr, graph.out_adj, graph.out_lengths, graph.in_ptr, graph.in_adj, graph.in_lengths,
            targets, sources, weights, score, reached, unit, moments, stop,
        )  # fmt: skip
    from isthmus.betweenness.engine_numba.kernels_lanes import lanes_sweep

    return lanes_sweep(
        graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, copies, targets,
        sources, weights, lanes, max_hops, score, reached, unit, moments, stop,
    )  # fmt: skip


def check_lengths(graph: Arrays, max_hops: int) -> None:
    """Raise ValueError where the weighted sweep could not be exact or is not defined."""
    if graph.out_lengths is None or graph.arcs == 0:
        return
    if max_hops:
        raise ValueError(f"max_hops={max_hops} counts arcs and cannot be combined with lengths; set it to 0")
    shortest, longest = int(graph.out_lengths.min()), int(graph.out_lengths.max())
    if shortest < 1:
        raise ValueError(f"lengths must be positive integers; the shortest is {shortest}")
    if longest * (graph.n - 1) >= 2**62:
        raise ValueError(f"the longest length, {longest}, is too long for {graph.n} vertices: scale the lengths down")


@dataclass
class Sums:
    """What the first `done` blocks add up to. score, reached, reach: float64[r]."""

    score: Floats
    reached: Floats
    reach: Floats
    done: int = 0

    @classmethod
    def empty(cls, reduced: Reduced) -> Sums:
        return cls(*np.zeros((3, reduced.arrays.n)))

    def add(self, reduced: Reduced, plan: Plan, part: Partial) -> None:
        """Take the next block."""
        self.score += part.score
        if reduced.needs_reach:
            self.reached += part.reached
            self.reach[plan.sources[plan.block(self.done)]] = part.reach
        self.done += 1


def merge(reduced: Reduced, plan: Plan, parts: Iterable[Partial], sums: Sums | None = None) -> Floats:
    """Betweenness float64[n] in ordered pairs, from every block's partial sums in block order; `sums`: of the first."""
    sums = sums or Sums.empty(reduced)
    for part in parts:
        sums.add(reduced, plan, part)
    return reduced.expand(sums.score, sums.reach, sums.reached)
