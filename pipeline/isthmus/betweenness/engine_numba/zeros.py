"""Vertices whose betweenness is zero for certain."""

from __future__ import annotations

import numpy as np

from isthmus.betweenness.engine_numba.kernels_structure import bypassed
from isthmus.betweenness.engine_numba.subgraphs import Flags
from isthmus.graph.arrays import Arrays


def certain_zeros(graph: Arrays) -> Flags:
    """bool[n]: betweenness is exactly zero.

    Unweighted: exactly when every way in and every way out of v (to another vertex) is also joined by an arc
    (Bader et al. 2007). With lengths only the vertices without a way in, a way out, or two neighbours are
    known.
    """
    if graph.out_lengths is None:
        one_block, no_head = np.zeros(graph.n, np.int32), np.full(graph.n, -1, np.int32)
        return bypassed(graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, one_block, no_head)
    ways_out, ways_in = np.diff(graph.out_ptr), np.diff(graph.in_ptr)
    zero = (ways_out == 0) | (ways_in == 0)
    single = (ways_out == 1) & (ways_in == 1)
    zero[single] = graph.out_adj[graph.out_ptr[:-1][single]] == graph.in_adj[graph.in_ptr[:-1][single]]
    return zero
