"""Betweenness by NetworKit's own algorithms, put right where they need it. The only file that imports it.

What the library (11.3) does, and what is done about it here; tests watch each point, so that a release that changes
one is noticed:

- `EstimateBetweenness(G, k)` draws k+1 sources with replacement but divides by k: multiplied by k/(k+1).
- It credits a pair by distance, 2 d(s,v)/d(s,t) (Geisberger, Sanders, Schultes 2008). That is right on average only
  if every pair is also seen from its other end: so in undirected graphs, but on a directed path of six it is off by
  a third. Directed graphs therefore get half of the draws on the graph and half on its transpose.
- `ApproxBetweenness` (Riondato, Kornaropoulos 2016) samples correctly on every graph that it accepts, but on directed
  ones its vertex diameter is no upper bound, and directed graphs with lengths it refuses.
- The seed and the number of threads are the process's, not the call's; hence the lock.

To the bit: exact on one thread; pivots for a given number of threads (between numbers, the last digits of the sums
differ); paths always, because they run on one thread: each thread would draw a stream of its own. Exact on several
threads hands out sources as threads fall idle: over repeated runs two fifths of the parties differed, by up to 2e-15
relative (1e-14 between one thread and two). Values are rounded to 11 significant digits (relative 5e-11), so that
parties that are equal by symmetry come out as equal, and all but very few of those differences vanish.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any
from weakref import WeakKeyDictionary

import numpy as np
from numpy.typing import NDArray

from isthmus.betweenness.checkpoint import Checkpoint
from isthmus.betweenness.engine_networkit.bounds import certain_zeros
from isthmus.betweenness.estimate import Estimate
from isthmus.betweenness.ranks import snap
from isthmus.graph import Graph

if TYPE_CHECKING:
    from isthmus.betweenness.plan import Plan
    from isthmus.cluster import Door
    from isthmus.settings import Score

__all__ = ["path_dimension", "run", "seconds_per_path", "seconds_per_source"]

Floats = NDArray[np.float64]
Progress = Callable[[float], None]

_one_at_a_time = threading.RLock()
_converted: WeakKeyDictionary[Graph, Any] = WeakKeyDictionary()


def run(
    graph: Graph,
    plan: Plan,
    score: Score,
    threads: int,
    progress: Progress,
    door: Door | None = None,
    checkpoint: Checkpoint | None = None,
) -> Estimate:
    """Measure as planned, in this process and from the beginning, whatever door and checkpoint: the library keeps its
    threads and its work to itself.

    `threads` > 0 lowers the plan's number; `progress` hears the share done, 0..1.
    """
    threads = min(plan.threads, threads) if threads else plan.threads
    zeros = certain_zeros(graph)
    progress(0.0)
    try:
        if zeros.all():
            value, error, half_width = np.zeros(graph.n), np.zeros(graph.n), 0.0
        elif plan.method == "exact":
            value, error, half_width = _exact(graph, threads), np.zeros(graph.n), 0.0
        elif plan.method == "pivots":
            value, error = _pivots(graph, plan.samples, plan.blocks, threads, score.seed, progress)
            half_width = plan.half_width
        else:
            value, error = _paths(graph, plan.samples, plan.blocks, score.seed, progress)
            half_width = plan.half_width
    finally:
        _converted.pop(graph, None)
    progress(1.0)
    reach = np.where(zeros, 0.0, half_width)
    return Estimate(
        parties=graph.parties,
        directed=graph.directed,
        betweenness=np.clip(value, 0.0, 1.0),
        lower=np.clip(value - reach, 0.0, 1.0),
        upper=np.clip(value + reach, 0.0, 1.0),
        std_error=error,
        method=plan.method,
        engine="networkit",
        samples=plan.samples,
        seed=score.seed,
        confidence=1.0 if plan.method == "exact" else score.confidence,
        stopped_because=plan.limit,
    )


def _exact(graph: Graph, threads: int) -> Floats:
    """Brandes (2001). Unnormalised, NetworKit counts ordered pairs in either kind of graph."""
    import networkit as nk

    with _only_here(threads):
        algorithm = nk.centrality.Betweenness(_convert(graph)).run()
    # rounded as a number of pairs: those are often whole, and stay so
    return snap(np.asarray(algorithm.scores())) / ((graph.n - 1) * (graph.n - 2))


def _pivots(
    graph: Graph, samples: int, blocks: int, threads: int, seed: int, progress: Progress
) -> tuple[Floats, Floats]:
    """Mean and standard error of sampled sources. Shapes (n,), (n,).

    NetworKit tells no variance, so it comes from the scatter of the blocks about their side's mean.
    """
    sides = 2 if graph.directed else 1
    sizes = [_shares(samples // sides, blocks // sides) for _ in range(sides)]
    seeds = iter(_seeds(seed, blocks))
    mean, variance, done = np.zeros(graph.n), np.zeros(graph.n), 0
    for side, shares in enumerate(sizes):
        total, squares, drawn = np.zeros(graph.n), np.zeros(graph.n), sum(shares)
        for draws in shares:
            x = _sources(graph, draws, threads, next(seeds), backwards=bool(side))
            total += draws * x
            squares += draws * x**2
            done += draws
            progress(done / samples)
        scatter = np.maximum(squares - total**2 / drawn, 0.0) / max(len(shares) - 1, 1)
        mean += total / drawn / sides
        variance += scatter / drawn / sides**2
    return snap(mean), np.sqrt(variance)


def _sources(graph: Graph, draws: int, threads: int, seed: int, *, backwards: bool) -> Floats:
    """Mean over `draws` sources (at least 2) drawn with replacement, on Freeman's scale. Shape (n,)."""
    import networkit as nk

    with _only_here(threads, seed):
        algorithm = nk.centrality.EstimateBetweenness(
            _convert(graph, backwards=backwards), draws - 1, normalized=False, parallel=threads > 1
        ).run()
    per_pair = (draws - 1) / draws / ((graph.n - 1) * (graph.n - 2))
    scores = np.asarray(algorithm.scores())
    mean: Floats = scores * per_pair
    return mean


def _paths(graph: Graph, samples: int, blocks: int, seed: int, progress: Progress) -> tuple[Floats, Floats]:
    """Mean and standard error of sampled shortest paths. Shapes (n,), (n,)."""
    dimension = path_dimension(graph)
    hits, done = np.zeros(graph.n), 0
    for draws, block_seed in zip(_shares(samples, blocks), _seeds(seed, blocks), strict=True):
        hits += _path_hits(graph, draws, dimension, block_seed)
        done += draws
        progress(done / samples)
    # n(n-1) ordered pairs can be drawn, (n-1)(n-2) do not end in the party
    share, scale = hits / samples, graph.n / (graph.n - 2)
    return share * scale, np.sqrt(share * (1 - share) / samples) * scale


def _path_hits(graph: Graph, draws: int, dimension: int, seed: int) -> Floats:
    """How many of `draws` shortest paths passed through each party. Shape (n,), whole numbers."""
    import networkit as nk

    # The library takes a width, not a number: draws = ceil((dimension - ln delta) / width**2). Half a draw less
    # keeps the rounding up away from the next number.
    delta = 0.5
    width = float(np.sqrt((dimension - np.log(delta)) / (draws - 0.5)))
    with _only_here(1, seed):
        algorithm = nk.centrality.ApproxBetweenness(_convert(graph), width, delta, 1.0)
        algorithm.run()
    if algorithm.numberOfSamples() != draws:
        raise RuntimeError(f"NetworKit drew {algorithm.numberOfSamples()} paths instead of {draws}")
    hits: Floats = np.rint(np.asarray(algorithm.scores()) * draws)
    return hits


def path_dimension(graph: Graph) -> int:
    """floor(log2(vertex diameter - 2)) + 1 as NetworKit estimates it, read off the size of a crude sample.

    An upper bound, hence of use in a guarantee, in undirected graphs only. Costs one breadth-first search per
    component there, and one per party without in-arcs in directed graphs. Of directed graphs with lengths the
    library makes a RuntimeError.
    """
    import networkit as nk

    with _only_here(1, 0):
        crude = nk.centrality.ApproxBetweenness(_convert(graph), 1.0, 0.5, 1.0)
        crude.run()
    # ceil(dimension + ln 2)
    return int(crude.numberOfSamples()) - 1


def seconds_per_source(graph: Graph, threads: int, at_least: float = 0.3) -> float:
    """Measured wall seconds per source on `threads` threads, from sources drawn for about `at_least` seconds."""
    _convert(graph)
    sides = 2 if graph.directed else 1
    draws = 2 * threads
    while True:
        start = time.perf_counter()
        for side in range(sides):
            _sources(graph, draws, threads, seed=0, backwards=bool(side))
        taken = time.perf_counter() - start
        if taken >= at_least:
            return taken / (draws * sides)
        draws *= 2


def seconds_per_path(graph: Graph, dimension: int, at_least: float = 0.3) -> float:
    """Measured wall seconds per sampled path on one thread, the search for the diameter shared out included."""
    draws = 16
    while True:
        start = time.perf_counter()
        _path_hits(graph, draws, dimension, seed=0)
        taken = time.perf_counter() - start
        if taken >= at_least:
            return taken / draws
        draws *= 2


def _convert(graph: Graph, *, backwards: bool = False) -> Any:
    """The graph as NetworKit's; kept until `run` is through with it, because the plan's probe needs it too."""
    import networkit as nk

    if graph not in _converted:
        tail = np.repeat(np.arange(graph.n, dtype=np.uint64), np.diff(graph.out_ptr))
        head = graph.out_adj.astype(np.uint64)
        length = np.ones(graph.arcs) if graph.out_lengths is None else graph.out_lengths.astype(np.float64)
        if not graph.directed:
            # NetworKit adds the other direction itself
            once = tail < head
            tail, head, length = tail[once], head[once], length[once]
        weighted = graph.out_lengths is not None
        _converted[graph] = [
            nk.GraphFromCoo((length, (tail, head)), n=graph.n, weighted=weighted, directed=graph.directed)
        ]
    kept = _converted[graph]
    if backwards and len(kept) == 1:
        kept.append(nk.graphtools.transpose(kept[0]))
    return kept[1 if backwards else 0]


@contextmanager
def _only_here(threads: int, seed: int | None = None) -> Iterator[None]:
    """One computation at a time in this process, with its own threads and seed; the threads are put back."""
    import networkit as nk

    with _one_at_a_time:
        before = nk.engineering.getMaxNumberOfThreads()
        nk.engineering.setNumberOfThreads(threads)
        if seed is not None:
            nk.engineering.setSeed(seed, False)
        try:
            yield
        finally:
            nk.engineering.setNumberOfThreads(before)


def _seeds(seed: int, blocks: int) -> list[int]:
    return [int(word) for word in np.random.SeedSequence(seed).generate_state(blocks, np.uint64)]


def _shares(total: int, parts: int) -> list[int]:
    """`total` split into `parts` whole numbers that differ by at most one."""
    return [total // parts + (part < total % parts) for part in range(parts)]
