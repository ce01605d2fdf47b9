"""Compiled loops that find what the structure of an undirected graph settles without sampling.

Hopcroft, Tarjan (1973), Algorithm 447 (biconnected components); Puzis et al. (2015) and Sariyuce et al.
(2013) use the same facts to speed up exact betweenness.
"""

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel


@kernel
def hang(ptr, adj, anchor):
    """anchor[v] = the vertex of the 2-core (or the last one left of a tree) that v hangs on, or v itself."""
    n = anchor.size
    degree = np.empty(n, np.int64)
    peeled = np.empty(n, np.int32)
    count = 0
    for v in range(n):
        anchor[v] = -1
        degree[v] = ptr[v + 1] - ptr[v]
        if degree[v] == 1:
            peeled[count] = v
            count += 1
    done = 0
    while done < count:
        v = peeled[done]
        done += 1
        if degree[v] == 0:  # the last one of a tree stays
            continue
        degree[v] = 0
        for a in range(ptr[v], ptr[v + 1]):
            w = adj[a]
            if anchor[w] == -1:
                anchor[v] = w
                degree[w] -= 1
                if degree[w] == 1:
                    peeled[count] = w
                    count += 1
                break
    for v in range(n):
        if anchor[v] == -1:
            anchor[v] = v
    for i in range(count - 1, -1, -1):  # outwards: the neighbour nearer the core is settled first
        anchor[peeled[i]] = anchor[anchor[peeled[i]]]


@kernel
def blocks(ptr, adj, component, size, home, entry, apart):
    """Biconnected blocks by depth-first search from the lowest vertex of each component.

    component: int32[n]; size: int64[components], vertices in each. home[v] = the block of the tree arc that
    leads to v (-1 at a root); entry[v] = the vertex where the search entered that block (-1 at a root). The
    edge a-b is in block home[a] if home[a] == home[b] or entry[a] == b, else in home[b]. apart[v] = ordered
    pairs of other vertices that v separates: every path between them passes v. Returns the blocks.
    """
    n = home.size
    found = np.zeros(n, np.int32)  # order of discovery, from 1
    low = np.zeros(n, np.int32)
    above = np.full(n, -1, np.int32)
    below = np.ones(n, np.int64)  # vertices in the search tree under v, v included
    cut_off = np.zeros(n, np.int64)  # of these, cut off from the rest by v
    at = ptr[:-1].copy()
    path = np.empty(n, np.int32)
    waiting = np.empty(n, np.int32)  # discovered, block not closed yet
    clock = 0
    count = 0
    held = 0
    for v in range(n):
        home[v] = -1
        entry[v] = -1
        apart[v] = 0
    for root in range(n):
        if found[root] != 0:
            continue
        clock += 1
        found[root] = low[root] = clock
        path[0] = root
        top = 0
        while top >= 0:
            v = path[top]
            if at[v] < ptr[v + 1]:
                w = adj[at[v]]
                at[v] += 1
                if found[w] == 0:
                    clock += 1
                    found[w] = low[w] = clock
                    above[w] = v
                    top += 1
                    path[top] = w
                    waiting[held] = w
                    held += 1
                elif w != above[v]:
                    low[v] = min(low[v], found[w])
                continue
            top -= 1
            others = size[component[v]] - 1
            rest = others - cut_off[v]
            apart[v] += others * others - rest * rest
            if top < 0:
                break
            u = path[top]
            below[u] += below[v]
            low[u] = min(low[u], low[v])
            if low[v] >= found[u]:  # u separates v's branch from the rest: a block is complete
                cut_off[u] += below[v]
                apart[u] -= below[v] * below[v]
                while True:
                    held -= 1
                    w = waiting[held]
                    home[w] = count
                    entry[w] = u
                    if w == v:
                        break
                count += 1
    return count


@kernel
def covered(ptr, adj, u, w):
    """Is w in u's sorted row?"""
    low, high = ptr[u], ptr[u + 1]
    while low < high:
        middle = (low + high) // 2
        if adj[middle] < w:
            low = middle + 1
        else:
            high = middle
    return low < ptr[u + 1] and adj[low] == w


@kernel
def bypassed(out_ptr, out_adj, in_ptr, in_adj, home, entry, most, zero):
    """zero[v] = True where v is never needed: its neighbours in each block reach each other directly.

    With one block for all (home = 0, entry = -1) this is: v lies inside no shortest path at all. Vertices
    with more than `most` pairs of neighbours to check are left False, unless one side is empty.
    """
    for v in range(zero.size):
        zero[v] = False
        into, out = in_ptr[v + 1] - in_ptr[v], out_ptr[v + 1] - out_ptr[v]
        if into * out > most:
            continue
        direct = True
        for a in range(in_ptr[v], in_ptr[v + 1]):
            s = in_adj[a]
            block = home[s] if home[s] == home[v] or entry[s] == v else home[v]
            for b in range(out_ptr[v], out_ptr[v + 1]):
                t = out_adj[b]
                if s == t or block != (home[t] if home[t] == home[v] or entry[t] == v else home[v]):
                    continue
                if not covered(out_ptr, out_adj, s, t):
                    direct = False
                    break
            if not direct:
                break
        zero[v] = direct


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
