"""Exact reductions of the graph before the sweeps: what structure settles, no source has to walk.

Four steps, each exact, each with a switch:

fold       A vertex with one neighbour hangs on it; so does, after that, a whole tree. The tree is taken off
           and its neighbour carries its vertices as weight (Sariyuce et al. 2013; Puzis et al. 2015).
blocks     Undirected: the graph falls apart at its articulation points. Each biconnected block becomes a
           component of its own, in which an articulation point carries all that lies behind it.
twins      Vertices with the same neighbours, themselves left out (never adjacent) or included (always
           adjacent), become one vertex with copies.
locality   Breadth-first numbering from the busiest vertex, so that consecutive vertices are near each other.

Trees and blocks need only counting: a pair of vertices on two different sides of v passes through v for
certain. With S the component's size, the sides of v and their squares give the ordered pairs (S-1)^2 - sum
side^2.

Directed graphs are folded with two weights, the vertices that can reach v from what hangs on it and those
that v can reach there; the pairs that cross need the reach of v in the rest, which the sweeps return.

fold and blocks keep shortest paths but not their hops, so a hop limit switches them off; twins need every arc
of the same length, so lengths switch them off.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from isthmus.betweenness.engine_numba.subgraphs import Floats, breadth_first, permuted
from isthmus.betweenness.engine_numba.trees import split_undirected
from isthmus.betweenness.engine_numba.trees_directed import Hanging, fold_directed
from isthmus.betweenness.engine_numba.twins import merge_twins, pairs_of_copies, self_adjacent
from isthmus.graph.arrays import Arrays, Ids


@dataclass(frozen=True)
class Reduced:
    """What is left to sweep, and how its scores become scores of the original vertices.

    copies, source_weight, target_weight: float64[r]; weights are totals over the copies.
    member, holder: int32[q]: original vertex `member` gets the score of reduced vertex `holder`.
    settled: float64[n]: ordered pairs that structure alone has counted, by original vertex.
    gains: vertices and arcs taken away by each step.
    """

    arrays: Arrays
    n_original: int
    copies: Floats
    source_weight: Floats
    target_weight: Floats
    member: Ids
    holder: Ids
    settled: Floats
    gains: dict[str, int] = field(default_factory=dict)
    hanging: Hanging | None = None

    @property
    def needs_reach(self) -> bool:
        """Whether `expand` needs the reach of each vertex (a directed graph that has been folded)."""
        return self.hanging is not None

    def expand(self, score: Floats, reach: Floats | None = None, reached: Floats | None = None) -> Floats:
        """Betweenness float64[n] in ordered pairs, from the sweeps' sums float64[r]."""
        total = self.settled + np.bincount(self.member, score[self.holder], self.n_original)
        if self.hanging is not None:
            assert reach is not None
            assert reached is not None
            total += self.hanging.crossing(reach, reached)
        return total


def reduce(
    graph: Arrays,
    *,
    fold: bool = True,
    blocks: bool = True,
    twins: bool = True,
    locality: bool = True,
    max_hops: int = 0,
) -> Reduced:
    """Apply the reductions that are asked for and allowed for this graph (see the module's text)."""
    if max_hops:
        fold = blocks = False
    gains: dict[str, int] = {}
    n = graph.n
    weights_s, weights_t = np.ones(n), np.ones(n)
    settled = np.zeros(n)
    member = np.arange(n, dtype=np.int32)
    hanging = None
    if graph.directed:
        blocks = False
        if fold:
            graph, member, hanging = fold_directed(graph, gains)
            weights_s, weights_t = hanging.sources[member], hanging.targets[member]
    elif fold or blocks:
        graph, member, weights_s, settled = split_undirected(graph, fold, blocks, gains)
        weights_t = weights_s
    holder = np.arange(graph.n, dtype=np.int32)
    copies = np.ones(graph.n)
    mutual = np.zeros(graph.n, bool)
    if twins and graph.out_lengths is None:
        own_s, own_t = weights_s, weights_t
        before = graph
        graph, holder, mutual = merge_twins(graph, gains)
        copies = np.bincount(holder, minlength=graph.n).astype(float)
        weights_s = np.bincount(holder, own_s, graph.n).astype(float)
        weights_t = np.bincount(holder, own_t, graph.n).astype(float)
        if max_hops != 1:
            between = weights_s * weights_t - np.bincount(holder, own_s * own_t, graph.n)
            between[copies < 2] = 0.0
            between[~mutual | self_adjacent(before, holder, graph.n)] = 0.0
            extra = np.zeros(graph.n)
            pairs_of_copies(graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, copies, between, extra)
            settled = settled + np.bincount(member, extra[holder], settled.size)
    if locality:
        order = breadth_first(graph)
        graph = permuted(graph, order)
        place = np.empty(order.size, np.int32)
        place[order] = np.arange(order.size, dtype=np.int32)
        holder = place[holder]
        copies, weights_s, weights_t, mutual = (
            copies[order],
            weights_s[order],
            weights_t[order],
            mutual[order],
        )
    if hanging is not None:
        where = np.full(n, -1, np.int32)
        where[member] = holder
        hanging = Hanging(
            hanging.sources, hanging.targets, hanging.same_branch, hanging.order, hanging.parent, hanging.up,
            hanging.down, where, np.where(mutual, weights_s, 0.0), np.where(mutual, weights_t, 0.0),
        )  # fmt: skip
    return Reduced(graph, n, copies, weights_s, weights_t, member, holder, settled, gains, hanging)
