"""From a plan to an estimate: prepares the graph, has blocks of work done behind a door, adds them up in order.

A block depends on nothing but its task, so any number of threads, processes or machines gives the same bits.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from time import monotonic
from typing import Any, TypeVar

import numpy as np

from isthmus.betweenness.checkpoint import Checkpoint
from isthmus.betweenness.engine_numba import blocks, exact, paths, pivots
from isthmus.betweenness.engine_numba.intervals import Bounds, Floats
from isthmus.betweenness.engine_numba.sequences import PivotEvidence
from isthmus.betweenness.engine_numba.stopping import Rules, Verdict, every_block, planned_looks, watch
from isthmus.betweenness.estimate import Estimate
from isthmus.betweenness.plan import Plan
from isthmus.betweenness.ranks import snap
from isthmus.cluster import Door, Here
from isthmus.graph import Graph
from isthmus.settings import Score

__all__ = ["run"]

Progress = Callable[[float], None]
Partial = TypeVar("Partial")


def run(
    graph: Graph,
    plan: Plan,
    score: Score,
    threads: int,
    progress: Progress,
    door: Door | None = None,
    checkpoint: Checkpoint | None = None,
) -> Estimate:
    """Measure as planned, behind `door` or on threads here. `progress` hears the share done, 0..1.

    With a checkpoint, goes on from the blocks that it holds, and keeps its own there.
    """
    door = door or Here(min(plan.threads, threads) if threads else plan.threads)
    progress(0.0)
    job = blocks.job_for(graph, plan.lanes, score)
    going = _Going(checkpoint)
    try:
        if graph.n < 3 or graph.arcs == 0:
            return _estimate(graph, plan, score, _nothing(graph.n), graph.n, "exact")
        if plan.method == "exact":
            return _exact(graph, plan, score, job, door, progress, going)
        method = _pivots if plan.method == "pivots" else _paths
        verdict = method(job, plan, score, door, progress, going)
        reason = "exact" if verdict.stopped_because == "settled" else verdict.stopped_because
        return _estimate(graph, plan, score, verdict.bounds, verdict.samples, reason)
    finally:
        blocks.forget(job)
        progress(1.0)


class _Going:
    """Where a run goes on from, and what it keeps on its way: what was added up, and the seconds that took."""

    def __init__(self, checkpoint: Checkpoint | None) -> None:
        self._checkpoint = checkpoint
        self._began = monotonic()
        self.kept: Any = None
        self.spent = 0.0
        if checkpoint and (kept := checkpoint.load()):
            self.kept, self.spent = kept

    def offer(self, state: object) -> None:
        if self._checkpoint:
            self._checkpoint.offer(lambda: (state, self.spent + monotonic() - self._began))


def _exact(
    graph: Graph, plan: Plan, score: Score, job: blocks.Job, door: Door, progress: Progress, going: _Going
) -> Estimate:
    reduced, work = blocks.load_exact(job)
    sums: exact.Sums = going.kept or exact.Sums.empty(reduced)
    parts = door.stream(blocks.exact_block, ((job, index) for index in range(sums.done, work.blocks)), job.halt)
    for _ in _each(parts, lambda part: sums.add(reduced, work, part)):
        going.offer(sums)
        progress(sums.done / work.blocks)
    pairs = exact.merge(reduced, work, (), sums)
    return _estimate(graph, plan, score, _certain(pairs), graph.n, "exact")


def _pivots(job: blocks.Job, plan: Plan, score: Score, door: Door, progress: Progress, going: _Going) -> Verdict:
    sources = blocks.load_pivots(job)
    n = sources.draws.size
    most = min(score.samples or n, n)
    rules = _rules(plan, score, most, n)
    alone = bool(score.samples) and not (score.half_width or score.top)
    evidence = PivotEvidence(n, sources.scale, 1 - score.confidence, horizon=most if alone else 0)
    if going.kept is not None:
        evidence = going.kept
        evidence.scale = sources.scale
    tasks = ((job, *block) for block in pivots.plan_blocks(most) if block[0] >= evidence.taken)
    partials = door.stream(blocks.pivots_block, tasks, job.halt)

    def add(part: pivots.PivotPartial) -> None:
        evidence.add(part.draws, part.moments[:, :9], part.sums, part.moments[:, 9])
        going.offer(evidence)

    looks = every_block(pivots.plan_blocks(most), most)
    verdict = watch(evidence, _each(partials, add), looks, rules, _share(progress, most), spent=going.spent)
    if verdict.samples == n:
        verdict = replace(verdict, bounds=_certain(verdict.bounds.estimate * ((n - 1) * (n - 2))))
    return verdict


def _paths(job: blocks.Job, plan: Plan, score: Score, door: Door, progress: Progress, going: _Going) -> Verdict:
    prepared = blocks.load_paths(job)
    rules = _rules(plan, score, score.samples, prepared.n)
    tally: paths.Tally = going.kept or paths.Tally.empty(prepared.n)
    evidence = paths.PathEvidence(prepared, tally, 1 - score.confidence)
    tasks = ((job, *block) for block in paths.plan_blocks(plan.lanes, score.samples, tally.taken))
    partials = door.stream(blocks.paths_block, tasks, job.halt)

    def add(part: paths.Partial) -> None:
        tally.add(part)
        going.offer(tally)

    looks = planned_looks(rules, plan.lanes)
    return watch(evidence, _each(partials, add), looks, rules, _share(progress, plan.samples), spent=going.spent)


def _rules(plan: Plan, score: Score, samples: int, parties: int) -> Rules:
    # where everybody is among the first, that is no reason to stop before what else was asked for
    top = 0 if score.top >= parties and (score.samples or score.half_width) else score.top
    return Rules(samples, score.half_width, top, score.minutes, repeat=plan.reached)


def _each(partials: Iterator[Partial], add: Callable[[Partial], None]) -> Iterator[None]:
    """Take the partial results one at a time; closing this closes them."""
    try:
        for partial in partials:
            add(partial)
            yield
    finally:
        partials.close()  # type: ignore[attr-defined]


def _share(progress: Progress, expected: int) -> Callable[[int, Bounds | None], None]:
    return lambda taken, _: progress(taken / max(expected, taken))


def _nothing(n: int) -> Bounds:
    return Bounds(*np.zeros((4, n)))


def _certain(pairs: Floats) -> Bounds:
    """Intervals without width, from ordered pairs. Rounded, for equal parties must not differ by the order of adding,
    and as a number of pairs: those are often whole, and stay so."""
    n = pairs.size
    value = np.clip(snap(pairs) / ((n - 1) * (n - 2)), 0.0, 1.0)
    return Bounds(value, value, value, np.zeros(n))


def _estimate(graph: Graph, plan: Plan, score: Score, bounds: Bounds, samples: int, reason: str) -> Estimate:
    return Estimate(
        parties=graph.parties,
        directed=graph.directed,
        betweenness=bounds.estimate,
        lower=bounds.lower,
        upper=bounds.upper,
        std_error=bounds.std_error,
        method=plan.method,
        engine="numba",
        samples=samples,
        seed=score.seed,
        confidence=1.0 if plan.method == "exact" else score.confidence,
        stopped_because=reason,
    )
