"""Compiled loops of the path sampler: random numbers, the search from both ends, the draw of a path.

Vertices here are the searched ones, renumbered by `prepare.prepare`. `rows[v] = (begin, end)` bounds v's
part of `adj`. Each level of each search has a colour of its own, and colours only grow: `mark[v] >= first`
says that v was met in this sample, and `mark[v] == colour` on which side and level. Nothing is cleared
between samples. Every pair has random numbers of its own, from its number and the seed, so it does not matter which
pairs are drawn together. Vertices are unsigned, and the two hottest loops index by unsigned integers: that spares the
test for negative indices, a fifth of the time.

Borassi, Natale (2016), KADABRA is an ADaptive Algorithm for Betweenness via Random Approximation, sec. 4
(balanced search); Steele, Lea, Flood (2014), Fast splittable pseudorandom number generators (splitmix64);
Lemire (2019), Fast random integer generation in an interval.
"""

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel

U11, U27, U30, U31, U32 = (np.uint64(k) for k in (11, 27, 30, 31, 32))
GOLDEN, FIRST_MIX, SECOND_MIX = (np.uint64(k) for k in (0x9E3779B97F4A7C15, 0xBF58476D1CE4E5B9, 0x94D049BB133111EB))
LOW = np.uint64(0xFFFFFFFF)
TWO32 = np.uint64(1 << 32)
UNIT = 2.0**-53

# Path counts are float64. A level that outgrows LARGE is scaled down by SHRINK (only ratios within a level
# matter), which takes at least DEEP levels: sigma is at most (n / levels) ** levels.
DEEP = 16
LARGE = 2.0**400
SHRINK = 2.0**-400
FLOOR = 2.0**-1000  # far below any count that matters beside LARGE, yet not zero, so that no path is lost

# A row more than PROBE times as long as the other frontier is searched for its vertices instead of being
# scanned.
PROBE = 32

# Bits of `ends`.
NO_OUT = 1
NO_IN = 2


@kernel
def mixed(word):
    """A bijection of 64 bits in which every bit of the word moves every bit of the result."""
    word = (word ^ (word >> U30)) * FIRST_MIX
    word = (word ^ (word >> U27)) * SECOND_MIX
    return word ^ (word >> U31)


@kernel
def next_word(state):
    """64 random bits; state: uint64[1], advanced in place."""
    state[0] += GOLDEN
    return mixed(state[0])


@kernel
def below(state, bound):
    """An unbiased integer in [0, bound), 0 < bound <= 2**32."""
    size = np.uint64(bound)
    product = (next_word(state) >> U32) * size
    if (product & LOW) < size:
        floor = (TWO32 - size) % size
        while (product & LOW) < floor:
            product = (next_word(state) >> U32) * size
    return np.int64(product >> U32)


@kernel
def unit(state):
    """A float64 in [0, 1)."""
    return np.float64(next_word(state) >> U11) * UNIT


@kernel
def among(adj, begin, end, w):
    """Is w in the sorted stretch adj[begin:end]?"""
    low, high = begin, end
    while low < high:
        middle = (low + high) // 2
        if adj[middle] < w:
            low = middle + 1
        else:
            high = middle
    return low < end and adj[low] == w


@kernel
def meet(rows, adj, queue, begin, end, others, other_begin, other_end, mark, sigma, cross, weight):
    """Find the arcs between the two frontiers, queue[begin:end] and others[other_begin:other_end].

    All shortest paths run over these arcs, each over exactly one. Looking for them before a level is recorded
    spares most of the work: the last level is by far the largest, and it is never recorded.

    Returns (entries written to cross and weight, number of shortest paths); weight[i] of them leave this side
    at cross[i].
    """
    crossings = 0
    total = 0.0
    colour = mark[others[other_begin]]
    probing = PROBE * (other_end - other_begin)
    for i in range(begin, end):
        u = queue[i]
        low, high = rows[u, 0], rows[u, 1]
        across = 0.0
        if high - low > probing:
            for j in range(other_begin, other_end):
                w = others[j]
                if among(adj, low, high, w):
                    across += sigma[w]
        else:
            for a in range(low, high):
                w = adj[np.uintp(a)]
                if mark[w] == colour:
                    across += sigma[w]
        if across > 0.0:
            cross[crossings] = u
            weight[crossings] = sigma[u] * across
            total += weight[crossings]
            crossings += 1
    return crossings, total


@kernel
def expand(rows, adj, queue, begin, end, fresh, first, mark, parent, sigma):
    """Record the level behind queue[begin:end] in colour `fresh`; returns the new end of the queue."""
    tail = end
    for i in range(begin, end):
        u = queue[i]
        count = sigma[u]
        for a in range(rows[u, 0], rows[u, 1]):
            w = adj[np.uintp(a)]
            colour = mark[w]
            if colour < first:
                mark[w] = fresh
                parent[w] = u
                sigma[w] = count
                queue[tail] = w
                tail += 1
            elif colour == fresh:
                sigma[w] += count
    return tail


@kernel
def shrink(queue, begin, end, sigma):
    """Scale a level's path counts down if they grew large; True if that was done."""
    largest = 0.0
    for i in range(begin, end):
        largest = max(largest, sigma[queue[i]])
    if largest < LARGE:
        return False
    for i in range(begin, end):
        sigma[queue[i]] = max(sigma[queue[i]] * SHRINK, FLOOR)
    return True


@kernel
def choose(rows, adj, v, queue, begin, end, total, mark, sigma, state):
    """One of v's neighbours in the level queue[begin:end], by path counts, which add to `total`."""
    chosen = queue[begin]
    left = unit(state) * total
    low, high = rows[v, 0], rows[v, 1]
    if high - low > PROBE * (end - begin):
        for i in range(begin, end):
            w = queue[i]
            if among(adj, low, high, w):
                chosen = w
                left -= sigma[w]
                if left < 0.0:
                    break
    else:
        colour = mark[chosen]
        for a in range(low, high):
            w = adj[a]
            if mark[w] == colour:
                chosen = w
                left -= sigma[w]
                if left < 0.0:
                    break
    return chosen


@kernel
def block_of(a, b, home, entry):
    """The biconnected block that holds the edge a-b (see kernels_structure.blocks)."""
    if home[a] == home[b] or entry[a] == b:
        return home[a]
    return home[b]


@kernel
def sample_paths(
    start, samples, key, population, max_hops, anchor, component, ends, out_rows, out_adj, in_rows, in_adj, home, entry,
    mark, parent, sigma, queue_s, queue_t, level_s, level_t, shrunk_s, shrunk_t, cross, weight, hits, stop,
):  # fmt: skip
    """Draw ordered pairs [start, start + samples), a shortest path each; hits[v] += 1 for each scored vertex inside.

    key: uint64, of the seed. population: number of vertices pairs are drawn from; anchor[population] maps them to
    searched vertices. A vertex scores unless it separates the pair (path arcs before and after it in different blocks):
    what such vertices earn is counted exactly beforehand. stop: uint8[1], not 0: the result is not wanted any more.
    Returns the pairs that were searched, and the vertices that the searches met.
    """
    searched = visited = 0
    state = np.empty(1, np.uint64)
    mark[:] = 0
    colour = 0
    room = 2 * mark.size + 4
    for pair in range(start, start + samples):
        if stop[0]:
            break
        state[0] = mixed(key + np.uint64(pair) * GOLDEN)
        s = below(state, population)
        t = below(state, population - 1)
        if t >= s:
            t += 1
        s = anchor[s]
        t = anchor[t]
        if s == t or component[s] != component[t] or ends[s] & NO_OUT or ends[t] & NO_IN:
            continue
        # Arcs into dead ends are left out of the searched rows, so an arc straight from a mere source to a
        # mere sink is in neither direction's rows.
        lone_s = ends[s] & NO_IN
        lone_t = ends[t] & NO_OUT
        if lone_s and lone_t and among(out_adj, out_rows[s, 1], out_rows[s + 1, 0], t):
            continue
        searched += 1
        if colour > 2147483647 - room:
            mark[:] = 0
            colour = 0
        first = colour + 1
        colour += 2
        mark[s], mark[t] = first, colour
        sigma[s] = sigma[t] = 1.0
        queue_s[0], queue_t[0] = s, t
        level_s[0], level_t[0] = 0, 0
        depth_s = depth_t = 0
        begin_s = begin_t = 0
        end_s = end_t = 1
        # Arcs of each frontier, summed only as far as the comparison needs.
        seen_s = seen_t = 0
        arcs_s = arcs_t = 0
        crossings = 0
        total = 0.0
        from_s = True
        while crossings == 0 and (max_hops == 0 or depth_s + depth_t < max_hops):
            if lone_s and depth_s == 0:
                from_s = True
            elif lone_t and depth_t == 0:
                from_s = False
            else:
                while True:
                    if arcs_s <= arcs_t:
                        if seen_s == end_s:
                            from_s = True
                            break
                        v = queue_s[seen_s]
                        arcs_s += out_rows[v, 1] - out_rows[v, 0]
                        seen_s += 1
                    else:
                        if seen_t == end_t:
                            from_s = False
                            break
                        v = queue_t[seen_t]
                        arcs_t += in_rows[v, 1] - in_rows[v, 0]
                        seen_t += 1
            if from_s:
                crossings, total = meet(
                    out_rows,
                    out_adj,
                    queue_s,
                    begin_s,
                    end_s,
                    queue_t,
                    begin_t,
                    end_t,
                    mark,
                    sigma,
                    cross,
                    weight,
                )
                if crossings == 0:
                    colour += 1
                    tail = expand(out_rows, out_adj, queue_s, begin_s, end_s, colour, first, mark, parent, sigma)
                    if tail == end_s:
                        break
                    begin_s, end_s = end_s, tail
                    seen_s, arcs_s = begin_s, 0
                    depth_s += 1
                    level_s[depth_s] = begin_s
                    shrunk_s[depth_s] = depth_s >= DEEP and shrink(queue_s, begin_s, end_s, sigma)
            else:
                crossings, total = meet(
                    in_rows,
                    in_adj,
                    queue_t,
                    begin_t,
                    end_t,
                    queue_s,
                    begin_s,
                    end_s,
                    mark,
                    sigma,
                    cross,
                    weight,
                )
                if crossings == 0:
                    colour += 1
                    tail = expand(in_rows, in_adj, queue_t, begin_t, end_t, colour, first, mark, parent, sigma)
                    if tail == end_t:
                        break
                    begin_t, end_t = end_t, tail
                    seen_t, arcs_t = begin_t, 0
                    depth_t += 1
                    level_t[depth_t] = begin_t
                    shrunk_t[depth_t] = depth_t >= DEEP and shrink(queue_t, begin_t, end_t, sigma)
        visited += end_s + end_t
        if crossings == 0 or depth_s + depth_t == 0:
            continue

        # The crossing arc: its near end by weight, its far end by path counts.
        left = unit(state) * total
        i = 0
        while i < crossings - 1 and left >= weight[i]:
            left -= weight[i]
            i += 1
        near = cross[i]
        across = weight[i] / sigma[near]
        if from_s:
            u, w = near, choose(out_rows, out_adj, near, queue_t, begin_t, end_t, across, mark, sigma, state)
        else:
            w, u = near, choose(in_rows, in_adj, near, queue_s, begin_s, end_s, across, mark, sigma, state)

        # Walk from the crossing arc to both ends; most vertices were reached from one vertex only.
        middle = block_of(u, w, home, entry)
        block = middle
        for depth in range(depth_s, 0, -1):
            before = parent[u]
            count = sigma[u] / SHRINK if shrunk_s[depth] else sigma[u]
            if sigma[before] != count:
                low, high = level_s[depth - 1], level_s[depth]
                before = choose(in_rows, in_adj, u, queue_s, low, high, count, mark, sigma, state)
            ahead = block
            block = block_of(before, u, home, entry)
            if block == ahead:
                hits[u] += 1
            u = before
        block = middle
        for depth in range(depth_t, 0, -1):
            after = parent[w]
            count = sigma[w] / SHRINK if shrunk_t[depth] else sigma[w]
            if sigma[after] != count:
                low, high = level_t[depth - 1], level_t[depth]
                after = choose(out_rows, out_adj, w, queue_t, low, high, count, mark, sigma, state)
            behind = block
            block = block_of(w, after, home, entry)
            if block == behind:
                hits[w] += 1
            w = after
    return searched, visited
