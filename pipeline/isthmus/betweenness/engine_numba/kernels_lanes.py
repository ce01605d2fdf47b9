"""Compiled sweeps of exact betweenness and sampled sources, unweighted: many sources in lanes.

Brandes' algorithm (2001) does two sweeps per source: forward, counting the shortest paths sigma to each
vertex level by level; backward, adding up dependencies. Here up to 64 sources run at once, one per lane (the
idea of multi-source breadth-first search, Then et al. 2014, carried over to both sweeps): a frontier is a
list of (vertex, mask of lanes), and each vertex has one row of lanes. Sources that are near each other have
nearly the same frontiers, so an arc is touched about once per batch, for all lanes, as one vector addition.

Vertices may stand for several identical ones (structure.py), so the recurrences carry two weights per vertex:
copies c(v), and target weight T(v), the number of end points that a shortest path into v stands for:

    sigma(w) = sum over predecessors v of c(v) sigma(v)           c(source) counts once here
    acc(v)   = sum over successors w of T(w)/sigma(w) + c(w) acc(w)
    delta(v) = sigma(v) acc(v)                                    dependency of one source on one copy of v

T(v) is the total over the copies of v. One row per vertex serves both sweeps. Forward it holds f = c sigma;
once the backward sweep has finished with (v, lane), the same place holds g = T/sigma + c acc, which is all
that the level above needs. A row may hold both kinds at once, or leftovers of an earlier batch: the masks say
which
lanes mean something.

Axes: v = vertices, l = lanes.
"""

from __future__ import annotations

import math

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import count_bits, kernel, lowest_bit
from isthmus.betweenness.engine_numba.kernels_moments import note

_ONE = np.uint64(1)
_NONE = np.uint64(0)
_MOST = 1e300  # paths to one vertex: beyond, float64 is near its end, and a result would be wrong without a word
_SPARSE = 6  # up to this many lanes, going lane by lane is cheaper than a full row


@kernel
def _gather(acc, rows, begin, end, adj, level_mask, mask, lanes):
    """acc[l] = sum of rows[v, l] over neighbours v whose level has lane l; outside the mask, anything."""
    for lane in range(lanes):
        acc[lane] = 0.0
    for j in range(begin, end):
        v = adj[j]
        common = level_mask[v] & mask
        if common == mask:
            for lane in range(lanes):  # the lanes outside the mask add up rubbish that nobody reads
                acc[lane] += rows[v, lane]
        elif common != _NONE:
            if count_bits(common) <= _SPARSE:
                while common != _NONE:
                    lane = lowest_bit(common)
                    acc[lane] += rows[v, lane]
                    common &= common - _ONE
            else:
                for lane in range(lanes):
                    acc[lane] += rows[v, lane] if (common >> np.uint64(lane)) & _ONE else 0.0


@kernel
def _keep_forward(rows, v, acc, spare, copies, mask, lanes):
    """rows[v, l] = f = c acc[l] for the lanes in mask."""
    if count_bits(mask) <= _SPARSE:
        while mask != _NONE:
            lane = lowest_bit(mask)
            rows[v, lane] = copies * acc[lane]
            mask &= mask - _ONE
        return
    # In two steps: written as one it becomes a masked store, which some processors do very slowly.
    for lane in range(lanes):
        spare[lane] = copies * acc[lane] if (mask >> np.uint64(lane)) & _ONE else rows[v, lane]
    for lane in range(lanes):
        rows[v, lane] = spare[lane]


@kernel
def _keep_backward(rows, v, acc, spare, weight, copies, target, mask, lanes):
    """rows[v, l] = g = T/sigma + c acc for the lanes in mask; the weighted sum of delta."""
    total = 0.0
    scale = 1.0 / copies
    if count_bits(mask) <= _SPARSE:
        while mask != _NONE:
            lane = lowest_bit(mask)
            mask &= mask - _ONE
            sigma, a = scale * rows[v, lane], acc[lane]
            rows[v, lane] = target / sigma + copies * a
            total += weight[lane] * (sigma * a)
        return total
    on, sigma, delta = spare[0], spare[1], spare[2]
    for lane in range(lanes):
        on[lane] = 1.0 if (mask >> np.uint64(lane)) & _ONE else 0.0
    for lane in range(lanes):
        sigma[lane] = scale * rows[v, lane] if on[lane] != 0.0 else 1.0
    for lane in range(lanes):
        delta[lane] = sigma[lane] * acc[lane] if on[lane] != 0.0 else 0.0
    for lane in range(lanes):
        sigma[lane] = target / sigma[lane] + copies * acc[lane]
    for lane in range(lanes):
        sigma[lane] = sigma[lane] if on[lane] != 0.0 else rows[v, lane]
    for lane in range(lanes):
        rows[v, lane] = sigma[lane]
    # Two fixed halvings, then one after another: an order of addition that vector units can follow.
    half, quarter = lanes // 2, lanes // 4
    for lane in range(lanes):
        on[lane] = weight[lane] * delta[lane]
    for lane in range(half):
        on[lane] += on[lane + half]
    for lane in range(quarter):
        on[lane] += on[lane + quarter]
    for lane in range(quarter):
        total += on[lane]
    return total


@kernel
def _too_many(rows, record_v, record_mask, end):
    """Whether a path count is past _MOST; they grow from level to level, so none is missed."""
    for i in range(end):
        v, mask = record_v[i], record_mask[i]
        while mask != _NONE:
            if not rows[v, lowest_bit(mask)] <= _MOST:
                return True
            mask &= mask - _ONE
    return False


@kernel
def lanes_sweep(
    out_ptr,
    out_adj,
    in_ptr,
    in_adj,
    copies,
    targets,
    sources,
    weights,
    lanes,
    max_hops,
    score,
    reached,
    unit,
    moments,
    stop,
):
    """Add the dependencies of a block of sources; consecutive sources share a batch of lanes.

    out_ptr, out_adj, in_ptr, in_adj: compressed adjacency and its reverse, int64[n+1], int32[m]
    copies, targets: float64[n], c(v) and T(v) above; all ones for a plain graph
    sources, weights: int32[k], float64[k], what a source's dependencies are multiplied by
    lanes: sources per batch: 8, 16, 32 or 64
    max_hops: longest path that counts, in arcs; 0 means no limit
    score: float64[n], grows by weight * delta(v) for every v but the source
    reached: float64[n] grows by weight for every source but itself that reaches v, or float64[0]
    unit, moments: float64[n], float64[n, MOMENTS]: each x = unit(v) delta(v) is noted (kernels_moments), as often as
        the source's weight says; or float64[0], float64[0, MOMENTS]: not wanted
    stop: uint8[1], not 0: the result is not wanted any more, whatever it is

    Returns float64[k]: sum of T over the vertices each source reaches, itself left out; all NaN when more shortest
    paths than float64 can count lead to a vertex.
    """
    n = out_ptr.size - 1
    rows = np.empty((n, lanes))  # left as it comes: pages that no source reaches are then never touched
    unseen = np.empty(n, np.uint64)
    now = np.zeros(n, np.uint64)  # lanes of v in the level that is being read
    new = np.zeros(n, np.uint64)  # lanes of v in the level that is being found
    unseen[:] = ~_NONE
    record_v = np.empty(2 * n + lanes, np.int32)  # one record per (level, vertex)
    record_mask = np.empty(2 * n + lanes, np.uint64)
    level_start = np.empty(n + 3, np.int64)
    acc = np.empty(lanes)
    weight = np.zeros(lanes)
    spare = np.empty((3, lanes))
    reach = np.zeros(sources.size)
    longest = n if max_hops == 0 else max_hops
    all_copies = copies.sum()

    for first in range(0, sources.size, lanes):
        used = min(lanes, sources.size - first)
        # Level 0: the sources. They are distinct within a batch, so each has one lane.
        weight[:] = 0.0
        for lane in range(used):
            s = sources[first + lane]
            bit = _ONE << np.uint64(lane)
            weight[lane] = weights[first + lane]
            record_v[lane] = s
            record_mask[lane] = bit
            rows[s, lane] = 1.0
            now[s] = bit
            unseen[s] &= ~bit
        level_start[0] = 0
        level_start[1] = used
        begin, end, depth = 0, used, 0

        while end > begin and depth < longest:
            if end + n > record_v.size:
                record_v = np.concatenate((record_v, np.empty_like(record_v)))
                record_mask = np.concatenate((record_mask, np.empty_like(record_mask)))
            # Who is new, by masks alone: small arrays that stay in the cache.
            last = end
            for i in range(begin, end):
                if stop[0]:
                    return reach
                v, mask = record_v[i], record_mask[i]
                for j in range(out_ptr[v], out_ptr[v + 1]):
                    w = out_adj[j]
                    fresh = mask & unseen[w]
                    if fresh != _NONE:
                        if new[w] == _NONE:
                            record_v[last] = w
                            last += 1
                        new[w] |= fresh
            # Then the path counts, pulled: the accumulator stays in the first cache, rows are only read.
            for i in range(end, last):
                if stop[0]:
                    return reach
                w = record_v[i]
                mask = new[w]
                record_mask[i] = mask
                unseen[w] &= ~mask
                _gather(acc, rows, in_ptr[w], in_ptr[w + 1], in_adj, now, mask, lanes)
                _keep_forward(rows, w, acc, spare[0], copies[w], mask, lanes)
            for i in range(begin, end):
                now[record_v[i]] = _NONE
            for i in range(end, last):
                w = record_v[i]
                now[w] = new[w]
                new[w] = _NONE
            begin, end = end, last
            if end > begin:
                depth += 1
                level_start[depth + 1] = end
        for i in range(begin, end):
            now[record_v[i]] = _NONE
        # With `all` vertices on so many levels there are at most (all / depth) ** depth paths.
        if depth * math.log(all_copies / max(depth, 1)) > 690.0 and _too_many(rows, record_v, record_mask, end):
            reach[:] = math.nan
            return reach

        # Backward. The rows of the deeper level, whose lanes `now` holds, are g already.
        for level in range(depth, -1, -1):
            begin, end = level_start[level], level_start[level + 1]
            for i in range(begin, end):
                if stop[0]:
                    return reach
                v, mask = record_v[i], record_mask[i]
                unseen[v] = ~_NONE
                _gather(acc, rows, out_ptr[v], out_ptr[v + 1], out_adj, now, mask, lanes)
                if level == 0:
                    reach[first + i] = acc[lowest_bit(mask)]
                    continue
                if moments.size:
                    rest, one = mask, unit[v] / copies[v]
                    while rest != _NONE:
                        lane = lowest_bit(rest)
                        note(moments, v, one * rows[v, lane] * acc[lane], weight[lane])
                        rest &= rest - _ONE
                score[v] += _keep_backward(rows, v, acc, spare, weight, copies[v], targets[v], mask, lanes)
                if reached.size:
                    while mask != _NONE:
                        reached[v] += weight[lowest_bit(mask)]
                        mask &= mask - _ONE
            if level < depth:
                for i in range(level_start[level + 1], level_start[level + 2]):
                    now[record_v[i]] = _NONE
            if level > 0:
                for i in range(begin, end):
                    now[record_v[i]] = record_mask[i]
    return reach
