"""Core numbers by NetworKit. The only file of the room that imports it.

They are whole numbers found on one thread, so neither the number of threads nor any order of adding matters.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

__all__ = ["core_numbers"]


def core_numbers(pattern: sparse.csr_array) -> NDArray[np.int64]:
    """Largest k such that the vertex belongs to a subgraph in which all have k neighbours or more. Shape (n,).

    `pattern`: symmetric, no diagonal; values are not looked at. Seidman 1983, found with
    buckets after Batagelj and Zaversnik 2003.
    """
    import networkit as nk

    if not pattern.nnz:
        return np.zeros(pattern.shape[0], np.int64)
    # buckets: one thread
    cores = nk.centrality.CoreDecomposition(_convert(pattern), enforceBucketQueueAlgorithm=True).run()
    return np.asarray(cores.scores()).astype(np.int64)


def _convert(pattern: sparse.csr_array) -> object:
    import networkit as nk

    tail = np.repeat(np.arange(pattern.shape[0], dtype=np.uint64), np.diff(pattern.indptr))
    head = pattern.indices.astype(np.uint64)
    once = tail < head  # the library adds the other direction itself
    return nk.GraphFromCoo((np.ones(int(once.sum())), (tail[once], head[once])), n=pattern.shape[0], weighted=False)
