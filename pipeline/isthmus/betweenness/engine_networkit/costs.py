"""What NetworKit's methods cost on one graph: time from a short probe, memory from measured sizes."""

from __future__ import annotations

import math
from functools import cached_property

from isthmus.betweenness.engine_networkit import library as engine
from isthmus.betweenness.engine_networkit.bounds import Bound, certain_zeros, paths_bound, pivots_bound
from isthmus.betweenness.plan import Plan, spell_bytes, spell_seconds
from isthmus.errors import SettingsError
from isthmus.graph import Graph
from isthmus.settings import Score

__all__ = ["planner"]

# Below this many arc visits in all, exact takes about a second at most, and a probe would cost more than it tells.
TINY = 20_000_000
# Slower than any machine that was measured (26-38 million arcs a second; a tenth of that with lengths).
NOMINAL_ARCS_PER_SECOND = {False: 1e7, True: 2e6}
# Draws are made in blocks: progress, a place to stop, and a standard error. 32 give that error to within 13 %.
BLOCKS = 32
# A block needs two draws (the library divides by the number less one), a side two blocks, a directed graph two sides.
FEWEST_DRAWS = 8


def planner(graph: Graph, score: Score, threads: int, memory_bytes: int) -> _Planner:
    """Offers of this engine for one graph; see `plan.Planner`."""
    return _Planner(graph, score, threads, memory_bytes)


class _Planner:
    """Offers of the engine `networkit` for one graph."""

    def __init__(self, graph: Graph, score: Score, threads: int, memory_bytes: int) -> None:
        if score.max_hops:
            raise SettingsError('score.max_hops is not known to engine = "networkit"; set max_hops = 0')
        self.graph, self.score, self.memory = graph, score, memory_bytes
        self.budget = score.minutes * 60
        self.tiny = graph.n * (graph.n + graph.arcs) <= TINY
        self.threads = 1 if self.tiny else threads
        self.uncertain = int(graph.n - certain_zeros(graph).sum())

    def exact(self) -> Plan:
        """On one thread if that fits `minutes`, since only then are re-runs equal to the bit; else on all."""
        needed, threads = self._fit("exact", 1)
        seconds = self.graph.n * self._source_seconds(1)
        if seconds > self.budget and self.threads > 1:
            needed, threads = self._fit("exact", self.threads)
            seconds = self.graph.n * self._source_seconds(threads)
        said = f"exact takes about {spell_seconds(seconds)} on {_count(threads, 'thread')}"
        if threads > 1:
            said += ", where re-runs may differ in the last digits"
        if seconds > self.budget:
            said += f", longer than the {self.score.minutes:.3g} min allowed, and cannot be stopped half-way"
        return Plan(
            engine="networkit",
            method="exact",
            samples=self.graph.n,
            half_width=0.0,
            limit="exact",
            reason=said,
            predicted_seconds=seconds,
            predicted_bytes=needed,
            threads=threads,
            blocks=1,
        )

    def pivots(self) -> Plan:
        """Sampled sources, on all threads."""
        needed, threads = self._fit("pivots", self.threads)
        n = self.graph.n
        bound = pivots_bound(n, self.uncertain, self.score.confidence) if self.uncertain else Bound(0.0, 0.0)
        each = self._source_seconds(threads)
        samples, limit = self._samples(bound, each, most=n)
        sides = 2 if self.graph.directed else 1
        samples += samples % sides
        blocks = sides * min(BLOCKS // sides, samples // sides // 2)
        return self._sampled("pivots", "sources", samples, limit, bound, samples * each, needed, threads, blocks)

    def paths(self) -> Plan:
        """Sampled shortest paths, on one thread: each thread would draw a stream of its own."""
        if self.graph.directed and self.graph.out_lengths is not None:
            raise SettingsError(
                'method = "paths" of engine = "networkit" cannot take a directed graph with lengths; '
                'use method = "pivots" or "exact", or set graph.distance = "hops"'
            )
        needed, _ = self._fit("paths", 1)
        n, search = self.graph.n, self._diameter_seconds()
        if search > self.budget:
            raise SettingsError(
                f'method = "paths" of engine = "networkit" would search {spell_seconds(search)} for the diameter of '
                f'this graph before the first draw; use method = "pivots" or raise minutes'
            )
        if not self.uncertain:
            return self._sampled("paths", "paths", FEWEST_DRAWS, "samples", Bound(0.0, 0.0), 0.0, needed, 1, 1)
        dimension = 0 if self.graph.directed else self._dimension
        bound = paths_bound(n, self.uncertain, self.score.confidence, dimension)
        # Every block, and the crude sample before the first, searches for the diameter again.
        affordable = max(self.budget - 2 * search, 0.0)
        each = self._path_seconds(search)
        samples, limit = self._samples(bound, each, most=2 * n, budget=affordable)
        # Blocks fix the seeds, so nothing that is measured may set their number: a directed graph, where each would
        # search for the diameter again from many parties, gets one.
        blocks = 1 if self.graph.directed else min(BLOCKS, samples)
        seconds = samples * each + (blocks + 1) * search
        return self._sampled("paths", "paths", samples, limit, bound, seconds, needed, 1, blocks)

    def _samples(self, bound: Bound, each: float, *, most: int, budget: float | None = None) -> tuple[int, str]:
        """How many draws, and which limit says so.

        What fits `minutes` is rounded down to a power of two, so that a probe on a busier night gives the same
        number. `most` draws cost about as much as exact, so it caps what was not asked for.
        """
        fits = (self.budget if budget is None else budget) / each
        wishes = []
        if self.score.samples:
            wishes.append((self.score.samples, "samples"))
        if self.score.half_width:
            wishes.append((bound.samples(self.score.half_width), "half_width"))
        if not wishes:
            wishes.append((most, "samples"))
        wish, limit = min(wishes)
        if wish > fits:
            wish, limit = 2 ** int(math.log2(max(fits, 1))), "minutes"
        return max(wish, FEWEST_DRAWS), limit

    def _sampled(
        self,
        method: str,
        unit: str,
        samples: int,
        limit: str,
        bound: Bound,
        seconds: float,
        needed: int,
        threads: int,
        blocks: int,
    ) -> Plan:
        half_width = bound.half_width(samples)
        why = {
            "samples": "as asked" if self.score.samples else "beyond which exact would cost less",
            "half_width": "enough for the half_width asked for",
            "minutes": f"as many as fit {self.score.minutes:.3g} min",
        }[limit]
        said = (
            f"{samples:,} {unit} ({why}) take about {spell_seconds(seconds)} and promise all {self.uncertain:,} "
            f"parties that can lie between others ±{half_width:.2g}"
        )
        return Plan("networkit", method, samples, half_width, limit, said, seconds, needed, threads, blocks)

    def _fit(self, method: str, threads: int) -> tuple[int, int]:
        """Bytes, and the number of threads, at most `threads`, whose working space fits the memory.

        Sizes are upper bounds on what was measured on random graphs of 1-6 million arcs.
        """
        graph, weighted = self.graph, self.graph.out_lengths is not None
        arc = 16 if weighted else 8
        converted = 128 * graph.n + (2 if graph.directed else 1) * arc * graph.arcs
        building = 24 * graph.arcs
        copies = 2 if method == "pivots" and graph.directed else 1
        base = copies * converted + building
        each = (240 if weighted else 128) * graph.n + 8 * graph.arcs
        room = (self.memory - base) // each if each else threads
        if room < 1:
            raise SettingsError(
                f"{method} needs {spell_bytes(base + each)} for {graph.n:,} parties and {graph.ties:,} ties, more "
                f"than run.memory = {spell_bytes(self.memory)}; raise run.memory or shorten window.days"
            )
        threads = int(min(threads, room))
        return base + threads * each, threads

    def _source_seconds(self, threads: int) -> float:
        if self.tiny:
            return self._nominal
        if threads not in self._measured:
            self._measured[threads] = engine.seconds_per_source(self.graph, threads)
        return self._measured[threads]

    def _path_seconds(self, search: float) -> float:
        # a path costs less than a source; where the search for the diameter is dear, that must do
        if self.tiny or search > 1:
            return self._source_seconds(1)
        return engine.seconds_per_path(self.graph, self._dimension)

    def _diameter_seconds(self) -> float:
        if not self.graph.directed:
            return 0.0
        starts = int((self.graph.in_ptr[1:] == self.graph.in_ptr[:-1]).sum()) + 1
        return starts * self._source_seconds(1)

    @cached_property
    def _dimension(self) -> int:
        return engine.path_dimension(self.graph)

    @cached_property
    def _measured(self) -> dict[int, float]:
        return {}

    @property
    def _nominal(self) -> float:
        rate = NOMINAL_ARCS_PER_SECOND[self.graph.out_lengths is not None]
        return (self.graph.n + self.graph.arcs + 1) / rate


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}{'s' if number != 1 else ''}"
