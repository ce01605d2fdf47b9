"""How many vertices can reach each vertex, and how many it can reach: what betweenness cannot exceed.

Vertices on a cycle reach the same; they become one vertex of the condensation, which has no cycles. There the
sets are counted with one bit per component where that is cheap. Where it is not, one pass adds up what the
successors reach; what two of them share is then counted twice, so the sums are upper bounds, cut off at the
vertices of the weakly connected component.
"""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from isthmus.betweenness.engine_numba.accelerate import count_bits, kernel, lowest_bit
from isthmus.betweenness.engine_numba.subgraphs import Floats, from_arcs
from isthmus.betweenness.engine_numba.trees import component_sizes
from isthmus.graph.arrays import Arrays, Ids, Ints

__all__ = ["reach_limits"]

# Word operations, each way, that exact counts may cost: about half a second.
CHEAP = 1e9
# Words per component that are worked on at a time: a cache line. Memory is 64 bytes a component.
WIDE = 8
ONE = np.uint64(1)


def reach_limits(graph: Arrays) -> tuple[Floats, Floats]:
    """Upper bounds on how many others can reach v, and how many others v can reach: float64[n] twice.

    Exact when undirected, and when that is cheap (see `CHEAP`).
    """
    if not graph.directed:
        others = component_sizes(graph) - 1.0
        return others, others
    arcs = csr_array((np.ones(graph.arcs, np.int8), graph.out_adj, graph.out_ptr), shape=(graph.n, graph.n))
    count, label = connected_components(arcs, connection="strong")
    tail, tip = np.repeat(label, np.diff(graph.out_ptr)), label[graph.out_adj]
    between = tail != tip
    tail, tip = tail[between], tip[between]
    condensed = from_arcs(count, tail, tip, None, directed=True)
    members = np.bincount(label, minlength=count)
    links = csr_array((np.ones(condensed.arcs, np.int8), condensed.out_adj, condensed.out_ptr), shape=(count, count))
    _, weak = connected_components(links, connection="weak")
    most = np.bincount(weak, members)[weak]
    order = topological_order(condensed.out_ptr, condensed.out_adj, condensed.in_ptr)
    after = _reached(condensed.out_ptr, condensed.out_adj, order, members, most)
    before = _reached(condensed.in_ptr, condensed.in_adj, order[::-1].copy(), members, most)
    return before[label] - 1.0, after[label] - 1.0


def _reached(ptr: Ints, adj: Ids, order: Ids, members: Ints, most: Floats) -> Floats:
    """Vertices of each component and of those that it reaches, or a bound; arcs lead to later ones in `order`."""
    count = members.size
    # each component's words are put together and counted, then searched for components of several vertices
    work = (adj.size + count) * (count / 64) + count * np.count_nonzero(members > 1)
    if work > CHEAP:
        return bound_reached(ptr, adj, order, members, most)
    place = np.empty(count, np.int32)
    place[order] = np.arange(count, dtype=np.int32)
    return count_reached(ptr, place[adj], order, members)


@kernel
def topological_order(out_ptr, out_adj, in_ptr):
    """The vertices of a graph without cycles, int32[n], each behind all that lead to it (Kahn 1962)."""
    n = out_ptr.size - 1
    order = np.empty(n, np.int32)
    waits = np.empty(n, np.int64)
    last = 0
    for v in range(n):
        waits[v] = in_ptr[v + 1] - in_ptr[v]
        if waits[v] == 0:
            order[last] = v
            last += 1
    for i in range(n):
        v = order[i]
        for j in range(out_ptr[v], out_ptr[v + 1]):
            w = out_adj[j]
            waits[w] -= 1
            if waits[w] == 0:
                order[last] = w
                last += 1
    return order


@kernel
def count_reached(ptr, later, order, members):
    """Exactly, by sets of bits, WIDE words at a time: float64[components]. later: the arcs' ends as places in `order`.

    Components of a slab, 64 WIDE in the order, are reached from earlier ones and from themselves only.
    """
    n = order.size
    slab = 64 * WIDE
    reached = np.zeros(n)
    sets = np.zeros((n, WIDE), np.uint64)
    several = np.zeros((n // slab + 1) * WIDE, np.uint64)  # components of more than one vertex
    for i in range(n):
        if members[order[i]] > 1:
            several[i // 64] |= ONE << np.uint64(i % 64)
    for first in range(0, n, slab):
        end = min(n, first + slab)
        for i in range(end - 1, -1, -1):
            v = order[i]
            for k in range(WIDE):
                sets[i, k] = 0
            if i >= first:
                sets[i, (i - first) // 64] = ONE << np.uint64(i % 64)
            for j in range(ptr[v], ptr[v + 1]):
                w = later[j]
                if w < end:
                    for k in range(WIDE):
                        sets[i, k] |= sets[w, k]
            total = 0
            for k in range(WIDE):
                word = sets[i, k]
                total += count_bits(word)
                word &= several[first // 64 + k]
                while word:
                    total += members[order[first + 64 * k + lowest_bit(word)]] - 1
                    word &= word - ONE
            reached[v] += total
    return reached


@kernel
def bound_reached(ptr, adj, order, members, most):
    """In one pass, float64[components]: at most the sum over the successors, and never more than `most`."""
    reached = np.empty(order.size)
    for i in range(order.size - 1, -1, -1):
        v = order[i]
        total = np.float64(members[v])
        for j in range(ptr[v], ptr[v + 1]):
            total += reached[adj[j]]
        reached[v] = min(total, most[v])
    return reached
