"""Compressed adjacency (CSR): all that a kernel or a reduction knows of a graph."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Arrays", "Ids", "Ints"]

Ints = NDArray[np.int64]
Ids = NDArray[np.int32]


@dataclass(frozen=True, eq=False, kw_only=True)
class Arrays:
    """Row v of the adjacency, `out_adj[out_ptr[v]:out_ptr[v+1]]`, holds the ids that v leads to.

    Ascending, without v itself and without repeats; out_ptr, in_ptr: int64[n+1]; out_adj, in_adj: int32[arcs].
    `in_ptr`, `in_adj` are the reverse; in an undirected graph every tie stands in both rows and the reverse is the
    same arrays. `out_lengths` and `in_lengths`, int64[arcs], aligned with the adjacency, are positive, or None when
    each arc is one hop.
    """

    directed: bool
    out_ptr: Ints
    out_adj: Ids
    in_ptr: Ints
    in_adj: Ids
    out_lengths: Ints | None = None
    in_lengths: Ints | None = None

    @property
    def n(self) -> int:
        """Number of vertices."""
        return len(self.out_ptr) - 1

    @property
    def arcs(self) -> int:
        """Number of stored arcs; an undirected tie counts twice."""
        return len(self.out_adj)
