"""What NetworKit does, watched; and that its sampled methods, as put right here, keep what they promise."""

from __future__ import annotations

from dataclasses import replace

import networkx as nx
import numpy as np
import pytest
from scipy.stats import binom, chi2

from isthmus.betweenness import make_plan, measure
from isthmus.betweenness.engine_networkit import library as engine_networkit
from isthmus.settings import Score

SEEDS = 120
SAMPLES = 256


def _cases():
    grid = nx.convert_node_labels_to_integers(nx.grid_2d_graph(8, 8))
    # most vertices reach few and are reached by many, or the other way round
    lopsided = nx.DiGraph((u, v) for u, v in nx.gnp_random_graph(70, 0.08, seed=4, directed=True).edges() if u < v + 9)
    lopsided.add_nodes_from(range(70))
    apart = nx.disjoint_union(nx.barabasi_albert_graph(50, 2, seed=1), nx.path_graph(14))
    yield "grid", grid, False
    yield "lopsided", lopsided, True
    yield "apart", apart, False


CASES = list(_cases())


@pytest.fixture(params=["pivots", "paths"])
def method(request):
    return request.param


@pytest.mark.parametrize(("network", "directed"), [c[1:] for c in CASES], ids=[c[0] for c in CASES])
def test_sampled_methods_keep_their_promise(build, method, network, directed):
    graph = build(network.number_of_nodes(), network.edges(), directed)
    exact_score = Score(method="exact", engine="networkit")
    truth = measure(graph, make_plan(graph, exact_score, 1, 2**34), exact_score).betweenness
    # a low confidence, because its intervals leave the least room for a fault to hide in
    score = Score(method=method, engine="networkit", samples=SAMPLES, confidence=0.55)
    plan = make_plan(graph, score, 1, 2**34)
    runs = [measure(graph, plan, replace_seed(score, seed)) for seed in range(SEEDS)]

    failures = sum(bool(((r.lower > truth + 1e-12) | (truth > r.upper + 1e-12)).any()) for r in runs)
    # if each run fails with probability at most .45, more failures than this come once in 10,000 test runs
    assert failures <= binom.ppf(1 - 1e-4, SEEDS, 0.45)

    # The bounds are wide, so a small bias would hide in them: the mean of all runs must close in on the truth.
    values = np.array([r.betweenness for r in runs])
    errors = np.array([r.std_error for r in runs])
    likely = truth > 0.01
    assert likely.sum() >= 10
    z = (values.mean(0) - truth)[likely] / (values.std(0, ddof=1)[likely] / np.sqrt(SEEDS))
    # a normal deviate for each party: beyond 4.9 once in a million
    assert np.abs(z).max() < 4.9
    assert np.mean(z**2) < chi2.ppf(1 - 1e-6, 3) / 3  # all parties lean one way at worst: few degrees of freedom

    # the stated standard error is the scatter seen
    ratio = np.sqrt((errors[:, likely] ** 2).mean(0)) / values.std(0, ddof=1)[likely]
    assert 0.85 < np.median(ratio) < 1.15


def replace_seed(score: Score, seed: int) -> Score:
    return score.model_copy(update={"seed": seed})


def test_the_bound_is_not_idle(build):
    """A bound narrowed to a fifth must be caught by the test above, or the test means nothing."""
    _, network, directed = CASES[0]
    graph = build(network.number_of_nodes(), network.edges(), directed)
    exact_score, score = (
        Score(method="exact", engine="networkit"),
        Score(method="paths", engine="networkit", samples=SAMPLES, confidence=0.55),
    )
    truth = measure(graph, make_plan(graph, exact_score, 1, 2**34), exact_score).betweenness
    plan = make_plan(graph, score, 1, 2**34)
    narrow = replace(plan, half_width=plan.half_width / 5)
    runs = [measure(graph, narrow, replace_seed(score, seed)) for seed in range(SEEDS)]
    failures = sum(bool(((r.lower > truth) | (truth > r.upper)).any()) for r in runs)
    assert failures > binom.ppf(1 - 1e-4, SEEDS, 0.45)


class TestWhatNetworkitDoes:
    """If one of these fails after an upgrade, engine_networkit corrects something that is no longer wrong."""

    @pytest.mark.parametrize("k", [1, 5, 50])
    def test_draws_one_source_more_than_it_divides_by(self, k):
        import networkit as nk

        star = nk.Graph(11)
        for leaf in range(1, 11):
            star.addEdge(0, leaf)
        total = 0.0
        for seed in range(2000):
            nk.engineering.setSeed(seed, False)
            total += nk.centrality.EstimateBetweenness(star, k).run().score(0)
        # 90 ordered pairs; one draw adds 99 with probability 10/11
        draws = 2000 * (k + 1)
        spread = (k + 1) / k * 99 * np.sqrt(10 / 11 / 11 / draws)
        assert total / 2000 == pytest.approx((k + 1) / k * 90, abs=5 * spread)

    def test_sources_alone_are_wrong_on_directed_graphs(self, build):
        graph = build(6, [(i, i + 1) for i in range(5)], True)
        truth = np.array([0, 4, 6, 6, 4, 0]) / 20
        sides = [
            engine_networkit._sources(graph, 20_000, 1, seed=7, backwards=backwards) for backwards in (False, True)
        ]
        assert abs(sides[0] - truth).max() > 0.05
        assert abs(sides[1] - truth).max() > 0.05
        assert np.mean(sides, axis=0) == pytest.approx(truth, abs=0.01)

    def test_exact_counts_ordered_pairs(self):
        import networkit as nk

        path = nk.Graph(3)
        path.addEdge(0, 1)
        path.addEdge(1, 2)
        assert nk.centrality.Betweenness(path).run().scores() == [0.0, 2.0, 0.0]

    def test_width_of_paths_gives_the_number_asked_for(self, build):
        graph = build(30, [(i, i + 1) for i in range(29)], False)
        dimension = engine_networkit.path_dimension(graph)
        # vertex diameter 30, perhaps overestimated by up to a factor of two
        assert dimension in (5, 6)
        for draws in (1, 2, 7, 1000, 12_345):
            assert engine_networkit._path_hits(graph, draws, dimension, seed=1).max() <= draws

    def test_threads_are_put_back(self, build):
        import networkit as nk

        before = nk.engineering.getMaxNumberOfThreads()
        engine_networkit._sources(build(4, [(0, 1), (1, 2), (2, 3)], False), 4, before + 1, seed=1, backwards=False)
        assert nk.engineering.getMaxNumberOfThreads() == before
