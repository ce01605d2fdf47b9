"""Twins: vertices with the same neighbours become one vertex with copies."""

from __future__ import annotations

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.betweenness.engine_numba.subgraphs import Flags, induced
from isthmus.graph.arrays import Arrays, Ids


def merge_twins(graph: Arrays, gains: dict[str, int]) -> tuple[Arrays, Ids, Flags]:
    """One vertex per class; each vertex's class; whether the copies of a class reach each other."""
    n = graph.n
    # Sums of random words find the candidates; their rows are then compared, so chance decides nothing.
    word = np.random.default_rng(0).integers(0, 2**63, (2, n), dtype=np.uint64)
    open_key, closed_key = np.zeros(n, np.uint64), np.zeros(n, np.uint64)
    _neighbourhood_keys(
        graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, word[0], word[1], open_key, closed_key
    )
    leader = np.arange(n, dtype=np.int32)
    mutual = np.zeros(n, bool)
    for key, closed in ((open_key, False), (closed_key, True)):
        order = np.argsort(key, kind="stable").astype(np.int32)
        _find_twins(
            order,
            key,
            closed,
            graph.out_ptr,
            graph.out_adj,
            graph.in_ptr,
            graph.in_adj,
            graph.directed,
            leader,
            mutual,
        )
    lead, holder = np.unique(leader, return_inverse=True)
    merged = induced(graph, lead.astype(np.int32))
    gains["twins_merged"] = n - lead.size
    gains["twin_arcs"] = graph.arcs - merged.arcs
    return merged, holder.astype(np.int32), mutual[lead]


@kernel
def _neighbourhood_keys(out_ptr, out_adj, in_ptr, in_adj, word_out, word_in, open_key, closed_key):
    for v in range(out_ptr.size - 1):
        key = np.uint64(0)
        for j in range(out_ptr[v], out_ptr[v + 1]):
            key ^= word_out[out_adj[j]]
        for j in range(in_ptr[v], in_ptr[v + 1]):
            key ^= word_in[in_adj[j]]
        open_key[v] = key
        closed_key[v] = key ^ word_out[v] ^ word_in[v]


@kernel
def _same_row(ptr, adj, u, v, closed):
    """Whether u and v have the same sorted row; closed: the same row once each is added to its own."""
    if ptr[u + 1] - ptr[u] != ptr[v + 1] - ptr[v]:
        return False
    i, j, met = ptr[u], ptr[v], 0
    end_i, end_j = ptr[u + 1], ptr[v + 1]
    while True:
        while closed and i < end_i and adj[i] == v:
            i += 1
            met += 1
        while closed and j < end_j and adj[j] == u:
            j += 1
            met += 1
        if i == end_i or j == end_j:
            return i == end_i and j == end_j and (met == 2 or not closed)
        if adj[i] != adj[j]:
            return False
        i += 1
        j += 1


@kernel
def _find_twins(order, key, closed, out_ptr, out_adj, in_ptr, in_adj, directed, leader, mutual):
    """Write each twin's leader: the first of its class."""
    first = 0
    for i in range(order.size):
        v = order[i]
        if i == 0 or key[order[first]] != key[v]:
            first = i
            continue
        u = order[first]
        if out_ptr[u + 1] == out_ptr[u] and in_ptr[u + 1] == in_ptr[u]:
            continue
        if not _same_row(out_ptr, out_adj, u, v, closed) or not _same_row(in_ptr, in_adj, u, v, closed):
            continue
        meet = closed or not directed
        if not meet:
            # One neighbour both ways makes copies reach each other in two steps, a missing side never;
            # otherwise the way from copy to copy is longer than the counting here knows.
            a, b = out_ptr[u], in_ptr[u]
            while a < out_ptr[u + 1] and b < in_ptr[u + 1] and not meet:
                meet = out_adj[a] == in_adj[b]
                if out_adj[a] < in_adj[b]:
                    a += 1
                else:
                    b += 1
            if not meet and out_ptr[u + 1] > out_ptr[u] and in_ptr[u + 1] > in_ptr[u]:
                continue
        leader[v] = u
        mutual[u] = meet


def self_adjacent(graph: Arrays, holder: Ids, classes: int) -> Flags:
    """Classes whose copies are each other's neighbours."""
    tail = np.repeat(holder, np.diff(graph.out_ptr))
    return np.bincount(tail[tail == holder[graph.out_adj]], minlength=classes) > 0


@kernel
def pairs_of_copies(out_ptr, out_adj, in_ptr, in_adj, copies, between, extra):
    """Pairs of copies of one class, at distance two, shared out among the neighbours that join them."""
    for v in range(out_ptr.size - 1):
        if between[v] == 0.0:
            continue
        for counting in (True, False):
            if counting:
                joins = 0.0
            a, b = out_ptr[v], in_ptr[v]
            while a < out_ptr[v + 1] and b < in_ptr[v + 1]:
                if out_adj[a] == in_adj[b]:
                    if counting:
                        joins += copies[out_adj[a]]
                    else:
                        extra[out_adj[a]] += between[v] / joins
                    a += 1
                    b += 1
                elif out_adj[a] < in_adj[b]:
                    a += 1
                else:
                    b += 1
