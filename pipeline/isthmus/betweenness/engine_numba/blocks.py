"""Blocks of work as tasks that run anywhere: a small description in, partial sums out.

A task names the snapshot's folder, and the process that runs it maps the graph from there and prepares it once; the
graph itself never travels. In the process that planned the night it is prepared already. A graph that was never saved
can only be worked on in this process.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeVar
from weakref import WeakValueDictionary

import numpy as np

from isthmus.betweenness.engine_numba.subgraphs import Bytes
from isthmus.errors import SettingsError
from isthmus.graph import Graph

if TYPE_CHECKING:
    from isthmus.betweenness.engine_numba import exact, paths, pivots
    from isthmus.betweenness.engine_numba.prepare import Prepared
    from isthmus.betweenness.engine_numba.reductions import Reduced
    from isthmus.settings import Score

__all__ = ["Job", "exact_block", "forget", "job_for", "load_exact", "load_paths", "load_pivots", "paths_block"]

Loaded = TypeVar("Loaded")


@dataclass(frozen=True)
class Job:
    """What all blocks of a run have in common. `graph`: the snapshot's folder and its time, or a name in memory.

    `stop` is one byte that blocks in this process watch; not 0: their results are not wanted any more.
    """

    graph: tuple[str, int]
    lanes: int
    max_hops: int
    seed: int
    stop: Bytes = field(default_factory=lambda: np.zeros(1, np.uint8), compare=False)

    def halt(self) -> None:
        """Have the blocks that run in this process come to an end."""
        self.stop[0] = 1


_lock = threading.RLock()
# Whoever measures a graph holds it; what was prepared holds it too, so that its name is not another graph's meanwhile.
_graphs: WeakValueDictionary[tuple[str, int], Graph] = WeakValueDictionary()
_prepared: dict[tuple[str, Job], tuple[Graph, Any]] = {}


def job_for(graph: Graph, lanes: int, score: Score) -> Job:
    """The job of one run; remembers the graph for blocks that run in this process."""
    if graph.folder is None:
        name = ("", id(graph))
    else:
        name = (str(graph.folder), (graph.folder / "graph.json").stat().st_mtime_ns)
    with _lock:
        _graphs[name] = graph
    return Job(name, lanes, score.max_hops, score.seed)


def forget(job: Job | None = None) -> None:
    """Drop what this process has prepared for the graph of a job, or for all; a run beside this one prepares anew."""
    with _lock:
        for key in [key for key in _prepared if job is None or key[1].graph == job.graph]:
            del _prepared[key]


def load_exact(job: Job) -> tuple[Reduced, exact.Plan]:
    """The reduced graph and its blocks."""
    from isthmus.betweenness.engine_numba import exact, reductions

    def prepare(graph: Graph) -> tuple[Reduced, exact.Plan]:
        exact.check_lengths(graph, job.max_hops)
        reduced = reductions.reduce(graph, max_hops=job.max_hops)
        return reduced, exact.make_plan(reduced, lanes=job.lanes, max_hops=job.max_hops)

    return _once("exact", job, prepare)


def load_pivots(job: Job) -> pivots.Sources:
    """The sources in the order of their draw."""
    from isthmus.betweenness.engine_numba import pivots

    return _once(
        "pivots",
        job,
        lambda graph: pivots.prepare_sources(graph, job.seed, lanes=job.lanes, max_hops=job.max_hops),
    )


def load_paths(job: Job) -> Prepared:
    """The graph as the searches see it."""
    from isthmus.betweenness.engine_numba import prepare

    def prepared(graph: Graph) -> Prepared:
        return prepare.prepare(
            graph.n,
            graph.out_ptr,
            graph.out_adj,
            graph.in_ptr,
            graph.in_adj,
            graph.directed,
            job.max_hops,
        )

    return _once("paths", job, prepared)


def exact_block(task: tuple[Job, int]) -> exact.Partial:
    """Task: (job, block)."""
    from isthmus.betweenness.engine_numba import exact

    job, index = task
    return exact.run_block(*load_exact(job), index, job.stop)


def pivots_block(task: tuple[Job, int, int]) -> pivots.PivotPartial:
    """Task: (job, first draw, draws)."""
    from isthmus.betweenness.engine_numba import pivots

    job, start, size = task
    return pivots.run_block(load_pivots(job), start, size, job.stop)


def paths_block(task: tuple[Job, int, int]) -> paths.Partial:
    """Task: (job, first pair, pairs)."""
    from isthmus.betweenness.engine_numba import paths

    job, start, size = task
    return paths.run_block(load_paths(job), job.seed, start, size, job.stop)


def _once(method: str, job: Job, prepare: Callable[[Graph], Loaded]) -> Loaded:
    """Prepare a job's graph the first time it is asked for; a worker keeps the last one only."""
    with _lock:
        if (method, job) not in _prepared:
            graph = _graphs.get(job.graph) or _open(job)
            _prepared[method, job] = graph, prepare(graph)
        loaded: Loaded = _prepared[method, job][1]
        return loaded


def _open(job: Job) -> Graph:
    from pathlib import Path

    folder, _ = job.graph
    if not folder:
        raise SettingsError(
            "this graph is only in memory, so other processes cannot work on it; save and open it first"
        )
    forget()
    return Graph.open(Path(folder))
