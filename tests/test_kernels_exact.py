"""The kernels of exact betweenness and sampled sources against plain Python, other libraries and hard cases.

Also run without the compiler: test_kernels_uncompiled.py.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from typing import Any

import igraph
import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import oracles
from isthmus.betweenness.engine_numba import exact, kernels_weighted, pivots, reductions, subgraphs, zeros
from isthmus.betweenness.engine_numba.accelerate import COMPILED, count_bits, kernel, lowest_bit
from isthmus.betweenness.engine_numba.kernels_moments import MOMENTS, note
from isthmus.betweenness.engine_numba.sequences import GRID, PivotEvidence
from isthmus.errors import SettingsError
from isthmus.graph import Arrays
from kernel_graphs import Case, arrays, cases, chain_of_gates, scattered

SWITCHES = [
    dict(zip(("fold", "blocks", "twins", "locality"), on, strict=True))
    for on in itertools.product((False, True), repeat=4)
]
ENDS = [pytest.param(SWITCHES[0], id="plain"), pytest.param(SWITCHES[-1], id="reduced")]
CLOSE: dict[str, float] = {"rtol": 1e-9, "atol": 1e-9}


def often(compiled: int, plain: int = 12) -> Any:
    return settings(max_examples=compiled if COMPILED else plain, deadline=None)


def pairs(graph: Arrays, lanes: int = 8, max_hops: int = 0, **switches: bool) -> Any:
    """Ordered pairs, all blocks of the plan one after another."""
    reduced = reductions.reduce(graph, max_hops=max_hops, **switches)
    plan = exact.make_plan(reduced, lanes=lanes, max_hops=max_hops)
    return exact.merge(reduced, plan, (exact.run_block(reduced, plan, i) for i in range(plan.blocks)))


def ordered(table: list[list[Any]]) -> list[float]:
    return [float(sum(column)) for column in zip(*table, strict=True)]


def of(network: Any, weighted: bool = False) -> Arrays:
    plain = nx.convert_node_labels_to_integers(network)
    lengths = [data["length"] for _, _, data in plain.edges(data=True)] if weighted else None
    return arrays(len(plain), plain.edges(), plain.is_directed(), lengths)


@often(100)
@given(cases(), st.sampled_from([0, 0, 1, 2, 3]))
def test_exact_with_every_reduction_on_and_off(case: Case, hops: int) -> None:
    n, arcs, directed, _ = case
    expected = ordered(oracles.dependencies(n, arcs, directed, max_hops=hops))
    for switch in SWITCHES:
        got = pairs(arrays(n, arcs, directed), max_hops=hops, **switch)
        np.testing.assert_allclose(got, expected, err_msg=str(switch), **CLOSE)


@often(80)
@given(cases(weighted=True))
def test_lengths_with_every_reduction_on_and_off(case: Case) -> None:
    n, arcs, directed, lengths = case
    expected = ordered(oracles.dependencies(n, arcs, directed, lengths))
    for switch in SWITCHES:
        got = pairs(arrays(n, arcs, directed, lengths), **switch)
        np.testing.assert_allclose(got, expected, err_msg=str(switch), **CLOSE)


@often(100)
@given(cases(weighted=True), st.booleans(), st.integers(0, 3), st.integers(0, 2**63 - 1), st.data())
def test_sampled_sources_and_their_moments(
    case: Case, weighted: bool, hops: int, seed: int, data: st.DataObject
) -> None:
    """What a block adds up is what its sources, one at a time, say by the definition."""
    n, arcs, directed, lengths = case
    lengths, hops = (lengths, 0) if weighted else (None, hops)
    samples = data.draw(st.integers(0, n))
    structure = data.draw(st.booleans())
    graph = arrays(n, arcs, directed, lengths)
    sources = pivots.prepare_sources(graph, seed, lanes=8, max_hops=hops, structure=structure)
    assert sorted(sources.draws.tolist()) == list(range(n))
    part = pivots.run_block(sources, 0, samples)
    assert part.draws == samples
    # what trees and twins settle is not sampled; the rest of a source's dependencies is
    table = oracles.dependencies(n, arcs, directed, lengths, hops)
    holder, scale, pairs = sources.scale.holder, sources.scale, max((n - 1) * (n - 2), 1)
    all_draws = pivots.run_block(sources, 0, n)
    whole = np.append(all_draws.sums / n, 0.0)
    truth = np.sum([[float(x) for x in row] for row in table], axis=0) / pairs if n else np.zeros(0)
    np.testing.assert_allclose(scale.exact + np.append(scale.factor, 0.0)[holder] * whole[holder], truth, **CLOSE)
    assert (scale.exact <= scale.ceiling + 1e-12).all()
    assert (truth <= scale.ceiling + 1e-12).all()
    assert not all_draws.sums[scale.settled].any()
    if structure:
        values = np.transpose([pivots.run_block(sources, at, 1).sums for at in range(samples)]).tolist()
    else:
        assert not scale.exact.any()
        drawn, by_vertex = sources.draws[:samples].tolist(), np.argsort(holder)
        together = [sum(not np.isinf(x) for x in row) for row in oracles.distances(oracles.adjacency(n, arcs, False))]
        after = oracles.reach(n, arcs, directed)[1]
        most = [max(min(together[v] - 2, after[v]), 1) for v in range(n)]
        values = [[float(table[s][v]) / most[v] for s in drawn] for v in by_vertex.tolist()]
    if not samples:
        assert not part.moments.any()
        return
    assert all(x <= 1 + 1e-12 for row in values for x in row)
    np.testing.assert_allclose(part.sums, [sum(row) for row in values], **CLOSE)
    np.testing.assert_allclose(part.moments[:, 9], [sum(x * x for x in row) for row in values], **CLOSE)
    spread = [np.sum([oracles.spread(min(x, 1.0), GRID.tolist()) for x in [0.0, *row]], axis=0) for row in values]
    np.testing.assert_allclose(part.moments[:, :9], np.array(spread).reshape(-1, 9), **CLOSE)


@often(300, 100)
@given(st.lists(st.floats(0, 1), max_size=5))
def test_notes_of_values(values: list[float]) -> None:
    moments = np.zeros((2, MOMENTS))
    for x in values:
        note(moments, 1, x, 1.0)
    note(moments, 0, values[0] if values else 0.0, 3.0)
    expected = np.sum([oracles.spread(x, GRID.tolist()) for x in [0.0, *values]], axis=0)
    np.testing.assert_allclose(moments[1, :9], expected, atol=1e-12)
    np.testing.assert_allclose(moments[1, 9], sum(x * x for x in values), atol=1e-12)
    np.testing.assert_allclose(moments[1, :9] @ GRID, sum(values), atol=1e-12)
    if values:
        thrice = np.append(3 * np.array(oracles.spread(values[0], GRID.tolist())), 3 * values[0] ** 2)
        np.testing.assert_allclose(moments[0], thrice, atol=1e-12)


def test_a_value_that_rounding_lifted_above_one_counts_as_one() -> None:
    moments = np.zeros((1, MOMENTS))
    note(moments, 0, 1.0000000000000002, 1.0)
    assert moments[0].tolist() == [0] * 8 + [1, 1]


@often(100, 60)
@given(cases(weighted=True))
def test_certain_zeros(case: Case) -> None:
    n, arcs, directed, lengths = case
    zero = zeros.certain_zeros(arrays(n, arcs, directed)).tolist()
    assert zero == oracles.certain_zeros(n, arcs, directed)
    assert zero == [value == 0 for value in ordered(oracles.dependencies(n, arcs, directed))]
    by_length = zeros.certain_zeros(arrays(n, arcs, directed, lengths))
    assert not np.array(ordered(oracles.dependencies(n, arcs, directed, lengths)))[by_length].any()


@often(100, 40)
@given(st.integers(1, 2**64 - 1))
def test_bits_of_a_word(word: int) -> None:
    assert _lowest(np.uint64(word)) == (word & -word).bit_length() - 1
    assert _count(np.uint64(word)) == f"{word:b}".count("1")


@kernel
def _lowest(word):
    return lowest_bit(word)


@kernel
def _count(word):
    return count_bits(word)


@often(60, 30)
@given(cases())
def test_numbering_is_breadth_first(case: Case) -> None:
    """Every vertex once; each follows a neighbour, or is the busiest of what is left."""
    n, arcs, directed, _ = case
    order = subgraphs.breadth_first(arrays(n, arcs, directed)).tolist()
    assert sorted(order) == list(range(n))
    near = oracles.adjacency(n, arcs, directed=False)
    degree = [sum(v in arc for arc in arcs) for v in range(n)]
    for i, v in enumerate(order):
        if not set(near[v]) & set(order[:i]):
            assert degree[v] == max(degree[w] for w in order[i:])


def other_libraries(network: Any, lengths: bool = False) -> Iterable[list[float]]:
    """Ordered pairs, by igraph and by networkx."""
    factor, weight = (1 if network.is_directed() else 2), ("length" if lengths else None)
    edges = list(network.edges())
    weights = [network.edges[edge]["length"] for edge in edges] if lengths else None
    made = igraph.Graph(len(network), edges, directed=network.is_directed())
    yield factor * np.array(made.betweenness(weights=weights))
    known = nx.betweenness_centrality(network, normalized=False, weight=weight)
    yield [factor * known[v] for v in range(len(network))]


@pytest.mark.parametrize("directed", [False, True])
@pytest.mark.parametrize("ties", [0.6, 1.5, 7.0])
def test_other_libraries_on_larger_graphs(directed: bool, ties: float) -> None:
    n = 300 if COMPILED else 40
    network = nx.gnm_random_graph(n, int(ties * n), seed=5, directed=directed)
    for expected, switch in itertools.product(other_libraries(network), (SWITCHES[0], SWITCHES[-1])):
        np.testing.assert_allclose(pairs(of(network), 64, **switch), expected, **CLOSE)


@pytest.mark.parametrize("directed", [False, True])
def test_other_libraries_with_lengths(directed: bool) -> None:
    n = 150 if COMPILED else 40
    network = nx.gnm_random_graph(n, 4 * n, seed=2, directed=directed)
    length = np.random.default_rng(2).integers(1, 30, network.number_of_edges()).tolist()
    nx.set_edge_attributes(network, dict(zip(network.edges(), length, strict=True)), "length")
    for expected, switch in itertools.product(other_libraries(network, lengths=True), (SWITCHES[0], SWITCHES[-1])):
        np.testing.assert_allclose(pairs(of(network, True), **switch), expected, **CLOSE)


def test_heap_and_ring_agree() -> None:
    """One short arc that leads nowhere makes the lengths so uneven that the ring of buckets gives way to the heap."""
    arcs = scattered(40, 160, 3)
    near = np.random.default_rng(3).integers(5, 9, len(arcs)).tolist()
    ring = pairs(arrays(40, arcs, True, near))
    far = [length * 8 * kernels_weighted.MOST_BUCKETS for length in near]
    heap = pairs(arrays(42, [*arcs, (40, 41)], True, [*far, 1]), fold=False)
    np.testing.assert_allclose(heap[:40], ring, **CLOSE)
    np.testing.assert_allclose(ring, ordered(oracles.dependencies(40, arcs, True, near)), **CLOSE)


def test_lengths_that_differ_by_one_in_a_billion_do_not_tie() -> None:
    """Two ways round a square, the one longer by one part in 10**9: only the shorter carries the pair."""
    arcs, long = [(0, 1), (0, 2), (1, 3), (2, 3)], 10**9
    assert pairs(arrays(4, arcs, True, [long, long, long, long + 1])).tolist() == [0, 1, 0, 0]
    assert pairs(arrays(4, arcs, True, [long] * 4)).tolist() == [0, 0.5, 0.5, 0]


@pytest.mark.parametrize("switch", ENDS)
def test_path_counts_beyond_64_bits(switch: dict[str, bool]) -> None:
    """A 36 x 36 grid has more shortest paths between its corners than an int64 counts, 40 gates of 4 have 2**80."""
    if COMPILED:
        side = 36
        got = pairs(arrays(side**2, oracles.grid(side), False), 64, **switch).reshape(side, side)
        np.testing.assert_allclose(got, got[::-1], rtol=1e-12)
        np.testing.assert_allclose(got, got.T, rtol=1e-12)
        length = 2 * side**2 * sum(abs(a - b) for a in range(side) for b in range(side))
        assert got.sum() == pytest.approx(length - side**2 * (side**2 - 1), rel=1e-12)
    gates, wide = 40, 4
    n, arcs = chain_of_gates(gates, wide)
    got = pairs(arrays(n, arcs, False), **switch)
    # a place carries its share of the pairs on both sides of its gate, and of the pair of posts next to it
    before = np.arange(gates) * (wide + 1) + 1
    np.testing.assert_allclose(got[gates + 1 :: wide], 2 * before * before[::-1] / wide, rtol=1e-12)


@pytest.mark.parametrize("directed", [False, True])
@pytest.mark.parametrize("n", [0, 1, 2])
def test_nothing_between(n: int, directed: bool) -> None:
    for lengths in (None, [3] if n == 2 else []):
        graph = arrays(n, [(0, 1)] if n == 2 else [], directed, lengths)
        assert pairs(graph).tolist() == [0.0] * n
        part = pivots.run_block(pivots.prepare_sources(graph, 1), 0, n)
        assert not part.sums.any()
        assert zeros.certain_zeros(graph).all()


@pytest.mark.parametrize("hops", [0, 2])
@pytest.mark.parametrize("directed", [False, True])
def test_all_sources_drawn_is_exact(directed: bool, hops: int) -> None:
    n = 300 if COMPILED else 70
    graph = arrays(n, scattered(n, 3 * n, 4, 1.5), directed)
    sources = pivots.prepare_sources(graph, 9, max_hops=hops)
    evidence = PivotEvidence(n, sources.scale, 0.1)
    for block in pivots.plan_blocks(n):
        part = pivots.run_block(sources, *block)
        evidence.add(part.draws, part.moments[:, :9], part.sums, part.moments[:, 9])
    bounds = evidence.bounds()
    np.testing.assert_allclose(bounds.estimate * ((n - 1) * (n - 2)), pairs(graph, max_hops=hops), **CLOSE)
    assert (bounds.lower == bounds.estimate).all()
    assert (bounds.upper == bounds.estimate).all()
    assert not bounds.std_error.any()


def test_sampled_sources_of_a_star_stay_in_range() -> None:
    """The centre's own dependency is none: its score must not pass 1. Structure leaves nothing to sample."""
    n = 11
    star = arrays(n, [(0, leaf) for leaf in range(1, n)], False)
    settled = pivots.prepare_sources(star, 1).scale
    assert settled.exact.tolist() == [1.0, *[0.0] * (n - 1)]
    assert (settled.holder == -1).all()
    for seed in range(10):
        sources = pivots.prepare_sources(star, seed, structure=False)
        part = pivots.run_block(sources, 0, 5)
        centre = 0 in sources.draws[:5]
        assert sorted(part.sums.tolist()) == [*[0.0] * (n - 1), pytest.approx(4 if centre else 5)]
        evidence = PivotEvidence(n, sources.scale, 0.1, horizon=5)
        evidence.add(5, part.moments[:, :9], part.sums, part.moments[:, 9])
        assert evidence.bounds().upper.max() <= 1


def test_a_longer_sample_begins_with_the_shorter_one_and_seeds_differ() -> None:
    graph = arrays(60, scattered(60, 150, 1), False)
    draws = [pivots.prepare_sources(graph, seed).draws.tolist() for seed in (7, 7, 8)]
    assert draws[0] == draws[1]
    assert draws[0] != draws[2]


def test_numbers_of_lanes_agree_and_blocks_may_be_cut_anywhere(monkeypatch: pytest.MonkeyPatch) -> None:
    n = 400 if COMPILED else 50
    graph = arrays(n, scattered(n, 3 * n, 5, 1.4), True)
    whole = pairs(graph, 64)
    monkeypatch.setattr(exact, "BLOCK_WORK", 1)
    for lanes in (8, 16, 32, 64):
        np.testing.assert_allclose(pairs(graph, lanes), whole, **CLOSE)
    reduced = reductions.reduce(graph)
    plan = exact.make_plan(reduced, lanes=8)
    assert plan.blocks > 1
    parts = {i: exact.run_block(reduced, plan, i) for i in reversed(range(plan.blocks))}
    in_turn = exact.merge(reduced, plan, (exact.run_block(reduced, plan, i) for i in range(plan.blocks)))
    assert exact.merge(reduced, plan, (parts[i] for i in range(plan.blocks))).tobytes() == in_turn.tobytes()


def test_gains_are_told() -> None:
    """Two triangles on a bridge, a hanging path, and three parties with the same two neighbours (twins, too)."""
    arcs = [(0, 1), (1, 2), (2, 0), (2, 3), (3, 4), (4, 5), (5, 3), (5, 6), (6, 7), (0, 8), (1, 8), (0, 9), (1, 9)]
    gains = reductions.reduce(arrays(10, arcs, False)).gains
    told = {key: gains[key] for key in ("folded", "blocks_settled", "blocks", "twins_merged")}
    assert told == {"folded": 2, "blocks_settled": 2, "blocks": 1, "twins_merged": 3}


@pytest.mark.parametrize(
    ("length", "hops", "message"), [(1, 2, "max_hops=2"), (-1, 0, "positive"), (2**62, 0, "scale")]
)
def test_lengths_that_cannot_be_exact_are_refused(length: int, hops: int, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        exact.check_lengths(arrays(3, [(0, 1), (1, 2)], True, [1, length]), hops)


@often(60, 30)
@given(cases())
def test_the_two_oracles_agree(case: Case) -> None:
    n, arcs, directed, _ = case
    for hops in (0, 2):
        listed = np.array(oracles.dependencies(n, arcs, directed, max_hops=hops), float)
        np.testing.assert_allclose(oracles.brandes(n, arcs, directed, hops), listed, atol=1e-12)


@pytest.mark.parametrize("lengths", [False, True])
@pytest.mark.parametrize("directed", [True, False])
def test_more_paths_than_a_float_can_count_are_refused(directed: bool, lengths: bool) -> None:
    """Not miscounted without a word: wide layers, one after another, each tied to all of the next."""
    wide, layers = 40, 200
    arcs = [
        (layer * wide + a, (layer + 1) * wide + b)
        for layer in range(layers - 1)
        for a in range(wide)
        for b in range(wide)
    ]
    graph = arrays(layers * wide, arcs, directed, [1] * len(arcs) if lengths else None)
    sources = pivots.prepare_sources(graph, 1, lanes=8, structure=False)
    first = int(np.flatnonzero(sources.reduced.member[np.argsort(sources.reduced.holder)] == 0)[0])
    # overflow is the point; numpy tells of it where the compiler is off
    told = r"too many to count; use score.method = \"paths\""
    with np.errstate(over="ignore", invalid="ignore"), pytest.raises(SettingsError, match=told):
        exact.sweep(
            sources.reduced.arrays, np.array([first], np.int32), np.ones(1), np.zeros(graph.n), np.zeros(0),
            np.zeros(0), np.zeros((0, MOMENTS)), exact.GO_ON, copies=np.ones(graph.n), targets=np.ones(graph.n),
            lanes=8, max_hops=0,
        )  # fmt: skip
