"""Graphs made from graphs: parts, renumberings, and the order in which neighbours are near each other."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.graph.arrays import Arrays, Ids, Ints

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Bytes = NDArray[np.uint8]


def from_arcs(n: int, tail: NDArray[Any], tip: NDArray[Any], lengths: Ints | None, *, directed: bool) -> Arrays:
    """Compressed adjacency of arcs; undirected ties are given both ways; repeated arcs count once."""
    data = np.ones(tail.size, np.int8) if lengths is None else lengths
    if lengths is None:
        matrix = csr_array((data, (tail, tip)), shape=(n, n))
        matrix.sum_duplicates()
    else:
        matrix = csr_array((data, (tail, tip)), shape=(n, n))
    matrix.sort_indices()
    return _from_matrix(matrix, directed, lengths is not None)


def _from_matrix(matrix: csr_array, directed: bool, weighted: bool) -> Arrays:
    reverse = matrix
    if directed:
        reverse = matrix.T.tocsr()
        reverse.sort_indices()
    ptr, adj = matrix.indptr.astype(np.int64), matrix.indices.astype(np.int32)
    in_ptr, in_adj = (reverse.indptr.astype(np.int64), reverse.indices.astype(np.int32)) if directed else (ptr, adj)
    lengths = matrix.data.astype(np.int64) if weighted else None
    in_lengths = reverse.data.astype(np.int64) if weighted and directed else lengths
    return Arrays(
        directed=directed,
        out_ptr=ptr,
        out_adj=adj,
        in_ptr=in_ptr,
        in_adj=in_adj,
        out_lengths=lengths,
        in_lengths=in_lengths,
    )


def induced(graph: Arrays, vertices: Ids) -> Arrays:
    """The graph among these vertices, numbered in the order given."""
    place = np.full(graph.n, -1, np.int64)
    place[vertices] = np.arange(vertices.size)
    tail = place[np.repeat(np.arange(graph.n), np.diff(graph.out_ptr))]
    tip = place[graph.out_adj]
    keep = (tail >= 0) & (tip >= 0)
    lengths = None if graph.out_lengths is None else graph.out_lengths[keep]
    return from_arcs(vertices.size, tail[keep], tip[keep], lengths, directed=graph.directed)


permuted = induced  # the same work, when every vertex is named


def breadth_first(graph: Arrays) -> Ids:
    """Every vertex, breadth first along arcs either way, from the busiest of those not yet numbered."""
    busy = np.diff(graph.out_ptr) + np.diff(graph.in_ptr)
    starts = np.argsort(-busy, kind="stable").astype(np.int32)
    return _breadth_first(graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, starts, graph.directed)


@kernel
def _breadth_first(out_ptr, out_adj, in_ptr, in_adj, starts, directed):
    n = starts.size
    order = np.empty(n, np.int32)
    seen = np.zeros(n, np.bool_)
    last, done = 0, 0
    for s in starts:
        if not seen[s]:
            seen[s] = True
            order[last] = s
            last += 1
        while done < last:
            v = order[done]
            done += 1
            for j in range(out_ptr[v], out_ptr[v + 1]):
                w = out_adj[j]
                if not seen[w]:
                    seen[w] = True
                    order[last] = w
                    last += 1
            if directed:
                for j in range(in_ptr[v], in_ptr[v + 1]):
                    w = in_adj[j]
                    if not seen[w]:
                        seen[w] = True
                        order[last] = w
                        last += 1
    return order
