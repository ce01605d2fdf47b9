"""The path sampler against plain Python and hard cases. Also run without the compiler: test_kernels_uncompiled.py."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2, norm

import oracles
from isthmus.betweenness.engine_numba import kernels_paths, paths
from isthmus.betweenness.engine_numba.accelerate import COMPILED
from isthmus.betweenness.engine_numba.prepare import Prepared, prepare
from kernel_graphs import Arc, Case, arrays, cases, chain_of_gates, scattered

MANY = 200_000 if COMPILED else 2_000
# A deviation this likely, for all parties of a test together, is a fault.
CHANCE = 1e-6


def ready(n: int, arcs: list[Arc], directed: bool, **options: Any) -> Prepared:
    graph = arrays(n, arcs, directed)
    return prepare(n, graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, directed, **options)


def drawn(prepared: Prepared, samples: int, seed: int = 1) -> np.ndarray:
    tally = paths.Tally.empty(prepared.n)
    tally.add(paths.run_block(prepared, seed, 0, samples))
    return tally.hits


def freeman(n: int, arcs: list[Arc], directed: bool, max_hops: int = 0) -> np.ndarray:
    return np.sum(oracles.brandes(n, arcs, directed, max_hops), axis=0) / ((n - 1) * (n - 2))


def fits(hits: np.ndarray, samples: int, share: np.ndarray) -> bool:
    """Bernstein's inequality for every party: beyond it once in a million tests."""
    cost = np.log(2 * share.size / CHANCE) / samples
    return bool((np.abs(hits / samples - share) <= np.sqrt(2 * share * (1 - share) * cost) + cost).all())


@pytest.mark.parametrize("structure", [True, False])
@pytest.mark.parametrize("max_hops", [0, 3])
@pytest.mark.parametrize("directed", [True, False])
@pytest.mark.parametrize("ties", [50, 80])
def test_hits_are_shares_of_paths(ties: int, directed: bool, max_hops: int, structure: bool) -> None:
    n = 40
    arcs = scattered(n, ties, ties, lean=1.5)
    truth = freeman(n, arcs, directed, max_hops)
    prepared = ready(n, arcs, directed, max_hops=max_hops, structure=structure)
    hits = drawn(prepared, MANY)
    np.testing.assert_allclose(truth[prepared.settled], prepared.exact[prepared.settled], atol=1e-12)
    assert not hits[prepared.settled].any()
    assert (prepared.exact <= truth + 1e-12).all()
    assert (truth <= prepared.ceiling + 1e-12).all()
    assert fits(hits, MANY, (truth - prepared.exact) * (n - 2) / n)


@settings(max_examples=60 if COMPILED else 10, deadline=None)
@given(cases(), st.sampled_from([0, 0, 1, 2]), st.booleans(), st.integers(0, 2**63 - 1))
def test_hits_of_any_graph(case: Case, max_hops: int, structure: bool, seed: int) -> None:
    n, arcs, directed, _ = case
    prepared = ready(n, arcs, directed, max_hops=max_hops, structure=structure)
    samples = 3000 if COMPILED else 300
    hits = drawn(prepared, samples, seed)
    if n < 3:
        assert not hits.any()
        return
    truth = np.array(oracles.dependencies(n, arcs, directed, max_hops=max_hops), float).sum(0) / ((n - 1) * (n - 2))
    np.testing.assert_allclose(truth[prepared.settled], prepared.exact[prepared.settled], atol=1e-12)
    assert (truth <= prepared.ceiling + 1e-12).all()
    assert not hits[prepared.settled].any()
    assert fits(hits, samples, np.maximum((truth - prepared.exact) * (n - 2) / n, 0))


@pytest.mark.parametrize("structure", [True, False])
def test_posts_score_only_what_no_separation_tells(structure: bool) -> None:
    """Posts between gates separate what lies before from what lies behind, yet also carry paths within a gate."""
    n, arcs = chain_of_gates(4, 4)
    n, arcs = n + 3, [*arcs, (5, n), (n, n + 1), (9, n + 2)]
    prepared = ready(n, arcs, False, structure=structure)
    assert not structure or (prepared.exact[1:4] > 0).all()
    assert fits(drawn(prepared, MANY), MANY, (freeman(n, arcs, False) - prepared.exact) * (n - 2) / n)


@settings(max_examples=60 if COMPILED else 20, deadline=None)
@given(cases(most=12))
def test_what_separation_earns_is_counted(case: Case) -> None:
    n, arcs, _, _ = case
    arcs = sorted({(min(arc), max(arc)) for arc in arcs})
    prepared = ready(n, arcs, False)
    counted = prepared.exact * max(1, (n - 1) * (n - 2))
    np.testing.assert_allclose(counted, [oracles.separated(n, arcs, v) for v in range(n)], rtol=1e-12)


def test_trees_and_cliques_on_bridges_need_no_samples() -> None:
    cliques = [(a + at, b + at) for at in (0, 6) for a in range(5) for b in range(a)]
    arcs = [*cliques, (4, 5), (5, 6), (10, 11), (11, 12), (10, 13)]
    prepared = ready(14, arcs, False)
    assert prepared.settled.all()
    np.testing.assert_allclose(prepared.exact, freeman(14, arcs, False), atol=1e-15)
    bounds = paths.PathEvidence(prepared, paths.Tally.empty(14), 0.1)
    bounds.tally.add(paths.run_block(prepared, 1, 0, 10))
    assert not bounds.bounds(1.0).half_width.any()


def test_cliques_on_a_busy_party_need_no_samples() -> None:
    """100 triangles and a clique of 80 that share one party, whose neighbours are far too many to try in pairs."""
    triangles = [arc for a in range(1, 201, 2) for arc in ((0, a), (0, a + 1), (a, a + 1))]
    arcs = [*triangles, *((a, b) for b in range(201, 280) for a in [0, *range(201, b)])]
    assert ready(280, arcs, False).settled.all()
    assert not ready(280, arcs[:-1], False).settled.all()


@pytest.mark.parametrize("directed", [True, False])
def test_paths_of_a_grid_are_drawn_evenly(directed: bool) -> None:
    """12 x 12: where the paths of all pairs run, against counts of lattice paths, party by party."""
    side = 12 if COMPILED else 7
    n = side**2
    expected = np.zeros(n)
    for s, t in np.ndindex(n, n):
        if s == t or (directed and (t // side < s // side or t % side < s % side)):
            continue
        for v, share in oracles.grid_shares(side, s, t):
            expected[v] += share if v not in (s, t) else 0
    expected /= n * (n - 1)
    samples = 2 * MANY
    hits = drawn(ready(n, oracles.grid(side), directed), samples)
    inside = expected > 0
    assert not hits[~inside].any()
    z = (hits - samples * expected)[inside] / np.sqrt(samples * expected * (1 - expected))[inside]
    assert np.abs(z).max() < norm.isf(CHANCE / (2 * n))


@pytest.mark.parametrize("directed", [True, False])
def test_paths_of_one_pair_are_drawn_evenly(directed: bool) -> None:
    """12 x 12, corner to corner: of C(22, 11) paths, C(k, i) C(22 - k, 11 - i) are in row i after k steps."""
    side, samples = 12, MANY // 2
    whole = ready(side**2, oracles.grid(side), directed, structure=False)
    corners = [int(np.flatnonzero(whole.old == v)[0]) for v in (0, side**2 - 1)]
    # as if there were three parties, two of them hanging on one corner
    prepared = replace(whole, n=3, anchor=np.array([corners[0], *corners[1:] * 2], np.int32))
    part = paths.run_block(prepared, 5, 0, samples)
    assert part.searched > samples / 4
    hits = np.zeros(side**2)
    hits[part.parties] = part.counts
    through = hits[[1, side]].sum()
    assert through == part.searched
    last = 2 * (side - 1)
    for step in range(1, last):
        rows = range(max(0, step - side + 1), min(step, side - 1) + 1)
        ways = [math.comb(step, row) * math.comb(last - step, side - 1 - row) for row in rows]
        seen = hits[[row * side + step - row for row in rows]]
        assert seen.sum() == through
        expected = np.array(ways) / math.comb(last, side - 1) * through
        often = expected >= 5
        seen, expected = (np.append(x[often], x[~often].sum()) for x in (seen, expected))
        statistic = ((seen - expected)[expected > 0] ** 2 / expected[expected > 0]).sum()
        assert statistic < chi2.isf(CHANCE / last, often.sum()), step


def test_path_counts_beyond_int64() -> None:
    """36 x 36: hits add up to the mean distance, and are as symmetric as the grid."""
    side, n, samples = 36, 36**2, MANY // 20
    square = drawn(ready(n, oracles.grid(side), False), samples).reshape(side, side)
    # the mean distance of two cells is 2/3 (side - 1/side) n / (n - 1); there is one place fewer in between
    mean = 2 / 3 * (side - 1 / side) * n / (n - 1) - 1
    slack = 6 / np.sqrt(samples)
    assert abs(square.sum() / samples - mean) < slack * side
    assert abs(square[:, :18].sum() - square[:, 18:].sum()) < slack * square.sum()
    assert abs(square[:18].sum() - square[18:].sum()) < slack * square.sum()


def test_path_counts_beyond_float64() -> None:
    """A chain of 800 gates, each 8 wide, has up to 8**800 shortest paths: through the places of a gate evenly."""
    gates, wide, samples = 800, 8, 2000 if COMPILED else 30
    n, arcs = chain_of_gates(gates, wide)
    places = drawn(ready(n, arcs, False, structure=False), samples)[gates + 1 :].reshape(gates, wide)
    expected = places.sum() / wide
    # places are drawn independently from gate to gate, so sums over gates are multinomial
    assert ((places.sum(0) - expected) ** 2 / expected).sum() < chi2.isf(CHANCE, wide - 1)
    # a third of all pairs, about, have a given gate between them, averaged over gates
    assert abs(places.sum() / gates / samples - 1 / 3) < 6 / np.sqrt(samples)


@pytest.mark.parametrize("directed", [True, False])
def test_blocks_add_up_to_the_same_whatever_their_order_of_making(directed: bool) -> None:
    n, size = 60, 512 if COMPILED else 64
    prepared = ready(n, scattered(n, 150, 7), directed)
    plan = list(paths.plan_blocks(size, 9 * size + 5))
    assert plan[-1] == (9 * size, 5)
    made = {start: paths.run_block(prepared, 3, start, samples) for start, samples in reversed(plan)}
    whole, resumed = paths.Tally.empty(n), paths.Tally.empty(n)
    whole.add(paths.run_block(prepared, 3, 0, 9 * size + 5))
    for start, _ in plan:
        resumed.add(made[start])
    assert resumed.taken == whole.taken == 9 * size + 5
    assert (resumed.hits == whole.hits).all()
    assert resumed.searched == whole.searched


def test_blocks_are_as_long_as_their_searches_are_short() -> None:
    assert paths.block_size(10, 10) == paths.MOST
    assert paths.block_size(paths.WORK, 500) == 256
    assert paths.block_size(paths.WORK, 512) == 512
    assert paths.block_size(paths.WORK, 1) == paths.FEWEST


def test_a_block_that_is_not_wanted_any_more_ends_at_once() -> None:
    prepared = ready(30, scattered(30, 70, 2), True)
    part = paths.run_block(prepared, 1, 0, 2**62, np.ones(1, np.uint8))
    assert not part.counts.any()


def test_a_block_out_of_turn_is_refused() -> None:
    prepared = ready(4, [(0, 1), (1, 2), (2, 3), (3, 0)], False)
    with pytest.raises(ValueError, match="from pair 10 came when pair 0 was due"):
        paths.Tally.empty(4).add(paths.run_block(prepared, 1, 10, 10))


def test_blocks_differ_and_depend_on_the_seed() -> None:
    prepared = ready(30, scattered(30, 70, 2), True)
    first, second, other, again = (
        paths.run_block(prepared, *at, 500).counts.tolist() for at in [(1, 0), (1, 500), (2, 0), (1, 0)]
    )
    assert first == again
    assert first != second
    assert first != other


@pytest.mark.parametrize("directed", [True, False])
@pytest.mark.parametrize("n", [0, 1, 2, 3])
def test_graphs_without_ties(n: int, directed: bool) -> None:
    prepared = ready(n, [], directed)
    assert prepared.settled.all()
    assert not drawn(prepared, 50).any()


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**64 - 1), st.integers(1, 2**32))
def test_random_words(start: int, bound: int) -> None:
    state, twin = np.array([start], np.uint64), oracles.SplitMix(start)
    with np.errstate(over="ignore"):
        for _ in range(5):
            assert int(kernels_paths.next_word(state)) == twin.word()
        for size in (bound, 1, 3, 2**31 + 1):
            assert kernels_paths.below(state, size) == twin.below(size)
        assert kernels_paths.unit(state) == (twin.word() >> 11) / 2**53
    assert state.tolist() == [twin.state]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.integers(0, 30), unique=True, max_size=12), st.integers(0, 31))
def test_searching_a_row(row: list[int], wanted: int) -> None:
    row = sorted(row)
    adj = np.array([0, *row, 40], np.uint32)
    assert kernels_paths.among(adj, 1, len(row) + 1, wanted) == (wanted in row)


@settings(max_examples=60 if COMPILED else 20, deadline=None)
@given(cases())
def test_hanging_trees_hang_on_the_core(case: Case) -> None:
    """The anchor is what leads to the rest when everybody with one neighbour has been taken off, again and again."""
    n, arcs, _, _ = case
    prepared = ready(n, arcs, False)
    anchor = prepared.old[prepared.anchor]
    near = {v: set(row) for v, row in enumerate(oracles.adjacency(n, arcs, False))}
    left = dict(near)
    while (leaf := next((v for v, row in left.items() if len(row) == 1), None)) is not None:
        left = {v: row - {leaf} for v, row in left.items() if v != leaf}
    # what is left of a tree is one vertex, whichever
    core = {v for v, row in left.items() if len(row) > 1}
    for v in range(n):
        assert anchor[anchor[v]] == anchor[v]
        assert v not in core or anchor[v] == v
        ahead, seen = [v], {v}
        while v not in core and ahead:
            for w in near[ahead.pop()] - seen:
                seen.add(w)
                if w in core:
                    assert anchor[v] == w
                else:
                    ahead.append(w)
        assert anchor[v] in seen


def test_memory_formula() -> None:
    scratch = paths._Scratch(10_000)
    assert sum(array.nbytes for array in vars(scratch).values()) == pytest.approx(
        paths.bytes_per_thread(10_000), rel=0.01
    )
