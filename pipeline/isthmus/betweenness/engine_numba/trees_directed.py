"""Hanging trees of directed graphs: two weights per vertex, and the pairs that cross."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.betweenness.engine_numba.kernels_structure import peel
from isthmus.betweenness.engine_numba.subgraphs import Flags, Floats, from_arcs, induced
from isthmus.graph.arrays import Arrays, Ids


@dataclass(frozen=True)
class Hanging:
    """Trees taken off a directed graph: weights float64[n] by original vertex, the order of going."""

    sources: Floats  # vertices that reach v from what hangs on it, v included
    targets: Floats  # vertices there that v reaches, v included
    same_branch: Floats  # sum over branches of sources x targets: pairs that never come by v
    order: Ids
    parent: Ids
    up: Flags  # arc from v to its parent
    down: Flags
    holder: Ids  # reduced vertex of an original one, -1 when folded
    class_sources: Floats  # by reduced vertex, of vertices whose copies reach each other, else 0
    class_targets: Floats

    def crossing(self, reach: Floats, reached: Floats) -> Floats:
        """Ordered pairs through v with an end in what hangs on v. reach, reached: without its class."""
        n = self.sources.size
        onward, inward = np.zeros(n), np.zeros(n)
        core = self.holder >= 0
        held = self.holder[core]
        mutual = self.class_sources[held] > 0
        onward[core] = reach[held] + np.where(mutual, self.class_targets[held] - self.targets[core], 0.0)
        inward[core] = reached[held] + np.where(mutual, self.class_sources[held] - self.sources[core], 0.0)
        _reach_of_folded(self.order, self.parent, self.up, self.down, self.sources, self.targets, onward, inward)
        a, t = self.sources - 1, self.targets - 1
        return a * t - self.same_branch + a * onward + inward * t


def fold_directed(graph: Arrays, gains: dict[str, int]) -> tuple[Arrays, Ids, Hanging]:
    n = graph.n
    tail = np.repeat(np.arange(n), np.diff(graph.out_ptr))
    skeleton = from_arcs(
        n, np.concatenate([tail, graph.out_adj]), np.concatenate([graph.out_adj, tail]), None, directed=False
    )
    order, parents = peel(skeleton.out_ptr, skeleton.out_adj)
    gains["folded"] = order.size
    parent = np.full(n, -1, np.int32)
    parent[order] = parents
    up, down = np.zeros(n, bool), np.zeros(n, bool)
    tails_up = parent[tail] == graph.out_adj
    up[tail[tails_up]] = True
    tails_down = parent[graph.out_adj] == tail
    down[graph.out_adj[tails_down]] = True
    sources, targets, same = np.ones(n), np.ones(n), np.zeros(n)
    _weigh_directed_trees(order, parent, up, down, sources, targets, same)
    alive = np.ones(n, bool)
    alive[order] = False
    member = np.flatnonzero(alive).astype(np.int32)
    none = np.empty(0)
    return (
        induced(graph, member),
        member,
        Hanging(sources, targets, same, order, parent, up, down, member, none, none),
    )


@kernel
def _weigh_directed_trees(order, parent, up, down, sources, targets, same):
    for i in range(order.size):
        v = order[i]
        p = parent[v]
        if up[v]:
            sources[p] += sources[v]
        if down[v]:
            targets[p] += targets[v]
        if up[v] and down[v]:
            same[p] += sources[v] * targets[v]


@kernel
def _reach_of_folded(order, parent, up, down, sources, targets, onward, inward):
    """Reach of folded vertices outside their own tree, from their parents', outermost last."""
    for i in range(order.size - 1, -1, -1):
        v = order[i]
        p = parent[v]
        if up[v]:
            onward[v] = onward[p] + targets[p] - (targets[v] if down[v] else 0.0)
        if down[v]:
            inward[v] = inward[p] + sources[p] - (sources[v] if up[v] else 0.0)
