"""Betweenness: exact, sampled sources, sampled paths; the plan that chooses; the intervals; the ranks.

No randomness and no kernel is seen beyond this room: what leaves it is one `Estimate`.
"""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module

from pydantic import ValidationError

from isthmus.betweenness.checkpoint import Checkpoint
from isthmus.betweenness.estimate import Estimate
from isthmus.betweenness.plan import Plan, make_plan
from isthmus.cluster import Door
from isthmus.errors import SettingsError
from isthmus.graph import Graph
from isthmus.settings import Engine, Method, Run, Score

__all__ = ["Checkpoint", "Estimate", "Plan", "betweenness", "make_plan", "measure"]

Progress = Callable[[float], None]


def betweenness(
    graph: Graph,
    *,
    method: Method = "auto",
    engine: Engine = "numba",
    samples: int = 0,
    half_width: float = 0.0,
    confidence: float = 0.95,
    top: int = 100,
    minutes: float = 30.0,
    max_hops: int = 0,
    seed: int = 1,
    threads: int = 0,
    memory: str = "16GiB",
    progress: Progress | None = None,
) -> Estimate:
    """Betweenness of every party, with an interval that holds for all of them at once at `confidence`.

    The keys mean what they mean in the settings' [score] and [run]: sampling stops at the first of `samples` drawn,
    every interval at least as narrow as `half_width` (in shares of pairs, 0..1), the first `top` parties settled, and
    `minutes` over; 0 switches a rule off. `threads` = 0 takes all cores. `progress` hears the share done, 0..1. The
    same seed gives the same bits for any number of threads (engine numba), unless the clock stopped the sampling.

    Sources. Exact: Brandes 2001, its sources in lanes after Then et al. 2014, the graph reduced after Sariyuce et al.
    2013. Pivots: Brandes and Pich 2007, bounded by betting (Waudby-Smith and Ramdas 2023). Paths: Riondato and
    Kornaropoulos 2016, found from both ends (Borassi and Natale 2016), bounded by Clopper and Pearson 1934.

    Raises SettingsError when a value is impossible, the method cannot take the graph, or nothing fits the memory.
    """
    try:
        score = Score(
            method=method,
            engine=engine,
            samples=samples,
            half_width=half_width,
            confidence=confidence,
            top=top,
            minutes=minutes,
            max_hops=max_hops,
            seed=seed,
        )
        run = Run(threads=threads, memory=memory)
    except ValidationError as error:
        faults = (f"{fault['loc'][-1]} = {fault['input']!r}: {fault['msg']}" for fault in error.errors())
        raise SettingsError("betweenness: " + "; ".join(faults)) from None
    plan = make_plan(graph, score, run.threads, run.memory_bytes)
    return measure(graph, plan, score, run.threads, progress)


def measure(
    graph: Graph,
    plan: Plan,
    score: Score,
    threads: int = 0,
    progress: Progress | None = None,
    door: Door | None = None,
    checkpoint: Checkpoint | None = None,
) -> Estimate:
    """Do what `plan` says, with the seed and the confidence of `score`.

    `plan` must have been made for this graph, or for one with the same parties and ties. `threads` > 0 lowers the
    plan's number of threads. `door`: where blocks of work run, for an engine that cuts its work in blocks; by default
    on threads in this process. `checkpoint`: what a killed run of the same plan left, and where this one keeps its own;
    the engine `networkit` has no use for it.
    """
    # by name, so that importing isthmus imports no engine
    engine = import_module(f"isthmus.betweenness.engine_{plan.engine}")
    estimate: Estimate = engine.run(graph, plan, score, threads, progress or (lambda _: None), door, checkpoint)
    return estimate
