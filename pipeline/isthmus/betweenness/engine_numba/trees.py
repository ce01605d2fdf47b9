"""Hanging trees and blocks of undirected graphs: what lies behind a vertex needs counting, not walking."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.betweenness.engine_numba.subgraphs import Flags, Floats, from_arcs, induced
from isthmus.graph.arrays import Arrays, Ids, Ints


def split_undirected(
    graph: Arrays, fold: bool, blocks: bool, gains: dict[str, int]
) -> tuple[Arrays, Ids, Floats, Floats]:
    """The core, cut in blocks; its original vertices, their weights, and the pairs that cross."""
    n = graph.n
    below = np.ones(n)  # vertices on v's side: v and what was taken off
    squares = np.zeros(n)  # of the sides taken off
    alive = np.ones(n, bool)
    size = _component_sizes(graph)
    if fold:
        order, parent = peel(graph.out_ptr, graph.out_adj)
        alive[order] = False
        _weigh_trees(order, parent, below, squares)
        gains["folded"] = order.size
    degree = _living_degree(graph, alive)
    core = alive & (degree > 0)
    member = np.flatnonzero(core).astype(np.int32)
    inner = induced(graph, member)
    if not blocks:
        settled = (size - 1.0) ** 2 - squares - (size - below) ** 2
        return inner, member, below[member], settled
    own, inner_squares = below[member], squares[member]
    pieces = _blocks(inner.out_ptr, inner.out_adj, own, inner_squares, size[member])
    vertex, head_place, place, block_of, weight = pieces
    below[member], squares[member] = own, inner_squares
    settled = (size - 1.0) ** 2 - squares - (size - below) ** 2

    # Every tie lies in the block of which one of its ends is an ordinary vertex (not the head).
    tail = np.repeat(np.arange(inner.n, dtype=np.int32), np.diff(inner.out_ptr))
    tip = inner.out_adj
    head_of = np.full(head_place.size + 1, -1, np.int32)
    head_of[:-1] = vertex[head_place]
    of_tail, of_tip = block_of[tail], block_of[tip]
    block = np.where((of_tail >= 0) & ((of_tail == of_tip) | (head_of[of_tail] == tip)), of_tail, of_tip)
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


def roots(graph: Arrays) -> Ids:
    """int32[n]: the vertex that is left of the tree that v hangs in, v itself when it hangs in none."""
    order, parent = peel(graph.out_ptr, graph.out_adj)
    root = np.arange(graph.n, dtype=np.int32)
    root[order] = parent
    while not np.array_equal(root, further := root[root]):  # twice as far up each time
        root = further
    return root


def _component_sizes(graph: Arrays) -> Floats:
    data = np.ones(graph.arcs, np.int8)
    count, label = connected_components(csr_array((data, graph.out_adj, graph.out_ptr), shape=(graph.n, graph.n)))
    return np.bincount(label, minlength=count)[label].astype(float)


def _living_degree(graph: Arrays, alive: Flags) -> Ints:
    tail = np.repeat(np.arange(graph.n), np.diff(graph.out_ptr))
    return np.bincount(tail[alive[graph.out_adj]], minlength=graph.n)


@kernel
def peel(ptr, adj):
    """Vertices of hanging trees in the order they come off, and what each hung on: int32[f] twice."""
    n = ptr.size - 1
    degree = np.empty(n, np.int64)
    order = np.empty(n, np.int32)
    parent = np.empty(n, np.int32)
    gone = np.zeros(n, np.bool_)
    last = 0
    for v in range(n):
        degree[v] = ptr[v + 1] - ptr[v]
        if degree[v] == 1:
            order[last] = v
            last += 1
    done, kept = 0, 0
    while done < last:
        v = order[done]
        done += 1
        if degree[v] != 1:  # the last vertex of a tree: its only neighbour hung on it
            continue
        gone[v] = True
        for j in range(ptr[v], ptr[v + 1]):
            p = adj[j]
            if not gone[p]:
                order[kept] = v
                parent[kept] = p
                kept += 1
                degree[p] -= 1
                degree[v] = 0
                if degree[p] == 1:
                    order[last] = p
                    last += 1
    return order[:kept].copy(), parent[:kept].copy()


@kernel
def _weigh_trees(order, parent, below, squares):
    for i in range(order.size):
        v, p = order[i], parent[i]
        below[p] += below[v]
        squares[p] += below[v] * below[v]


@kernel
def _blocks(ptr, adj, below, squares, size):
    """Biconnected components (Hopcroft and Tarjan 1973) and what lies behind their vertices.

    below, squares: float64[n], grow by the sides that hang on a block's head. size: float64[n], of the
    component. Returns vertex int32[q], the blocks' vertices one block after another, its head last;
    head_place int64[b], place int64[n] and block int64[n], of a vertex as an ordinary member, -1 for a root;
    weight float64[q].
    """
    n = ptr.size - 1
    capacity = 2 * n  # a forest of blocks: each has a head and at least one ordinary vertex, ordinary only once
    vertex = np.empty(capacity, np.int32)
    weight = np.empty(capacity)
    head_place = np.empty(n, np.int64)
    place = np.full(n, -1, np.int64)
    block = np.full(n, -1, np.int64)
    entry = np.zeros(n, np.int64)
    low = np.zeros(n, np.int64)
    parent = np.full(n, -1, np.int64)
    cursor = ptr[:-1].copy()
    path = np.empty(n, np.int64)
    waiting = np.empty(n, np.int64)
    clock, filled, found, waits = 0, 0, 0, 0
    for root in range(n):
        if entry[root] > 0:
            continue
        clock += 1
        entry[root] = low[root] = clock
        path[0] = root
        deep = 1
        while deep > 0:
            v = path[deep - 1]
            if cursor[v] < ptr[v + 1]:
                w = adj[cursor[v]]
                cursor[v] += 1
                if entry[w] == 0:
                    clock += 1
                    entry[w] = low[w] = clock
                    parent[w] = v
                    path[deep] = w
                    deep += 1
                    waiting[waits] = w
                    waits += 1
                elif w != parent[v] and entry[w] < low[v]:
                    low[v] = entry[w]
                continue
            deep -= 1
            if deep == 0:
                continue
            p = path[deep - 1]
            low[p] = min(low[p], low[v])
            if low[v] < entry[p]:
                continue
            side = 0.0  # p is the head of a block that ends with v
            w = -1
            while w != v:
                waits -= 1
                w = waiting[waits]
                vertex[filled] = w
                weight[filled] = below[w]
                place[w] = filled
                block[w] = found
                side += below[w]
                filled += 1
            vertex[filled] = p
            weight[filled] = size[p] - side
            head_place[found] = filled
            below[p] += side
            squares[p] += side * side
            filled += 1
            found += 1
    return vertex[:filled].copy(), head_place[:found].copy(), place, block, weight[:filled].copy()
