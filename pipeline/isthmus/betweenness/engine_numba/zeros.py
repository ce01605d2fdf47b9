"""Vertices whose betweenness is zero for certain."""

from __future__ import annotations

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.betweenness.engine_numba.subgraphs import Flags
from isthmus.graph.arrays import Arrays


def certain_zeros(graph: Arrays) -> Flags:
    """bool[n]: betweenness is exactly zero.

    Unweighted: exactly when every way in and every way out of v (to another vertex) is also joined by an arc
    (Bader et al. 2007). With lengths only the vertices without a way in, a way out, or two neighbours are
    known.
    """
    zero = np.empty(graph.n, bool)
    _zeros(graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, graph.out_lengths is not None, zero)
    return zero


@kernel
def _zeros(out_ptr, out_adj, in_ptr, in_adj, weighted, zero):
    for v in range(out_ptr.size - 1):
        ways_out = out_ptr[v + 1] - out_ptr[v]
        ways_in = in_ptr[v + 1] - in_ptr[v]
        alone = ways_out == 0 or ways_in == 0
        if not alone and ways_out == 1 and ways_in == 1:
            alone = out_adj[out_ptr[v]] == in_adj[in_ptr[v]]
        zero[v] = alone
        if alone or weighted:
            continue
        fits = True
        for j in range(in_ptr[v], in_ptr[v + 1]):  # cheap, and nearly always enough
            u = in_adj[j]
            fits = fits and out_ptr[u + 1] - out_ptr[u] >= ways_out - 1
        j = in_ptr[v]
        while fits and j < in_ptr[v + 1]:
            u = in_adj[j]
            i, end = out_ptr[u], out_ptr[u + 1]
            for k in range(out_ptr[v], out_ptr[v + 1]):
                w = out_adj[k]
                if w == u:
                    continue
                while i < end and out_adj[i] < w:
                    i += 1
                if i == end or out_adj[i] != w:
                    fits = False
                    break
            j += 1
        zero[v] = fits
