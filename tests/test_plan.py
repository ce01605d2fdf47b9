"""The plan: what it chooses, what it says, and that a recorded one gives the same numbers again."""

from __future__ import annotations

import json
import math
import time
from dataclasses import asdict
from functools import partial

import numpy as np
import pytest

from isthmus.betweenness import Plan, betweenness, make_plan, measure
from isthmus.betweenness.engine_networkit import costs as plan_networkit
from isthmus.betweenness.engine_networkit.bounds import certain_zeros, paths_bound, pivots_bound
from isthmus.errors import SettingsError
from isthmus.settings import Score

MEMORY = 16 * 2**30

# What the choice between methods does with NetworKit's offers; those of our own engine: test_plan_numba.py.
networkit = partial(Score, engine="networkit")


def random_arcs(n, m, seed=0, directed=True):
    tail, head = np.random.default_rng(seed).integers(0, n, (2, m))
    return {
        (int(a), int(b)) if directed or a < b else (int(b), int(a)) for a, b in zip(tail, head, strict=True) if a != b
    }


@pytest.fixture
def slow(monkeypatch):
    """A machine on which a source takes 1 s on one thread and a path 0.25 s, so that the clock chooses nothing."""
    monkeypatch.setattr(plan_networkit, "TINY", 0)
    monkeypatch.setattr(plan_networkit.engine, "seconds_per_source", lambda graph, threads: 1.0 / threads)
    monkeypatch.setattr(plan_networkit.engine, "seconds_per_path", lambda graph, dimension: 0.25)


@pytest.fixture
def graph(build):
    return build(300, random_arcs(300, 900, directed=False), False)


@pytest.fixture
def directed(build):
    return build(300, random_arcs(300, 900), True)


class TestAuto:
    def test_tiny_is_exact(self, graph):
        plan = make_plan(graph, networkit(), 2, MEMORY)
        assert (plan.method, plan.threads, plan.limit, plan.half_width) == ("exact", 1, "exact", 0.0)
        assert "1 thread" in plan.reason

    def test_exact_on_one_thread_when_that_fits(self, slow, graph):
        plan = make_plan(graph, networkit(minutes=5.0), 4, MEMORY)
        assert (plan.method, plan.threads, plan.predicted_seconds) == ("exact", 1, 300.0)

    def test_exact_on_all_threads_when_it_must(self, slow, graph):
        plan = make_plan(graph, networkit(minutes=2.0), 4, MEMORY)
        assert (plan.method, plan.threads, plan.predicted_seconds) == ("exact", 4, 75.0)
        assert "last digits" in plan.reason

    def test_paths_when_exact_takes_too_long(self, slow, graph):
        plan = make_plan(graph, networkit(minutes=1.0), 2, MEMORY)
        # 60 s / 0.25 s = 240, rounded down to a power of two
        assert (plan.method, plan.samples, plan.limit, plan.threads) == ("paths", 128, "minutes", 1)
        assert plan.reason.startswith("exact would take 2.5 min of the 1 min allowed; 128 paths")
        assert "pivots would reach about" in plan.reason
        assert plan.predicted_seconds <= 60

    def test_pivots_when_many_threads_make_them_narrower(self, slow, graph, monkeypatch):
        monkeypatch.setattr(plan_networkit.engine, "seconds_per_path", lambda graph, dimension: 30.0)
        plan = make_plan(graph, networkit(minutes=1.0), 4, MEMORY)
        assert (plan.method, plan.samples, plan.threads) == ("pivots", 128, 4)

    def test_quicker_one_when_both_reach_the_half_width(self, slow, graph):
        plan = make_plan(graph, networkit(minutes=1.0, half_width=0.3), 1, MEMORY)
        assert (plan.method, plan.limit) == ("paths", "half_width")
        assert plan.half_width <= 0.3

    def test_directed_with_distances_falls_to_pivots(self, slow, build):
        arcs = random_arcs(300, 900)
        weighted = build(300, arcs, True, [1 + i % 5 for i in range(len(arcs))])
        assert make_plan(weighted, networkit(minutes=1.0), 1, MEMORY).method == "pivots"
        with pytest.raises(SettingsError, match='use method = "pivots" or "exact"'):
            make_plan(weighted, networkit(method="paths"), 1, MEMORY)

    def test_dear_diameter_rules_paths_out(self, slow, directed):
        # a search for every party that nobody leads to, a second each
        starts = int((np.diff(directed.in_ptr) == 0).sum()) + 1
        assert starts > 6
        with pytest.raises(SettingsError, match=rf"search {starts}\.0 s for the diameter"):
            make_plan(directed, networkit(method="paths", minutes=0.1), 1, MEMORY)
        assert make_plan(directed, networkit(minutes=0.1), 1, MEMORY).method == "pivots"


class TestSamples:
    @pytest.mark.parametrize(("method", "bound"), [("pivots", pivots_bound), ("paths", paths_bound)])
    def test_half_width_by_formula(self, directed, method, bound):
        uncertain = int((~certain_zeros(directed)).sum())
        plan = make_plan(directed, networkit(method=method, half_width=0.05), 1, MEMORY)
        told = bound(300, uncertain, 0.95)
        assert plan.half_width <= 0.05 < told.half_width(plan.samples - 2)
        assert plan.limit == "half_width"
        estimate = measure(directed, plan, networkit(method=method))
        assert estimate.half_widths.max() <= 0.05 + 1e-12
        assert estimate.stopped_because == "half_width"

    def test_bounds_are_the_printed_formulas(self):
        # Hoeffding 1963, Theorem 2, with delta / m for each of m parties and draws in [0, 2n/(n-1)]
        n, m, k = 50, 40, 1000
        assert pivots_bound(n, m, 0.9).half_width(k) == pytest.approx(100 / 49 * math.sqrt(math.log(800) / 2000))
        assert paths_bound(n, m, 0.9).half_width(k) == pytest.approx(50 / 48 * math.sqrt(math.log(800) / 2000))
        # Riondato and Kornaropoulos: r = c/eps^2 (floor(log2(VD - 2)) + 1 + ln 1/delta), where it is narrower
        rk = math.sqrt((1 + math.log(10)) / k)
        assert paths_bound(n, m, 0.9, dimension=1).half_width(k) == pytest.approx(50 / 48 * rk)

    def test_asked_for(self, graph):
        plan = make_plan(graph, networkit(method="paths", samples=1001), 1, MEMORY)
        assert (plan.samples, plan.limit) == (1001, "samples")

    def test_minutes_cut_what_was_asked_for(self, slow, graph):
        plan = make_plan(graph, networkit(method="pivots", samples=10_000, minutes=0.5), 1, MEMORY)
        assert (plan.samples, plan.limit) == (16, "minutes")

    def test_unasked_never_dearer_than_exact(self, graph, directed):
        assert make_plan(graph, networkit(method="pivots"), 1, MEMORY).samples == 300
        assert make_plan(directed, networkit(method="paths"), 1, MEMORY).samples == 600

    @pytest.mark.parametrize("samples", [1, 2, 3, 9, 31, 33, 101])
    @pytest.mark.parametrize("method", ["pivots", "paths"])
    def test_any_number_can_be_drawn(self, graph, directed, method, samples):
        for each in (graph, directed):
            score = networkit(method=method, samples=samples)
            plan = make_plan(each, score, 1, MEMORY)
            assert max(8, samples) <= plan.samples <= max(8, samples + 1)
            estimate = measure(each, plan, score)
            assert np.isfinite(estimate.std_error).all()


class TestRefusals:
    @pytest.mark.parametrize("method", ["auto", "exact", "pivots", "paths"])
    def test_memory(self, graph, engine, method):
        with pytest.raises(SettingsError, match=r"300 parties and \d+ ties, more than run.memory") as error:
            make_plan(graph, Score(method=method, engine=engine), 1, 10_000)
        assert error.value.exit_code == 78

    def test_fewer_threads_when_memory_is_short(self, slow, graph):
        one = make_plan(graph, networkit(method="pivots"), 1, MEMORY).predicted_bytes
        assert make_plan(graph, networkit(method="pivots"), 64, one * 2).threads in range(2, 63)

    def test_hop_limit(self, graph):
        with pytest.raises(SettingsError, match="max_hops"):
            betweenness(graph, engine="networkit", max_hops=3)

    @pytest.mark.parametrize(
        "wrong",
        [{"method": "quick"}, {"confidence": 1.0}, {"samples": -1}, {"seed": -1}, {"memory": "much"}, {"threads": -1}],
    )
    def test_impossible_values(self, graph, wrong):
        (key,) = wrong
        with pytest.raises(SettingsError, match=key):
            betweenness(graph, **wrong)


class TestAgain:
    @pytest.mark.parametrize("method", ["exact", "pivots", "paths"])
    def test_recorded_plan_gives_the_same_bits(self, directed, engine, method):
        score = Score(method=method, engine=engine, samples=200)
        plan = make_plan(directed, score, 2, MEMORY)
        recorded = Plan(**json.loads(json.dumps(asdict(plan))))
        assert recorded == plan
        one, two = measure(directed, plan, score), measure(directed, recorded, score)
        for column in ("betweenness", "lower", "upper", "std_error"):
            assert getattr(one, column).tobytes() == getattr(two, column).tobytes()

    @pytest.mark.parametrize("method", ["pivots", "paths"])
    def test_another_seed_gives_other_samples(self, graph, engine, method):
        one, two = (betweenness(graph, method=method, engine=engine, samples=100, seed=seed) for seed in (1, 2))
        assert (one.betweenness != two.betweenness).any()

    def test_two_threads(self, slow, graph):
        score = networkit(method="pivots", samples=200)
        plan = make_plan(graph, score, 2, MEMORY)
        assert plan.threads == 2
        one, two, single = (measure(graph, plan, score, threads) for threads in (0, 0, 1))
        assert one.betweenness.tobytes() == two.betweenness.tobytes()
        assert single.betweenness == pytest.approx(one.betweenness, rel=1e-10, abs=0)
        assert make_plan(graph, networkit(method="paths", samples=20), 2, MEMORY).threads == 1

    @pytest.mark.parametrize("method", ["exact", "pivots", "paths"])
    def test_progress_rises_to_one(self, graph, engine, method):
        heard: list[float] = []
        betweenness(graph, method=method, engine=engine, samples=100, progress=heard.append)
        assert heard == sorted(heard)
        assert (heard[0], heard[-1]) == (0.0, 1.0)
        assert method == "exact" or engine == "numba" or len(heard) > 4


def test_probe_predicts(build, monkeypatch):
    """On a busy machine a prediction may be far off; a wrong formula would be off by orders of magnitude."""
    monkeypatch.setattr(plan_networkit, "TINY", 0)
    graph = build(1500, random_arcs(1500, 9000), True)
    for score in (
        networkit(method="exact"),
        networkit(method="pivots", samples=1000),
        networkit(method="paths", samples=1000),
    ):
        plan = make_plan(graph, score, 1, MEMORY)
        start = time.perf_counter()
        measure(graph, plan, score)
        taken = time.perf_counter() - start
        assert taken / 5 < plan.predicted_seconds < taken * 5, score.method


def test_certain_zeros(build):
    # 0 -> 1 <-> 2, 3 -> 1, 4 <-> 5: only 1 has two different neighbours and both directions
    graph = build(6, [(0, 1), (1, 2), (2, 1), (3, 1), (4, 5), (5, 4)], True)
    assert (~certain_zeros(graph)).nonzero()[0].tolist() == [1]
