"""What the engine `numba` offers: which rule ends the draws, what fits the clock and the memory."""

from __future__ import annotations

import math
import time
from typing import Any

import numpy as np
import pytest

from isthmus.betweenness import betweenness, make_plan, measure
from isthmus.betweenness.engine_numba import costs, exact, paths, pivots
from isthmus.errors import SettingsError
from isthmus.graph import Graph
from isthmus.settings import Score
from kernel_graphs import scattered, undirected

MEMORY = 2**34
N = 300


@pytest.fixture
def graph(build: Any) -> Graph:
    return build(N, undirected(scattered(N, 900, 1)), False)


@pytest.fixture
def directed(build: Any) -> Graph:
    return build(N, scattered(N, 900, 1), True)


@pytest.fixture
def slow(monkeypatch: pytest.MonkeyPatch) -> None:
    """A machine on which a block of sources takes 64 s and a path a quarter: the clock of this one chooses nothing."""
    monkeypatch.setattr(costs, "TINY", 0)
    each = {"exact_block": 600.0, "pivots_block": 64.0, "paths_block": paths.FEWEST / 4}

    def probe(function: Any, tasks: list[Any], threads: int, job: Any) -> tuple[float, list[Any]]:
        return each[function.__name__] / threads, [function(task) for task in tasks]

    monkeypatch.setattr(costs, "_probe", probe)


class TestAuto:
    def test_tiny_is_exact(self, graph: Graph) -> None:
        plan = make_plan(graph, Score(), 2, MEMORY)
        assert (plan.method, plan.engine, plan.limit, plan.half_width) == ("exact", "numba", "exact", 0.0)

    def test_exact_when_it_fits(self, slow: None, graph: Graph) -> None:
        plan = make_plan(graph, Score(minutes=6.0), 2, MEMORY)
        assert (plan.method, plan.threads, plan.predicted_seconds) == ("exact", 2, 300.0)

    def test_the_narrower_promise_when_it_does_not(self, slow: None, graph: Graph) -> None:
        plan = make_plan(graph, Score(minutes=4.0), 2, MEMORY)
        # 240 s / (64 s / 64 draws / 2 threads): all 300 sources, so no width at all
        assert (plan.method, plan.samples, plan.half_width) == ("pivots", N, 0.0)
        plan = make_plan(graph, Score(minutes=0.5), 2, MEMORY)
        assert plan.reason.startswith("exact would take 5.0 min of the 0.5 min allowed")
        other = {"pivots": "paths", "paths": "pivots"}[plan.method]
        assert f"{other} would reach about" in plan.reason
        assert plan.half_width <= make_plan(graph, Score(method=other, minutes=0.5), 2, MEMORY).half_width

    def test_lengths_leave_pivots(self, slow: None, build: Any) -> None:
        arcs = scattered(N, 900, 1)
        weighted = build(N, arcs, True, [1 + i % 5 for i in range(len(arcs))])
        assert make_plan(weighted, Score(minutes=1.0), 1, MEMORY).method == "pivots"
        with pytest.raises(SettingsError, match='use method = "pivots" or "exact"'):
            make_plan(weighted, Score(method="paths"), 1, MEMORY)
        with pytest.raises(SettingsError, match="max_hops counts arcs"):
            make_plan(weighted, Score(max_hops=3), 1, MEMORY)


class TestSamples:
    @pytest.mark.parametrize("method", ["pivots", "paths"])
    def test_the_rule_that_ends_the_draws(self, slow: None, graph: Graph, method: str) -> None:
        def limit(**keys: Any) -> tuple[str, int]:
            plan = make_plan(graph, Score(method=method, **keys), 1, MEMORY)
            return plan.limit, plan.samples

        assert limit(samples=20) == ("samples", 20)
        assert limit(samples=10_000, minutes=1.0) == ("minutes", 60 if method == "pivots" else 240)
        rule, draws = limit(half_width=0.2, minutes=4.0)
        assert rule == "half_width"
        assert limit(half_width=0.1, minutes=4.0)[1] > draws

    def test_sources_are_never_more_than_there_are(self, graph: Graph) -> None:
        plan = make_plan(graph, Score(method="pivots", samples=10_000), 1, MEMORY)
        assert (plan.samples, plan.limit, plan.half_width) == (N, "samples", 0.0)

    @pytest.mark.parametrize("samples", [1, 2, 63, 64, 65, 299])
    @pytest.mark.parametrize("method", ["pivots", "paths"])
    def test_any_number_can_be_drawn(self, graph: Graph, directed: Graph, method: str, samples: int) -> None:
        for each in (graph, directed):
            score = Score(method=method, samples=samples, top=0)
            plan = make_plan(each, score, 1, MEMORY)
            estimate = measure(each, plan, score)
            assert plan.samples == estimate.samples == samples
            assert estimate.stopped_because == "samples"
            assert np.isfinite(estimate.std_error).all()

    @pytest.mark.parametrize(("method", "wanted"), [("pivots", 0.06), ("paths", 0.02)])
    def test_promised_width_is_met(self, directed: Graph, method: str, wanted: float) -> None:
        score = Score(method=method, half_width=wanted, top=0)
        plan = make_plan(directed, score, 1, MEMORY)
        estimate = measure(directed, plan, score)
        assert plan.half_width <= wanted
        assert estimate.stopped_because == "half_width"
        assert estimate.half_widths.max() <= wanted
        # a look comes too late by a block, or by a quarter of the draws before it
        assert (
            plan.samples / 3 < estimate.samples < 3 * plan.samples + (plan.lanes if method == "paths" else pivots.BLOCK)
        )


class TestMemory:
    def test_fewer_threads_then_fewer_lanes_then_refused(self, graph: Graph) -> None:
        score = Score(method="exact")
        one, two = (make_plan(graph, score, threads, MEMORY).predicted_bytes for threads in (1, 2))
        assert two - one == exact.bytes_per_thread(N, graph.arcs, 64)
        assert make_plan(graph, score, 2, two).threads == 2
        tight = make_plan(graph, score, 2, two - 1)
        assert (tight.threads, tight.lanes, tight.predicted_bytes) == (1, 64, one)
        tight = make_plan(graph, score, 2, one - 1)
        assert (tight.threads, tight.lanes) == (1, 32)
        estimate = measure(graph, tight, score)
        np.testing.assert_allclose(estimate.pairs, measure(graph, make_plan(graph, score, 2, two), score).pairs, 1e-10)
        with pytest.raises(SettingsError, match=r"exact needs 0\.\d MiB .* more than run.memory = 0\.\d MiB") as error:
            make_plan(graph, score, 2, one - 56 * 9 * N - 1)
        assert error.value.exit_code == 78


def test_probe_predicts(build: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """On a busy machine a prediction may be far off; a wrong formula would be off by orders of magnitude."""
    monkeypatch.setattr(costs, "TINY", 0)
    graph = build(4000, scattered(4000, 24_000, 3), True)
    for score in (
        Score(method="exact"),
        Score(method="pivots", samples=2000, top=0),
        Score(method="paths", samples=200_000, top=0),
    ):
        plan = make_plan(graph, score, 1, MEMORY)
        start = time.perf_counter()
        measure(graph, plan, score)
        taken = time.perf_counter() - start
        assert 1 / 8 < plan.predicted_seconds / taken < 8, (score.method, plan.predicted_seconds, taken)


def test_fewest_samples_by_bisection() -> None:
    for wanted in (0.5, 0.1, 0.03):
        assert costs._fewest(lambda samples: 1 / math.sqrt(samples), wanted, 10**6) == math.ceil(1 / wanted**2 - 1e-6)
    assert costs._fewest(lambda samples: 1.0, 0.5, 100) == 100


def test_more_draws_than_sources_are_never_planned(build: Any) -> None:
    """A width that fewer sources than all reach, and one that only all of them do."""
    graph = build(60, [(i, (i * 7 + k) % 60) for i in range(60) for k in (1, 2, 5) if i != (i * 7 + k) % 60], True)
    for half_width in (0.5, 1e-6):
        estimate = betweenness(graph, method="pivots", half_width=half_width, top=0)
        assert estimate.samples <= graph.n
        assert estimate.half_widths.max() <= half_width


@pytest.mark.parametrize("directed", [True, False])
@pytest.mark.parametrize("shape", ["star", "path", "pairs"])
def test_what_structure_settles_whole(build: Any, monkeypatch: pytest.MonkeyPatch, shape: str, directed: bool) -> None:
    """No source is left to probe or to sweep, however large the graph."""
    monkeypatch.setattr(costs, "TINY", 0)
    n = 400
    arcs = {
        "star": [(0, leaf) for leaf in range(1, n)],
        "path": [(at, at + 1) for at in range(n - 1)],
        "pairs": [(at, at + 1) for at in range(0, n, 2)],
    }[shape]
    graph = build(n, arcs, directed)
    score = Score()
    plan = make_plan(graph, score, 2, MEMORY)
    assert (plan.method, plan.predicted_seconds) == ("exact", 0.0)
    expected = np.zeros(n)
    if shape == "star" and not directed:
        expected[0] = (n - 1) * (n - 2) / 2
    if shape == "path":
        expected = np.arange(n) * np.arange(n)[::-1].astype(float)
    for method in ("exact", "pivots", "paths"):
        asked = Score(method=method, samples=0 if method == "exact" else n, top=0)
        found = measure(graph, make_plan(graph, asked, 2, MEMORY), asked)
        if method != "paths" or not directed:
            np.testing.assert_allclose(found.pairs, expected, rtol=1e-9)


def test_everybody_among_the_first_is_no_reason_to_stop_early(build: Any) -> None:
    graph = build(60, scattered(60, 200, 1), True)
    for method, samples in (("paths", 20_000), ("pivots", 60)):
        score = Score(method=method, samples=samples)
        assert measure(graph, make_plan(graph, score, 1, MEMORY), score).samples == samples
