"""Hanging trees and blocks of undirected graphs: what lies behind a vertex needs counting, not walking."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from isthmus.betweenness.engine_numba.kernels_structure import blocks as find_blocks
from isthmus.betweenness.engine_numba.kernels_structure import peel, weigh_trees
from isthmus.betweenness.engine_numba.subgraphs import Flags, Floats, from_arcs, induced
from isthmus.graph.arrays import Arrays, Ids, Ints

__all__ = ["component_sizes", "pairs_apart", "peel", "split_undirected"]


def split_undirected(
    graph: Arrays, fold: bool, blocks: bool, gains: dict[str, int]
) -> tuple[Arrays, Ids, Floats, Floats]:
    """The core, cut in blocks; its original vertices, their weights, and the pairs that cross."""
    n = graph.n
    below = np.ones(n)  # vertices on v's side: v and what was taken off
    squares = np.zeros(n)  # of the sides taken off
    alive = np.ones(n, bool)
    size = component_sizes(graph)
    if fold:
        order, parent = peel(graph.out_ptr, graph.out_adj)
        alive[order] = False
        weigh_trees(order, parent, below, squares)
        gains["folded"] = order.size
    degree = _living_degree(graph, alive)
    core = alive & (degree > 0)
    member = np.flatnonzero(core).astype(np.int32)
    inner = induced(graph, member)
    if not blocks:
        return inner, member, below[member], pairs_apart(size, below, squares)
    own, inner_squares = below[member], squares[member]
    vertex, head_place, home, entry = find_blocks(inner.out_ptr, inner.out_adj, own, inner_squares, size[member])
    below[member], squares[member] = own, inner_squares
    settled = pairs_apart(size, below, squares)
    # A vertex carries what lies behind it, seen from its block: the head all but the block's ordinary vertices.
    ordinary_place = np.delete(np.arange(vertex.size), head_place)
    ordinary = vertex[ordinary_place]
    place = np.empty(inner.n, np.int64)
    place[ordinary] = ordinary_place
    weight = own[vertex]
    side = np.bincount(home[ordinary], own[ordinary], head_place.size)
    weight[head_place] = size[member[vertex[head_place]]] - side

    # Every tie lies in the block of which one of its ends is an ordinary vertex (not the head).
    tail = np.repeat(np.arange(inner.n, dtype=np.int32), np.diff(inner.out_ptr))
    tip = inner.out_adj
    of_tail, of_tip = home[tail], home[tip]
    block = np.where((of_tail == of_tip) | (entry[tail] == tip), of_tail, of_tip)
    new_tail = np.where(of_tail == block, place[tail], head_place[block])
    new_tip = np.where(of_tip == block, place[tip], head_place[block])
    # A block in which everybody knows everybody has nobody in between, unless a detour can be shorter.
    ties = np.bincount(block, minlength=head_place.size)
    block_start = np.concatenate([[0], head_place + 1])
    order_of = np.diff(block_start)
    keep_block = (ties < order_of * (order_of - 1)) | ((order_of > 2) & (inner.out_lengths is not None))
    keep = keep_block[block]
    keep_vertex = np.repeat(keep_block, order_of)
    place_kept = np.cumsum(keep_vertex) - 1
    lengths = None if inner.out_lengths is None else inner.out_lengths[keep]
    split = from_arcs(
        int(keep_vertex.sum()), place_kept[new_tail[keep]], place_kept[new_tip[keep]], lengths, directed=False
    )
    gains["blocks"] = int(keep_block.sum())
    gains["blocks_settled"] = int((~keep_block).sum())
    return split, member[vertex[keep_vertex]], weight[keep_vertex], settled


def pairs_apart(size: Floats, below: Floats, squares: Floats) -> Floats:
    """Ordered pairs of others on two different sides of v, float64[n]: every path between them passes v.

    size: of v's component; below: v and what was taken off it; squares: of the sides taken off; the last side
    is the rest of the component.
    """
    return (size - 1.0) ** 2 - squares - (size - below) ** 2


def component_sizes(graph: Arrays) -> Floats:
    """Vertices of v's component, v included, float64[n]; directed: of its weakly connected component."""
    data = np.ones(graph.arcs, np.int8)
    count, label = connected_components(csr_array((data, graph.out_adj, graph.out_ptr), shape=(graph.n, graph.n)))
    return np.bincount(label, minlength=count)[label].astype(float)


def _living_degree(graph: Arrays, alive: Flags) -> Ints:
    tail = np.repeat(np.arange(graph.n), np.diff(graph.out_ptr))
    return np.bincount(tail[alive[graph.out_adj]], minlength=graph.n)
