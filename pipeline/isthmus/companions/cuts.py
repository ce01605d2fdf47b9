"""Articulation points: parties without whom their component falls apart.

Not NetworKit's, whose search is recursive: on 200,000 parties it overran the stack and took the process with it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.csgraph import breadth_first_order, connected_components

__all__ = ["articulation_points"]

Ints = NDArray[np.int64]


def articulation_points(pattern: sparse.csr_array) -> NDArray[np.bool_]:
    """Whether the party lies in two biconnected components or more. Shape (n,).

    `pattern`: symmetric, no diagonal; values are not looked at. Tarjan and Vishkin 1985 on a breadth-first forest.
    Every party but a root stands for the tie to its parent; two such ties that lie on a common cycle are joined, and
    what hangs together then is a biconnected component. In a breadth-first tree no other tie joins a party and its
    ancestor, so every tie outside the forest joins its two ends' ties. One loop over levels, none over parties.
    """
    n = pattern.shape[0]
    parent, levels = _forest(pattern)
    before, size = _numbered(parent, levels)
    tail, head = np.repeat(np.arange(n), np.diff(pattern.indptr)), pattern.indices.astype(np.int64)
    outside = (parent[tail] != head) & (parent[head] != tail)
    tail, head = tail[outside], head[outside]
    # the first and the last party, in preorder, that a party's subtree is tied to by a tie outside the forest
    low, high = before.copy(), before.copy()
    np.minimum.at(low, tail, before[head])
    np.maximum.at(high, tail, before[head])
    for level in reversed(levels[1:]):
        np.minimum.at(low, parent[level], low[level])
        np.maximum.at(high, parent[level], high[level])
    child = np.flatnonzero(parent >= 0)
    above = parent[child]
    # a subtree with a tie that leaves the parent's own subtree: its tie and the parent's lie on a cycle
    leaves = (parent[above] >= 0) & ((low[child] < before[above]) | (high[child] >= before[above] + size[above]))
    ends = np.concatenate((tail, child[leaves])), np.concatenate((head, above[leaves]))
    joined = sparse.coo_array((np.ones(len(ends[0]), np.int8), ends), shape=(n, n)).tocsr()
    _, block = connected_components(joined, directed=False)
    # the blocks of a party: its own tie's, and its children's
    first = np.where(parent >= 0, block, n)
    last = np.where(parent >= 0, block, -1)
    np.minimum.at(first, above, block[child])
    np.maximum.at(last, above, block[child])
    apart: NDArray[np.bool_] = first < last
    return apart


def _forest(pattern: sparse.csr_array) -> tuple[Ints, list[Ints]]:
    """Each party's parent (-1: a root), shape (n,), and the parties of each level, children of one parent in a row."""
    n = pattern.shape[0]
    _, label = connected_components(pattern, directed=False)
    _, roots = np.unique(label, return_index=True)
    # an extra party n is tied to one of each component, so that one search reaches all
    ptr = np.append(pattern.indptr, pattern.nnz + len(roots))
    adjacency = np.concatenate((pattern.indices, roots)).astype(np.int32)
    extended = sparse.csr_array((np.ones(len(adjacency), np.int8), adjacency, ptr), shape=(n + 1, n + 1))
    order, parent = breadth_first_order(extended, n, directed=True)
    place = np.empty(n + 1, np.int64)
    place[order] = np.arange(n + 1)
    # places of parents ascend along the order, so a level ends where those of the next begin
    places = place[parent[order[1:]]]
    levels, start = [], 1
    while start <= n:
        # children of those placed before `start`
        stop = 1 + int(np.searchsorted(places, start))
        levels.append(order[start:stop].astype(np.int64))
        start = stop
    above = parent[:n].astype(np.int64)
    above[roots] = -1
    return above, levels


def _numbered(parent: Ints, levels: list[Ints]) -> tuple[Ints, Ints]:
    """Numbers in preorder, and the size of each subtree. Shapes (n,), (n,)."""
    size = np.ones(len(parent), np.int64)
    for level in reversed(levels[1:]):
        np.add.at(size, parent[level], size[level])
    before = np.empty(len(parent), np.int64)
    for depth, level in enumerate(levels):
        earlier = np.cumsum(size[level]) - size[level]
        if not depth:
            before[level] = earlier
            continue
        above = parent[level]
        new = np.concatenate(([True], above[1:] != above[:-1]))
        before[level] = before[above] + 1 + earlier - earlier[new][np.cumsum(new) - 1]
    return before, size
