"""Compiled loops that find what the structure of a graph settles: hanging trees, blocks, needless vertices.

Hopcroft, Tarjan (1973), Algorithm 447 (biconnected components); Puzis et al. (2015) and Sariyuce et al.
(2013) use the same facts to speed up exact betweenness.
"""

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel
from isthmus.betweenness.engine_numba.kernels_paths import among, block_of


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
def weigh_trees(order, parent, below, squares):
    """Add each vertex that `peel` took off, and all that hangs on it, to what it hung on."""
    for i in range(order.size):
        v, p = order[i], parent[i]
        below[p] += below[v]
        squares[p] += below[v] * below[v]


@kernel
def anchor_trees(order, parent, anchor):
    """anchor[v] = where v's tree hangs, for each vertex that `peel` took off; the others stand for themselves."""
    for i in range(order.size - 1, -1, -1):  # outermost last: what v hung on is settled before v
        anchor[order[i]] = anchor[parent[i]]


@kernel
def blocks(ptr, adj, below, squares, size):
    """Biconnected blocks by depth-first search from the lowest vertex of each component.

    A block's head is the vertex where the search entered it; all others are its ordinary vertices, and a
    vertex is ordinary in one block only. below, squares: float64[n], grow by the sides that hang on v as a head
    and by their squares; size: float64[n], of v's component.

    Returns vertex int32[q], the blocks' vertices one block after another, its head last; head_place int64[b],
    where in it the heads are; home int32[n], the block of v as an ordinary vertex, and entry int32[n], that
    block's head; both -1 at a root. The block of an edge: `kernels_paths.block_of`.
    """
    n = ptr.size - 1
    vertex = np.empty(2 * n, np.int32)  # each block has one head and at least one ordinary vertex
    head_place = np.empty(n, np.int64)
    home = np.full(n, -1, np.int32)
    entry = np.full(n, -1, np.int32)
    found = np.zeros(n, np.int32)  # order of discovery, from 1
    low = np.zeros(n, np.int32)
    above = np.full(n, -1, np.int32)
    cursor = ptr[:-1].copy()
    path = np.empty(n, np.int32)
    waiting = np.empty(n, np.int32)  # discovered, block not closed yet
    clock, filled, closed, waits = 0, 0, 0, 0
    for root in range(n):
        if found[root] > 0:
            continue
        clock += 1
        found[root] = low[root] = clock
        path[0] = root
        deep = 1
        while deep > 0:
            v = path[deep - 1]
            if cursor[v] < ptr[v + 1]:
                w = adj[cursor[v]]
                cursor[v] += 1
                if found[w] == 0:
                    clock += 1
                    found[w] = low[w] = clock
                    above[w] = v
                    path[deep] = w
                    deep += 1
                    waiting[waits] = w
                    waits += 1
                elif w != above[v]:
                    low[v] = min(low[v], found[w])
                continue
            deep -= 1
            if deep == 0:
                continue
            p = path[deep - 1]
            low[p] = min(low[p], low[v])
            if low[v] < found[p]:
                continue
            side = 0.0  # p separates v's branch from the rest: a block is complete
            while True:
                waits -= 1
                w = waiting[waits]
                home[w] = closed
                entry[w] = p
                side += below[w]
                vertex[filled] = w
                filled += 1
                if w == v:
                    break
            below[p] += side
            squares[p] += side * side
            vertex[filled] = p
            head_place[closed] = filled
            filled += 1
            closed += 1
    return vertex[:filled].copy(), head_place[:closed].copy(), home, entry


@kernel
def bypassed(out_ptr, out_adj, in_ptr, in_adj, home, entry):
    """bool[n], where v is never needed: its neighbours in each block reach each other directly.

    With one block for all (home = 0, entry = -1) this is: v lies inside no shortest path at all (Bader et al.
    2007). Neighbours in different blocks of an undirected graph are never joined, so it is enough to count, for
    each way in, the ways out that are joined to it. The shorter row is walked, and no
    further than hope lasts.
    """
    n = home.size
    zero = np.ones(n, np.bool_)
    before = np.full(n, -1, np.int32)  # before[t] == v: v leads to t
    ways = np.zeros(n, np.int32)  # by block: arcs from v
    for v in range(n):
        begin, end = out_ptr[v], out_ptr[v + 1]
        for b in range(begin, end):
            before[out_adj[b]] = v
            ways[block_of(v, out_adj[b], home, entry)] += 1
        for a in range(in_ptr[v], in_ptr[v + 1]):
            s = in_adj[a]
            low, high = out_ptr[s], out_ptr[s + 1]
            missing = ways[block_of(s, v, home, entry)]
            if before[s] == v:
                missing -= 1
            if high - low < end - begin:
                while 0 < missing <= high - low:
                    if before[out_adj[low]] == v:
                        missing -= 1
                    low += 1
            else:
                b = begin
                while 0 < missing <= end - b:
                    if among(out_adj, low, high, out_adj[b]):
                        missing -= 1
                    b += 1
            if missing > 0:
                zero[v] = False
                break
        for b in range(begin, end):
            ways[block_of(v, out_adj[b], home, entry)] = 0
    return zero


@kernel
def renumber(old_ptr, old_adj, new, old, aside, rows, adj):
    """The searched rows: row new[v] holds new[w] for each arc v -> w with new[w] >= 0, `aside` ones last.

    new: int32[n], -1 = not searched; old: int32[searched], its inverse; aside: bool[searched]. rows:
    int64[searched + 1, 2]; begin of the row and end of its searched part (the row itself ends where the next
    begins). adj: int32[at least the arcs kept]. Returns the number of arcs kept.
    """
    size = old.size
    kept = 0
    for v in range(size):
        rows[v, 0] = kept
        for late in range(2):
            start = kept
            for a in range(old_ptr[old[v]], old_ptr[old[v] + 1]):
                w = new[old_adj[a]]
                if w >= 0 and aside[w] == (late == 1):
                    adj[kept] = w
                    kept += 1
            adj[start:kept].sort()
            if late == 0:
                rows[v, 1] = kept
    rows[size, 0] = rows[size, 1] = kept
    return kept
