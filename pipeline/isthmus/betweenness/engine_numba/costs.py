"""What this engine can offer for one graph: time from a short probe, memory from formulas, widths from a pilot."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from typing import TypeVar

import numpy as np
import polars as pl
from scipy.special import ndtri

from isthmus.betweenness.engine_numba import blocks, exact, paths, pivots
from isthmus.betweenness.engine_numba.reductions import Reduced
from isthmus.betweenness.plan import Plan, spell_bytes, spell_seconds
from isthmus.cluster import Here
from isthmus.errors import SettingsError
from isthmus.graph import Graph
from isthmus.settings import Score

__all__ = ["planner"]

Task = TypeVar("Task")
Result = TypeVar("Result")

# Below this many arc visits in all, exact takes a fraction of a second, and a probe would cost more than it tells.
TINY = 20_000_000
NOMINAL_ARCS_PER_SECOND = {False: 1e8, True: 5e6}
# So many times over the time allowed, one block is enough to know.
HOPELESS = 4
# Probes grow until they take about so long.
PROBE_SECONDS = 0.3
# Half-widths come out at this many z * standard error (benchmarks/README.md): pivots pay for unknown variances.
PIVOTS_OVER_LIMIT = 1.5


def planner(graph: Graph, score: Score, threads: int, memory_bytes: int) -> _Planner:
    """Offers of this engine for one graph; see `plan.Planner`."""
    return _Planner(graph, score, threads, memory_bytes)


class _Planner:
    """Offers of the engine `numba` for one graph."""

    def __init__(self, graph: Graph, score: Score, threads: int, memory_bytes: int) -> None:
        self.graph, self.score, self.threads, self.memory = graph, score, threads, memory_bytes
        self.weighted = graph.out_lengths is not None
        if self.weighted and score.max_hops:
            raise SettingsError(
                'score.max_hops counts arcs, so it cannot be combined with graph.distance = "contacts" or "amount"; '
                'set max_hops = 0 or distance = "hops"'
            )
        self.budget = score.minutes * 60
        self.tiny = graph.n * (graph.n + graph.arcs) <= TINY
        self.trivial = graph.n < 3 or graph.arcs == 0
        # two-sided normal quantile for n statements at once: no interval can be narrower than z * standard error
        self.z = float(-ndtri((1 - score.confidence) / (2 * max(graph.n, 1))))

    def exact(self) -> Plan:
        """All sources, in lanes."""
        n, arcs = self.graph.n, self.graph.arcs
        lanes, threads, needed = self._fit("exact", lambda lanes: exact.bytes_per_thread(n, arcs, lanes, self.weighted))
        left = ""
        if self.tiny:
            seconds = n * (n + arcs) / NOMINAL_ARCS_PER_SECOND[self.weighted]
        else:
            _warm_up("exact", self.graph, self.score)
            job = self._job(lanes)
            reduced, work = blocks.load_exact(job)
            left = _what_is_left(reduced, self.graph)
            seconds = 0.0  # and so it stays where structure settles everything
            if work.blocks:
                each, _ = _probe(blocks.exact_block, [(job, work.blocks // 2)], 1, job)
                seconds = work.blocks * each / threads
            if work.blocks and seconds < HOPELESS * self.budget:
                # from the middle of equal stretches: sources at one end of the numbering reach more than at the other;
                # many of them where blocks are short, or starting the threads would count for more than the blocks
                stretches = min(work.blocks, max(4 * threads, int(PROBE_SECONDS / each)))
                tasks = [(job, (2 * at + 1) * work.blocks // (2 * stretches)) for at in range(stretches)]
                each, _ = _probe(blocks.exact_block, tasks, threads, job)
                seconds = work.blocks * each
        said = f"exact takes about {spell_seconds(seconds)} on {threads} thread{'s' if threads > 1 else ''}{left}"
        if seconds > self.budget:
            said += f", longer than the {self.score.minutes:.3g} min allowed, and has no use when stopped half-way"
        return self._plan("exact", n, 0.0, "exact", said, seconds, needed, threads, lanes)

    def pivots(self) -> Plan:
        """Sampled sources without replacement."""
        n, arcs = self.graph.n, self.graph.arcs
        lanes, threads, needed = self._fit(
            "pivots", lambda lanes: pivots.bytes_per_thread(n, arcs, lanes, self.weighted)
        )
        if self.trivial:
            return self._plan("pivots", n, 0.0, "exact", "there is nothing to sample", 0.0, needed, threads, lanes)
        _warm_up("pivots", self.graph, self.score)
        job = self._job(lanes)
        sources = blocks.load_pivots(job)
        draws = min(pivots.BLOCK, n)
        alone, (pilot,) = _probe(blocks.pivots_block, [(job, 0, draws)], 1, job)
        each = alone / threads / draws
        if alone < PROBE_SECONDS:
            longer = min(4 * draws, n)  # as blocks become, when there are many draws
            together, (pilot, *_) = _probe(blocks.pivots_block, [(job, 0, longer)] * threads, threads, job)
            each, draws = together / longer, longer
        mean = pilot.sums / draws
        spread = np.maximum(pilot.moments[:, 9] / draws - mean**2, 0.0) * sources.scale.factor**2
        worst = math.sqrt(float(spread.max(initial=0.0)))

        def half_width(samples: int) -> float:
            left = max(1 - samples / n, 0.0)
            return PIVOTS_OVER_LIMIT * self.z * worst * math.sqrt(left / samples)

        return self._sampled("pivots", "sources", n, each, half_width, needed, threads, lanes)

    def paths(self) -> Plan:
        """Sampled shortest paths."""
        if self.weighted:
            raise SettingsError(
                'method = "paths" of engine = "numba" searches by hops; with graph.distance = "contacts" or "amount" '
                'use method = "pivots" or "exact"'
            )
        n = self.graph.n
        # the graph renumbered, what is known of each party, and what finding that out takes: most where a directed
        # graph has no cycles, for its condensation is then another copy of it
        base = (72 if self.graph.directed else 32) * self.graph.arcs + 90 * n
        _, threads, needed = self._fit("paths", lambda _: paths.bytes_per_thread(n), base)
        if self.trivial:
            return self._plan("paths", 1, 0.0, "exact", "there is nothing to sample", 0.0, needed, threads, paths.MOST)
        _warm_up("paths", self.graph, self.score)
        job = self._job(0)
        blocks.load_paths(job)
        pairs, each, size = paths.FEWEST, 0.0, 0
        while True:
            tasks = [(job, at * pairs, pairs) for at in range(threads)]
            each, (pilot, *_) = _probe(blocks.paths_block, tasks, threads, job)
            size = size or paths.block_size(pilot.visited, pairs)
            if each >= PROBE_SECONDS or pairs >= paths.MOST:
                break
            pairs *= 2
        share = (float(pilot.counts.max(initial=0)) + 1) / pairs

        def half_width(samples: int) -> float:
            return self.z * math.sqrt(share * max(1 - share, 0.0) / samples) * n / (n - 2)

        return self._sampled("paths", "pairs", 0, each / pairs, half_width, needed, threads, size)

    def _sampled(
        self,
        method: str,
        unit: str,
        population: int,
        each: float,
        half_width: Callable[[int], float],
        needed: int,
        threads: int,
        lanes: int,
    ) -> Plan:
        """How many draws to expect, which rule will end them, and what they promise."""
        score = self.score
        fits = max(1, int(self.budget / each))
        wishes = [(fits, "minutes")]
        if population:
            wishes.append((population, "samples"))
        if score.samples:
            wishes.append((score.samples, "samples"))
        if score.half_width:
            wishes.append((_fewest(half_width, score.half_width, fits), "half_width"))
        samples, limit = min(wishes, key=lambda wish: wish[0])
        promised = half_width(samples)
        why = {
            "samples": "as asked" if score.samples else "every source there is",
            "half_width": "enough for the half_width asked for",
            "minutes": f"as many as fit {score.minutes:.3g} min",
        }[limit]
        sooner = f", sooner if the first {score.top} are settled" if score.top else ""
        said = (
            f"{samples:,} {unit} ({why}{sooner}) take about {spell_seconds(samples * each)}, and "
            f"the widest interval is expected to be about ±{promised:.2g}"
        )
        return self._plan(method, samples, promised, limit, said, samples * each, needed, threads, lanes)

    def _fit(self, method: str, each: Callable[[int], int], base: int = 0) -> tuple[int, int, int]:
        """Lanes, threads and bytes within the memory: fewer threads first, then fewer lanes."""
        graph = self.graph
        arc = 12 if self.weighted else 4
        # the graph itself and its reverse, a renumbered copy, and what building that copy takes
        base = (
            base or 2 * (2 if graph.directed else 1) * (arc * graph.arcs + 8 * graph.n) + 16 * graph.arcs + 80 * graph.n
        )
        choices: Sequence[int] = (1,) if self.weighted else (64, 32, 16, 8)
        for lanes in choices:
            one = max(each(lanes), 1)
            threads = min(self.threads, (self.memory - base) // one)
            if threads >= 1:
                return lanes, int(threads), int(base + threads * one)
        raise SettingsError(
            f"{method} needs {spell_bytes(base + each(choices[-1]))} for {graph.n:,} parties and {graph.ties:,} ties, "
            f"more than run.memory = {spell_bytes(self.memory)}; raise run.memory or shorten window.days"
        )

    def _job(self, lanes: int) -> blocks.Job:
        return blocks.job_for(self.graph, lanes, self.score)

    def _plan(
        self,
        method: str,
        samples: int,
        half_width: float,
        limit: str,
        reason: str,
        seconds: float,
        needed: int,
        threads: int,
        lanes: int,
    ) -> Plan:
        return Plan(
            engine="numba",
            method=method,
            samples=samples,
            half_width=half_width,
            limit=limit,
            reason=reason,
            predicted_seconds=seconds,
            predicted_bytes=needed,
            threads=threads,
            blocks=0,
            lanes=lanes,
        )


def _probe(
    function: Callable[[Task], Result], tasks: Sequence[Task], threads: int, job: blocks.Job
) -> tuple[float, list[Result]]:
    """Measured wall seconds per task, with so many at once, and the results."""
    start = time.perf_counter()
    results = list(Here(threads).stream(function, tasks, job.halt))
    return (time.perf_counter() - start) / len(tasks), results


def _what_is_left(reduced: Reduced, graph: Graph) -> str:
    """What structure spares the sweeps, for people."""
    told = {
        "folded": "hanging trees {:,} parties",
        "blocks_settled": "cliques between articulation points {:,}",
        "twins_merged": "twins {:,}",
    }
    parts = [text.format(reduced.gains[key]) for key, text in told.items() if reduced.gains.get(key)]
    if not parts:
        return ""
    left = f"{reduced.arrays.n:,} of {graph.n:,} parties, {reduced.arrays.arcs:,} of {graph.arcs:,} arcs"
    return f" (taken off: {', '.join(parts)}; left: {left})"


def _fewest(half_width: Callable[[int], float], wanted: float, most: int) -> int:
    """The fewest samples that promise the width, by bisection; `most` when even those do not."""
    low, high = 1, most
    while low < high:
        middle = (low + high) // 2
        if half_width(middle) <= wanted:
            high = middle
        else:
            low = middle + 1
    return high


def _warm_up(method: str, graph: Graph, score: Score) -> None:
    """Have a method's kernels compiled, or loaded, before the clock runs: on a path of four parties."""
    strength = np.ones(3) if graph.out_lengths is not None else None
    parties = pl.Series("party", list("abcd"))
    small = Graph.from_arcs(parties, np.arange(3), np.arange(1, 4), strength, directed=graph.directed)
    job = blocks.job_for(small, 1 if strength is not None else 64, score)
    if method == "exact":
        blocks.exact_block((job, 0))
    elif method == "pivots":
        blocks.pivots_block((job, 0, 4))
    else:
        blocks.paths_block((job, 0, 16))
    blocks.forget(job)
