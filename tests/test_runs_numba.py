"""Runs of the engine `numba`: the same bits on any threads, resumed, repeated, side by side; and Ctrl-C."""

from __future__ import annotations

import itertools
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np
import psutil
import pytest

from isthmus.betweenness import Estimate, betweenness, make_plan, measure
from isthmus.betweenness.engine_numba import blocks, engine, exact, paths, pivots
from isthmus.betweenness.engine_numba.sequences import PivotEvidence
from isthmus.betweenness.engine_numba.stopping import Rules, every_block, planned_looks, watch
from isthmus.cluster import Here
from isthmus.graph import Graph
from isthmus.settings import Score
from kernel_graphs import scattered, undirected

MEMORY = 2**34
SCORES = {
    "exact": Score(method="exact"),
    "pivots": Score(method="pivots", samples=300, top=0),
    "pivots, top": Score(method="pivots", top=3),
    "paths": Score(method="paths", samples=5 * paths.MOST + 7, top=0),
    "paths, half_width": Score(method="paths", half_width=0.0035, top=0),
}


@pytest.fixture(params=["directed", "undirected", "lengths"])
def graph(request: pytest.FixtureRequest, build: Any, monkeypatch: pytest.MonkeyPatch) -> Graph:
    """Some hundred parties, and blocks so small that every method has several."""
    monkeypatch.setattr(exact, "BLOCK_WORK", 1)
    arcs = scattered(700, 2000, 8, 1.3)
    if request.param == "undirected":
        return build(700, undirected(arcs), False)
    return build(700, arcs, True, [1 + i % 7 for i in range(len(arcs))] if request.param == "lengths" else None)


@pytest.fixture(params=SCORES)
def score(request: pytest.FixtureRequest, graph: Graph) -> Score:
    if graph.out_lengths is not None and "paths" in request.param:
        pytest.skip("paths are drawn by hops")
    return SCORES[request.param]


def same(one: Estimate, two: Estimate) -> bool:
    columns = ("betweenness", "lower", "upper", "std_error")
    facts = ("samples", "stopped_because", "confidence", "method")
    return all(getattr(one, c).tobytes() == getattr(two, c).tobytes() for c in columns) and all(
        getattr(one, fact) == getattr(two, fact) for fact in facts
    )


def test_any_number_of_threads_gives_the_same_bits(graph: Graph, score: Score) -> None:
    plan = make_plan(graph, score, 5, MEMORY)
    one, two, five = (measure(graph, plan, score, threads) for threads in (1, 2, 5))
    assert plan.threads == 5
    assert same(one, two)
    assert same(one, five)


def test_sampled_runs_are_what_the_parts_give(graph: Graph, score: Score) -> None:
    """By the parts themselves, stopped and resumed after some of the blocks, which were made elsewhere."""
    plan = make_plan(graph, score, 2, MEMORY)
    whole = measure(graph, plan, score)
    job = blocks.job_for(graph, plan.lanes, score)
    rules = Rules(score.samples, score.half_width, score.top, score.minutes)
    if score.method == "exact":
        reduced, work = blocks.load_exact(job)
        assert work.blocks > 3
        made = {index: blocks.exact_block((job, index)) for index in reversed(range(work.blocks))}
        pairs = exact.merge(reduced, work, (made[index] for index in range(work.blocks)))
        np.testing.assert_allclose(whole.betweenness * (graph.n - 1) * (graph.n - 2), pairs, rtol=1e-10)
        assert (whole.lower == whole.upper).all()
        return
    if score.method == "pivots":
        most = score.samples or graph.n
        tasks = [(job, *at) for at in pivots.plan_blocks(most)]
        evidence: Any = PivotEvidence(graph.n, blocks.load_pivots(job).scale, 1 - score.confidence, score.samples)
        looks = every_block(pivots.plan_blocks(most), most)

        def add(part: pivots.PivotPartial) -> None:
            evidence.add(part.draws, part.moments[:, :9], part.sums, part.moments[:, 9])

        elsewhere = {task: blocks.pivots_block(task) for task in reversed(tasks)}
    else:
        count = -(-whole.samples // plan.lanes)
        tasks = [(job, *at) for at in itertools.islice(paths.plan_blocks(plan.lanes, score.samples), count)]
        tally = paths.Tally.empty(graph.n)
        evidence, add = paths.PathEvidence(blocks.load_paths(job), tally, 1 - score.confidence), tally.add
        looks = planned_looks(rules, plan.lanes)
        elsewhere = {task: blocks.paths_block(task) for task in reversed(tasks)}
    assert len(tasks) > 2
    for task in tasks[:2]:  # before the night was cut short
        add(elsewhere[task])
    verdict = watch(evidence, (add(elsewhere[task]) for task in tasks[2:]), looks, rules)
    assert verdict.samples == whole.samples
    if whole.samples < graph.n or score.method == "paths":
        assert verdict.bounds.estimate.tobytes() == whole.betweenness.tobytes()
        assert verdict.bounds.lower.tobytes() == whole.lower.tobytes()
        assert verdict.bounds.upper.tobytes() == whole.upper.tobytes()


@pytest.mark.parametrize("method", ["pivots", "paths"])
def test_a_night_that_the_clock_stopped_is_repeated(build: Any, monkeypatch: pytest.MonkeyPatch, method: str) -> None:
    """With the place where it was stopped kept in the plan; the second time the clock stands still, and then races."""
    graph = build(700, scattered(700, 2000, 8, 1.3), True)
    score = Score(method=method, top=0, minutes=1.0, samples=30 * paths.MOST if method == "paths" else 0)
    plan = make_plan(graph, score, 2, MEMORY)

    def at_pace(seconds: float) -> Estimate:
        calls = itertools.count()
        monkeypatch.setattr(engine, "watch", partial(watch, clock=lambda: next(calls) * seconds))
        return measure(graph, kept, score)

    kept = plan
    stopped = at_pace(9.0)
    assert stopped.stopped_because == "minutes"
    assert stopped.samples > (plan.lanes if method == "paths" else pivots.BLOCK)
    kept = replace(plan, reached=stopped.samples)
    assert same(at_pace(0.0), stopped)
    assert same(at_pace(1e6), stopped)


@pytest.mark.parametrize("directed", [True, False])
def test_equal_parties_of_a_fully_sampled_run_are_equal(build: Any, directed: bool) -> None:
    """All sources drawn is exact: no width, and no rank by the order in which floats were added."""
    arcs = [(i, (i + step) % 31) for i in range(31) for step in (1, 5, 8)]
    found = betweenness(build(31, arcs, directed), method="pivots")
    assert (found.samples, found.stopped_because) == (31, "exact")
    assert len(set(found.betweenness)) == 1
    assert set(found.frame(top=3)["top"]) == {"open"}
    wanted = betweenness(build(31, arcs, directed), method="exact")
    assert (found.betweenness == wanted.betweenness).all()


def test_runs_side_by_side(build: Any) -> None:
    """In a notebook or a service: the one that ends first leaves the others their graphs."""
    made = [build(300 + i, scattered(300 + i, 1200, i), True) for i in range(3)]
    alone = [betweenness(graph, method="pivots", top=0) for graph in made]
    with ThreadPoolExecutor(6) as pool:
        found = list(pool.map(lambda graph: betweenness(graph, method="pivots", top=0, threads=1), made * 8))
    assert all(same(found[i], alone[i % 3]) for i in range(24))


def test_nothing_is_kept_after_a_run(build: Any) -> None:
    blocks.forget()
    for method in ("exact", "pivots", "paths"):
        betweenness(build(100, scattered(100, 300, 1), True), method=method, samples=100)
    assert blocks._prepared == {}


def test_an_error_in_the_progress_ends_the_run_and_its_threads(build: Any) -> None:
    import threading

    graph = build(100, scattered(100, 300, 1), True)
    before = threading.active_count()
    for method in ("exact", "pivots", "paths"):
        with pytest.raises(ZeroDivisionError):
            betweenness(graph, method=method, threads=2, samples=200_000, progress=lambda share: 1 / (share == 0))
        assert threading.active_count() == before


def test_closing_a_stream_drops_what_has_not_begun() -> None:
    began: list[int] = []

    def task(at: int) -> int:
        began.append(at)
        return at

    stream: Iterator[int] = Here(2).stream(task, range(1000))
    assert [next(stream), next(stream)] == [0, 1]
    stream.close()  # type: ignore[attr-defined]
    assert len(began) < 20


LONG = """
import numpy as np, polars as pl, sys
import isthmus
n = 25_000
tail, head = np.random.default_rng(1).integers(0, n, (2, 8 * n))
parties = pl.Series("party", [f"{i:06d}" for i in range(n)])
strength = np.random.default_rng(2).integers(1, 9, 8 * n).astype(float)
graphs = [isthmus.Graph.from_arcs(parties, tail, head, s, directed=True) for s in (None, strength)]
for graph, method in ((0, "exact"), (0, "pivots"), (0, "paths"), (1, "exact")):
    said = []
    def heard(share):
        if share > 0 and not said:
            said.append(print("going", method, flush=True))
    try:
        isthmus.betweenness(graphs[graph], method=method, minutes=600, threads=2, top=0, progress=heard)
        print("done", flush=True)
    except KeyboardInterrupt:
        print("stopped", method, flush=True)
"""


def test_ctrl_c_ends_a_long_run_within_two_seconds() -> None:
    """Each would take from a minute to ten hours here; the process lives on, as a notebook's would.

    Two seconds of both threads, in processor time: others may have the processors meanwhile.
    """
    started = subprocess.Popen([sys.executable, "-c", LONG], stdout=subprocess.PIPE, text=True)
    assert started.stdout is not None
    child = psutil.Process(started.pid)
    try:
        for method in ("exact", "pivots", "paths", "exact"):
            assert started.stdout.readline() == f"going {method}\n"
            time.sleep(0.2)
            began, used = time.monotonic(), child.cpu_times()
            started.send_signal(signal.SIGINT)
            assert started.stdout.readline() == f"stopped {method}\n"
            now = child.cpu_times()
            assert now.user + now.system - used.user - used.system < 2 * 2
            assert time.monotonic() - began < 30
        assert started.wait(10) == 0
    finally:
        started.kill()
        started.wait()
        started.stdout.close()
