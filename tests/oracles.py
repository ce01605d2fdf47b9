"""Plain-Python answers that are obviously right. Nothing here imports the package, and nothing here is fast."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator
from fractions import Fraction

Arc = tuple[int, int]
INFINITE = float("inf")


def adjacency(
    n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None
) -> list[dict[int, int]]:
    """out[v][w] = length of the arc v -> w; both ways when undirected. One length per arc, 1 where none is given."""
    out: list[dict[int, int]] = [{} for _ in range(n)]
    arcs = list(arcs)
    for (tail, head), length in zip(arcs, lengths or [1] * len(arcs), strict=True):
        if tail != head:
            out[tail][head] = length
            if not directed:
                out[head][tail] = length
    return out


def distances(out: list[dict[int, int]]) -> list[list[float]]:
    """Floyd and Warshall's all-pairs distances."""
    n = len(out)
    d = [[0 if s == t else out[s].get(t, INFINITE) for t in range(n)] for s in range(n)]
    for k, s, t in itertools.product(range(n), repeat=3):
        d[s][t] = min(d[s][t], d[s][k] + d[k][t])
    return d


def shortest_paths(out: list[dict[int, int]], s: int, t: int, d: list[list[float]]) -> list[list[int]]:
    """Every shortest path from s to t, each as its list of vertices."""
    if d[s][t] == INFINITE:
        return []
    if s == t:
        return [[t]]
    return [
        [s, *rest]
        for w, length in out[s].items()
        if length + d[w][t] == d[s][t]
        for rest in shortest_paths(out, w, t, d)
    ]


def dependencies(
    n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None, max_hops: int = 0
) -> list[list[Fraction]]:
    """table[s][v]: over all t, the shares of the shortest s-t paths with v inside, by listing every path.

    With `max_hops`, pairs whose shortest path has more arcs do not count (hop lengths only).
    """
    out = adjacency(n, arcs, directed, lengths)
    d = distances(out)
    table = [[Fraction(0)] * n for _ in range(n)]
    for s, t in itertools.permutations(range(n), 2):
        if max_hops and d[s][t] > max_hops:
            continue
        paths = shortest_paths(out, s, t, d)
        for path in paths:
            for v in path[1:-1]:
                table[s][v] += Fraction(1, len(paths))
    return table


def betweenness_pairs(
    n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None, max_hops: int = 0
) -> list[float]:
    """Unnormalised betweenness; unordered pairs when undirected."""
    table = dependencies(n, arcs, directed, lengths, max_hops)
    return [float(sum(column) / (1 if directed else 2)) for column in zip(*table, strict=True)]


def betweenness(
    n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None, max_hops: int = 0
) -> list[float]:
    """Freeman's normalisation: the share of the pairs of other parties; 0 when there are none."""
    pairs = (n - 1) * (n - 2) / (1 if directed else 2)
    return [x / pairs if n > 2 else 0.0 for x in betweenness_pairs(n, arcs, directed, lengths, max_hops)]


def rank_range(lower: list[float], upper: list[float]) -> list[tuple[int, int]]:
    """Best and worst rank that each interval leaves possible."""
    n = len(lower)
    return [
        (1 + sum(lower[u] > upper[v] for u in range(n)), n - sum(upper[u] < lower[v] for u in range(n)))
        for v in range(n)
    ]


def settle(lower: list[float], upper: list[float], top: int) -> list[str]:
    """Surely among the first `top`, surely not, or not settled."""
    n, said = len(lower), []
    for v in range(n):
        rivals = sum(upper[u] >= lower[v] for u in range(n) if u != v)
        ahead = sum(lower[u] > upper[v] for u in range(n) if u != v)
        said.append("in" if rivals < top else "out" if ahead >= top else "open")
    return said


def brandes(n: int, arcs: Iterable[Arc], directed: bool, max_hops: int = 0) -> list[list[float]]:
    """`dependencies` in hops for graphs too large to list paths: Brandes (2001), plainly."""
    out = adjacency(n, arcs, directed)
    table = []
    for s in range(n):
        distance, count, order = {s: 0}, {s: 1}, [s]
        for u in order:
            for w in out[u]:
                if w not in distance:
                    distance[w], count[w] = distance[u] + 1, 0
                    order.append(w)
                if distance[w] == distance[u] + 1:
                    count[w] += count[u]
        owed = [0.0] * n
        for u in reversed(order):
            for w in out[u]:
                if distance[w] == distance[u] + 1:
                    own = 1.0 if max_hops == 0 or distance[w] <= max_hops else 0.0
                    owed[u] += (own + owed[w]) * count[u] / count[w]
        owed[s] = 0.0
        table.append(owed)
    return table


def certain_zeros(n: int, arcs: Iterable[Arc], directed: bool) -> list[bool]:
    """Whether every way in and every way out of v, to another vertex, is joined by an arc of its own."""
    out = adjacency(n, arcs, directed)
    return [all(u == w or w in out[u] for u in range(n) if v in out[u] for w in out[v]) for v in range(n)]


def reach(n: int, arcs: Iterable[Arc], directed: bool) -> tuple[list[int], list[int]]:
    """How many others can reach each vertex, and how many it can reach: one search from every vertex."""
    out = adjacency(n, arcs, directed)
    before, after = [0] * n, [0] * n
    for s in range(n):
        seen, ahead = {s}, [s]
        while ahead:
            fresh = set(out[ahead.pop()]) - seen
            seen |= fresh
            ahead += fresh
        after[s] = len(seen) - 1
        for t in seen - {s}:
            before[t] += 1
    return before, after


def separated(n: int, arcs: Iterable[Arc], v: int) -> int:
    """Ordered pairs of others that are joined, but not without v (undirected)."""
    out = adjacency(n, arcs, directed=False)

    def reached(start: int, without: int) -> set[int]:
        seen, ahead = {start}, [start]
        while ahead:
            fresh = {w for w in out[ahead.pop()] if w != without} - seen
            seen |= fresh
            ahead += fresh
        return seen

    others = reached(v, -1) - {v}
    return sum(t not in reached(s, v) for s, t in itertools.permutations(others, 2))


def grid(side: int) -> list[Arc]:
    """Ties of a square grid, rows first; as arcs they lead right and down."""
    right = [(r * side + c, r * side + c + 1) for r in range(side) for c in range(side - 1)]
    return right + [(r * side + c, (r + 1) * side + c) for r in range(side - 1) for c in range(side)]


def grid_shares(side: int, s: int, t: int) -> Iterator[tuple[int, float]]:
    """(vertex, share of the shortest s-t paths of a grid that pass it), by binomials; ends included."""
    (r0, c0), (r1, c1) = divmod(s, side), divmod(t, side)
    down, right = abs(r1 - r0), abs(c1 - c0)
    for i, j in itertools.product(range(down + 1), range(right + 1)):
        row, column = r0 + (i if r1 >= r0 else -i), c0 + (j if c1 >= c0 else -j)
        ways = math.comb(i + j, i) * math.comb(down - i + right - j, down - i)
        yield row * side + column, ways / math.comb(down + right, down)


class SplitMix:
    """splitmix64 of Steele, Lea and Flood (2014), in whole numbers without a width."""

    WORD = 2**64 - 1
    GOLDEN = 0x9E3779B97F4A7C15

    def __init__(self, state: int) -> None:
        self.state = state

    @classmethod
    def of_pair(cls, key: int, pair: int) -> SplitMix:
        """The pair's own generator starts at the word that a generator started at `key` gives as its `pair`th."""
        before = cls((key + (pair - 1) * cls.GOLDEN) & cls.WORD)
        return cls(before.word())

    def word(self) -> int:
        self.state = (self.state + self.GOLDEN) & self.WORD
        word = self.state
        word = ((word ^ word >> 30) * 0xBF58476D1CE4E5B9) & self.WORD
        word = ((word ^ word >> 27) * 0x94D049BB133111EB) & self.WORD
        return word ^ word >> 31

    def below(self, bound: int) -> int:
        """Lemire (2019), on the upper halves of words: the multiples that would favour small numbers are redrawn."""
        while True:
            product = (self.word() >> 32) * bound
            if product % 2**32 >= 2**32 % bound:
                return product >> 32


def spread(value: float, grid: list[float]) -> list[float]:
    """A value as weights on its two neighbours among 0 and the ascending `grid`, that of 0 dropped."""
    points = [0.0, *grid]
    weights = [0.0] * len(points)
    for i, (low, high) in enumerate(itertools.pairwise(points)):
        if low < value <= high:
            weights[i], weights[i + 1] = (high - value) / (high - low), (value - low) / (high - low)
    return weights[1:]


def best_bet(
    draws: int, weights: list[float], total: float, grid: list[float], thetas: list[float], cost: float, sign: int
) -> tuple[int, float]:
    """Which theta promises the tightest limit if all went on so, and that limit: below the mean (sign 1), above (-1).

    The mean m is excluded when the log capital, sum of log(1 + sign theta x) less draws * log(1 + sign theta m), has
    reached its price, `cost` per draw.
    """
    promises = []
    for theta in thetas:
        gain = sum(w / (draws + 1) * math.log1p(sign * theta * x) for w, x in zip(weights, grid, strict=True))
        promises.append(sign * math.expm1(gain - cost) / theta)
    best = max(promises) if sign > 0 else min(promises)
    mean = total / draws
    return promises.index(best), min(max(best, 0.0), mean) if sign > 0 else min(max(best, mean), 1.0)


def log_capital(blocks: list[tuple[list[float], float]], population: int, m: float, sign: int) -> float:
    """Log capital against the mean m after blocks of (draws, theta), every draw booked by itself.

    sign 1 bets that m is too low, -1 that it is too high. Within a block the draws are booked as with replacement.
    """
    capital, drawn, total = 0.0, 0, 0.0
    for values, theta in blocks:
        left = (population * m - total) / (population - drawn)
        for x in values:
            capital += math.log1p(sign * theta * x) - math.log1p(sign * theta * left)
        drawn += len(values)
        total += sum(values)
    return capital


def harmonic(n: int, arcs: Iterable[Arc], directed: bool) -> list[float]:
    """Mean over the others of 1/distance from each vertex, 0 where no path leads (Rochat 2009)."""
    d = distances(adjacency(n, arcs, directed))
    return [sum(1 / d[v][t] for t in range(n) if t != v) / (n - 1) for v in range(n)]


def burt(n: int, contacts: dict[Arc, int]) -> tuple[list[float | None], list[float | None]]:
    """Constraint and effective size as Burt (1992, ch. 2) defines them, word for word; None for isolates."""
    z = [[contacts.get((i, j), 0) + contacts.get((j, i), 0) if i != j else 0 for j in range(n)] for i in range(n)]
    constraint: list[float | None] = []
    size: list[float | None] = []
    for i in range(n):
        contacts_of_i = [j for j in range(n) if z[i][j]]
        if not contacts_of_i:
            constraint.append(None)
            size.append(None)
            continue
        held, worth = 0.0, 0.0
        for j in contacts_of_i:
            invested, redundant = z[i][j] / sum(z[i]), 0.0
            for q in contacts_of_i:
                if q != j:
                    invested += z[i][q] / sum(z[i]) * z[q][j] / sum(z[q])
                    redundant += z[i][q] / sum(z[i]) * z[j][q] / max(z[j])
            held += invested**2
            worth += 1 - redundant
        constraint.append(held)
        size.append(worth)
    return constraint, size
