"""Who can reach whom, against one plain search per party. Also run without the compiler: test_kernels_uncompiled.py."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings

import oracles
from isthmus.betweenness.engine_numba import reach
from isthmus.betweenness.engine_numba.accelerate import COMPILED
from isthmus.betweenness.engine_numba.prepare import prepare
from kernel_graphs import Arc, Case, arrays, cases, scattered

N = 1100  # more than two slabs of components


def forwards(seed: int) -> list[Arc]:
    return [(min(arc), max(arc)) for arc in scattered(N, 2 * N, seed)]


def cyclic(seed: int) -> list[Arc]:
    """One large component on cycles, what leads to it, what it leads to, and loose parts."""
    return scattered(N, N + N // 4, seed)


def couples(seed: int) -> list[Arc]:
    """Forwards, and every third party in a cycle with the next: sets of bits with weights all over."""
    return [*forwards(seed), *((v + 1, v) for v in range(0, N - 1, 3)), *((v, v + 1) for v in range(0, N - 1, 3))]


def limits(n: int, arcs: list[Arc], directed: bool, cheap: float) -> tuple[np.ndarray, np.ndarray]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(reach, "CHEAP", cheap)
        return reach.reach_limits(arrays(n, arcs, directed))


def check(n: int, arcs: list[Arc], directed: bool) -> None:
    known = oracles.reach(n, arcs, directed)
    together = np.array(oracles.reach(n, arcs, directed=False)[0])
    for truth, exact, bound in zip(
        known, limits(n, arcs, directed, math.inf), limits(n, arcs, directed, -1), strict=True
    ):
        assert exact.tolist() == truth
        assert (truth <= bound).all()
        assert (bound <= together).all()


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("shape", [forwards, cyclic, couples])
def test_large_graphs(shape: Callable[[int], list[Arc]], seed: int) -> None:
    check(N, shape(seed), True)


@settings(max_examples=200 if COMPILED else 40, deadline=None)
@given(cases(most=12))
def test_small_graphs(case: Case) -> None:
    n, arcs, directed, _ = case
    check(n, arcs, directed)


def test_one_pass_is_exact_on_a_tree_and_counts_a_diamond_twice() -> None:
    tree = [(0, 1), (0, 2), (1, 3), (1, 4), (4, 5), (5, 4)]
    assert limits(6, tree, True, -1)[1].tolist() == [5, 3, 0, 0, 1, 1]
    # 4 reaches 0, ahead of the diamond; 0 reaches 1, 2 and, by both, 3
    diamond = [(4, 0), (0, 1), (0, 2), (1, 3), (2, 3), (5, 4)]
    assert limits(6, diamond, True, -1)[1].tolist() == [4, 1, 1, 0, 5, 5]
    assert limits(6, diamond, True, math.inf)[1].tolist() == [3, 1, 1, 0, 4, 5]


@pytest.mark.parametrize("cheap", [math.inf, -1])
@pytest.mark.parametrize("ties", [150, 220, 600])
def test_no_betweenness_above_its_ceiling(ties: int, cheap: float, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(reach, "CHEAP", cheap)
    n = 150
    arcs = scattered(n, ties, ties, lean=1.5)
    graph = arrays(n, arcs, True)
    prepared = prepare(n, graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, True)
    truth = np.sum(oracles.brandes(n, arcs, True), axis=0) / ((n - 1) * (n - 2))
    assert (truth <= prepared.ceiling + 1e-12).all()
    together = np.array(oracles.reach(n, arcs, directed=False)[0])
    assert (prepared.ceiling < together * (together - 1) / ((n - 1) * (n - 2))).sum() > n / 10


def test_a_path_meets_its_ceiling() -> None:
    graph = arrays(5, [(0, 1), (1, 2), (2, 3), (3, 4)], True)
    prepared = prepare(5, graph.out_ptr, graph.out_adj, graph.in_ptr, graph.in_adj, True)
    np.testing.assert_allclose(prepared.ceiling * 12, [0, 3, 4, 3, 0])
