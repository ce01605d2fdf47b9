"""Plain-Python answers that are obviously right. Nothing here imports the package, and nothing here is fast."""

from __future__ import annotations

import itertools
from collections.abc import Iterable
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


def betweenness_pairs(
    n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None, max_hops: int = 0
) -> list[float]:
    """Unnormalised betweenness by listing every shortest path of every pair; unordered pairs when undirected.

    With `max_hops`, pairs whose shortest path has more arcs do not count (hop lengths only).
    """
    out = adjacency(n, arcs, directed, lengths)
    d = distances(out)
    total = [Fraction(0)] * n
    for s, t in itertools.permutations(range(n), 2):
        if not directed and s > t:
            continue
        if max_hops and d[s][t] > max_hops:
            continue
        paths = shortest_paths(out, s, t, d)
        for path in paths:
            for v in path[1:-1]:
                total[v] += Fraction(1, len(paths))
    return [float(x) for x in total]


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
