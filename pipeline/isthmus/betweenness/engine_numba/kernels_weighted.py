"""Compiled sweeps of exact betweenness and sampled sources where arcs have lengths.

Dijkstra forward, dependencies backward (Brandes 2001). Lengths are positive integers, so that two shortest
paths are equal exactly when their sums are. With lengths most vertices have one predecessor: it is
remembered, and only vertices where paths tie look through their arcs again.

The queue is a ring of buckets no wider than the shortest arc, so that whatever lies in the first bucket is
final and nothing needs sorting (Denardo and Fox 1979); a bitmap finds the next one in use. When the lengths
differ so much that the ring would outgrow the graph, a heap does the same work.
"""

from __future__ import annotations

import math

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel, lowest_bit
from isthmus.betweenness.engine_numba.kernels_moments import note

_FAR = np.int64(2**62)
_ONE = np.uint64(1)
_NONE = np.uint64(0)
MOST_BUCKETS = 2**22
_MOST = 1e300  # paths to one vertex, see kernels_lanes


@kernel
def _push(keys, items, size, key, item):
    """Add to a heap with four children per node; returns its new size. The caller has made room."""
    i = size
    while i > 0:
        up = (i - 1) >> 2
        if keys[up] <= key:
            break
        keys[i], items[i] = keys[up], items[up]
        i = up
    keys[i], items[i] = key, item
    return size + 1


@kernel
def _pop(keys, items, size):
    """Take the first of the heap away; returns its new size."""
    size -= 1
    key, item = keys[size], items[size]
    i = 0
    while True:
        child = 4 * i + 1
        if child >= size:
            break
        best = child
        for other in range(child + 1, min(child + 4, size)):
            if keys[other] < keys[best]:
                best = other
        if keys[best] >= key:
            break
        keys[i], items[i] = keys[best], items[best]
        i = best
    keys[i], items[i] = key, item
    return size


@kernel
def _forward_heap(s, out_ptr, out_adj, out_lengths, distance, sigma, before, order, keys, items):
    """Dijkstra from s: distances, path counts, predecessors, order; returns the number settled."""
    distance[s], sigma[s] = 0, 1.0
    settled = 0
    size = _push(keys, items, 0, np.int64(0), s)
    while size > 0:
        d, v = keys[0], items[0]
        size = _pop(keys, items, size)
        if d > distance[v]:
            continue  # an older, longer entry
        order[settled] = v
        settled += 1
        for j in range(out_ptr[v], out_ptr[v + 1]):
            w = out_adj[j]
            through = d + out_lengths[j]
            if through < distance[w]:
                distance[w] = through
                sigma[w] = sigma[v]
                before[w] = v
                size = _push(keys, items, size, through, w)
            elif through == distance[w]:
                sigma[w] += sigma[v]
                before[w] = -1
    return settled


@kernel
def _forward_ring(s, out_ptr, out_adj, out_lengths, distance, sigma, before, order, shift, head, used, link, items):
    """The same, in buckets 2**shift wide; head int32[power of two], all -1; used: a bit per bucket, clear."""
    ring = head.size - 1
    distance[s], sigma[s] = 0, 1.0
    settled, entries, waiting = 0, 1, 1
    items[0], link[0], head[0] = s, -1, 0
    used[0] |= _ONE
    bucket = np.int64(0)
    while waiting > 0:
        # The next bucket in use: the rest of this word of the bitmap, then word by word around the ring.
        word = (bucket & ring) >> 6
        ahead = used[word] >> np.uint64(bucket & 63)
        if ahead != _NONE:
            bucket += lowest_bit(ahead)
        else:
            bucket = ((bucket >> 6) + 1) << 6
            while used[(bucket & ring) >> 6] == _NONE:
                bucket += 64
            bucket += lowest_bit(used[(bucket & ring) >> 6])
        slot = bucket & ring
        used[slot >> 6] &= ~(_ONE << np.uint64(slot & 63))
        entry = head[slot]
        head[slot] = -1
        while entry >= 0:
            v = items[entry]
            entry = link[entry]
            waiting -= 1
            d = distance[v]
            if d >> shift != bucket:
                continue  # an older entry: v came nearer and is settled
            order[settled] = v
            settled += 1
            for j in range(out_ptr[v], out_ptr[v + 1]):
                w = out_adj[j]
                through = d + out_lengths[j]
                if through < distance[w]:
                    if through >> shift != distance[w] >> shift:  # else its entry is in the right bucket already
                        slot = (through >> shift) & ring
                        items[entries], link[entries] = w, head[slot]
                        head[slot] = entries
                        used[slot >> 6] |= _ONE << np.uint64(slot & 63)
                        entries += 1
                        waiting += 1
                    distance[w] = through
                    sigma[w] = sigma[v]
                    before[w] = v
                elif through == distance[w]:
                    sigma[w] += sigma[v]
                    before[w] = -1
    return settled


@kernel
def weighted_sweep(
    out_ptr,
    out_adj,
    out_lengths,
    in_ptr,
    in_adj,
    in_lengths,
    targets,
    sources,
    weights,
    score,
    reached,
    unit,
    moments,
    stop,
):
    """Add the dependencies of a block of sources, one after another.

    Arguments and result as in kernels_lanes.lanes_sweep, with int64[m] lengths; every vertex has one copy.
    Distances must stay under 2**62: the caller checks (n - 1) times the longest arc.
    """
    n, m = out_ptr.size - 1, out_adj.size
    shift, buckets = 0, 64
    if m > 0:
        shortest, longest = out_lengths.min(), out_lengths.max()
        while shortest >> (shift + 1) > 0:
            shift += 1
        while buckets < (longest >> shift) + 2 and buckets <= MOST_BUCKETS:
            buckets *= 2
    ringed = buckets <= MOST_BUCKETS
    head = np.full(buckets if ringed else 0, -1, np.int32)
    used = np.zeros(head.size >> 6, np.uint64)
    keys = np.empty(0 if ringed else m + 1, np.int64)
    link = np.empty(m + 1 if ringed else 0, np.int32)
    items = np.empty(m + 1, np.int32)
    distance = np.full(n, _FAR, np.int64)
    sigma = np.zeros(n)
    acc = np.zeros(n)
    before = np.empty(n, np.int32)  # the predecessor, or -1 when several tie
    order = np.empty(n, np.int32)
    reach = np.zeros(sources.size)
    for k in range(sources.size):
        if stop[0]:
            break
        s, weight = sources[k], weights[k]
        if ringed:
            settled = _forward_ring(
                s,
                out_ptr,
                out_adj,
                out_lengths,
                distance,
                sigma,
                before,
                order,
                shift,
                head,
                used,
                link,
                items,
            )
        else:
            settled = _forward_heap(s, out_ptr, out_adj, out_lengths, distance, sigma, before, order, keys, items)
        for i in range(settled - 1, 0, -1):
            w = order[i]
            if not sigma[w] <= _MOST:
                reach[:] = math.nan
                return reach
            delta = sigma[w] * acc[w]
            score[w] += weight * delta
            if moments.size:
                note(moments, w, unit[w] * delta, weight)
            if reached.size:
                reached[w] += weight
            g = targets[w] / sigma[w] + acc[w]
            if before[w] >= 0:
                acc[before[w]] += g
            else:
                for j in range(in_ptr[w], in_ptr[w + 1]):
                    v = in_adj[j]
                    if distance[v] + in_lengths[j] == distance[w]:
                        acc[v] += g
            acc[w] = 0.0
        reach[k] = acc[s]
        acc[s] = 0.0
        for i in range(settled):
            distance[order[i]] = _FAR
    return reach
