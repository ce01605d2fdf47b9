"""Every method on graphs whose betweenness is known in closed form, and identities that hold on any graph."""

from __future__ import annotations

import math
from itertools import combinations, product

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import oracles
from isthmus.betweenness import betweenness

# So sure that a fixed seed falling outside means a fault.
SURE = 1 - 1e-9


def star(n):
    return n, [(0, i) for i in range(1, n)], [(n - 1) * (n - 2) / 2] + [0.0] * (n - 1)


def path(n):
    return n, [(i, i + 1) for i in range(n - 1)], [float(i * (n - 1 - i)) for i in range(n)]


def cycle(n):
    value = (n - 2) ** 2 / 8 if n % 2 == 0 else (n - 1) * (n - 3) / 8
    return n, [(i, (i + 1) % n) for i in range(n)], [value] * n


def complete(n):
    return n, list(combinations(range(n), 2)), [0.0] * n


def bipartite(m, n):
    arcs = [(a, m + b) for a, b in product(range(m), range(n))]
    return m + n, arcs, [n * (n - 1) / (2 * m)] * m + [m * (m - 1) / (2 * n)] * n


def hypercube(d):
    arcs = [(v, v ^ (1 << b)) for v in range(2**d) for b in range(d) if not v >> b & 1]
    return 2**d, arcs, [2 ** (d - 2) * (d - 2) + 0.5] * 2**d


def wheel(n):
    rim = [(i, i % (n - 1) + 1) for i in range(1, n)]
    return n, rim + [(0, i) for i in range(1, n)], [(n - 1) * (n - 5) / 2] + [0.5] * (n - 1)


def crown(k):
    arcs = [(a, k + b) for a, b in product(range(k), range(k)) if a != b]
    return 2 * k, arcs, [(k + 1) / 2] * (2 * k)


def windmill(k):
    arcs = [arc for i in range(k) for arc in ((0, 2 * i + 1), (0, 2 * i + 2), (2 * i + 1, 2 * i + 2))]
    return 2 * k + 1, arcs, [4.0 * math.comb(k, 2)] + [0.0] * (2 * k)


def petersen():
    arcs = [(i, (i + 1) % 5) for i in range(5)] + [(i, i + 5) for i in range(5)]
    return 10, arcs + [(5 + i, 5 + (i + 2) % 5) for i in range(5)], [3.0] * 10


def binary_tree(depth):
    """Any tree: the sum over pairs of branches at the vertex of the product of their sizes."""
    n = 2**depth - 1
    size = [1] * n
    for v in range(n - 1, 0, -1):
        size[(v - 1) // 2] += size[v]
    values = []
    for v in range(n):
        branches = [size[c] for c in (2 * v + 1, 2 * v + 2) if c < n] + [n - size[v]]
        values.append(float(sum(a * b for a, b in combinations(branches, 2))))
    return n, [((v - 1) // 2, v) for v in range(1, n)], values


def lattice(side):
    at = lambda r, c: r * side + c  # noqa: E731
    return side**2, [(at(r, c), at(r, c + 1)) for r in range(side) for c in range(side - 1)] + [
        (at(r, c), at(r + 1, c)) for r in range(side - 1) for c in range(side)
    ]


UNDIRECTED = {
    "star": star(11),
    "path": path(10),
    "even cycle": cycle(12),
    "odd cycle": cycle(11),
    "complete": complete(7),
    "bipartite": bipartite(3, 5),
    "hypercube": hypercube(4),
    "wheel": wheel(9),
    "crown": crown(5),
    "windmill": windmill(5),
    "petersen": petersen(),
    "tree": binary_tree(4),
}
DIRECTED = {
    "directed cycle": (9, [(i, (i + 1) % 9) for i in range(9)], [8 * 7 / 2.0] * 9),
    # s before v before t: i * (n-1-i) ordered pairs
    "directed path": (8, [(i, i + 1) for i in range(7)], [float(i * (7 - i)) for i in range(8)]),
    # 5 senders, one broker, 4 receivers: every sender reaches every receiver through it
    "funnel": (10, [(i, 5) for i in range(5)] + [(5, i) for i in range(6, 10)], [0.0] * 5 + [20.0] + [0.0] * 4),
}
FORMS = [(name, form, False) for name, form in UNDIRECTED.items()] + [
    (name, form, True) for name, form in DIRECTED.items()
]


@pytest.mark.parametrize(("name", "form", "directed"), FORMS, ids=[form[0] for form in FORMS])
class TestClosedForms:
    def test_exact(self, build, engine, name, form, directed):
        n, arcs, pairs = form
        estimate = betweenness(build(n, arcs, directed), method="exact", engine=engine)
        assert estimate.pairs == pytest.approx(pairs, rel=1e-10, abs=0)
        assert (estimate.lower == estimate.betweenness).all()
        assert (estimate.upper == estimate.betweenness).all()
        assert (estimate.std_error == 0).all()
        assert estimate.stopped_because == "exact"

    def test_equal_lengths_change_nothing(self, build, engine, name, form, directed):
        n, arcs, pairs = form
        graph = build(n, arcs, directed, [3] * len(arcs))
        assert betweenness(graph, method="exact", engine=engine).pairs == pytest.approx(pairs, rel=1e-10, abs=0)

    @pytest.mark.parametrize("method", ["pivots", "paths"])
    def test_sampled(self, build, engine, name, form, directed, method):
        n, arcs, pairs = form
        truth = np.array(pairs) / ((n - 1) * (n - 2) / (1 if directed else 2))
        estimate = betweenness(
            build(n, arcs, directed), method=method, engine=engine, samples=4000, confidence=SURE, seed=3
        )
        assert (estimate.lower <= truth + 1e-12).all()
        assert (truth <= estimate.upper + 1e-12).all()
        assert (estimate.lower <= estimate.betweenness).all()
        assert (estimate.betweenness <= estimate.upper).all()
        assert estimate.lower.min() >= 0
        assert estimate.upper.max() <= 1
        # far closer than the bound: 6 standard errors at the worst value of the variance
        assert np.abs(estimate.betweenness - truth).max() <= 6 * 1.0 / math.sqrt(4000)
        # our engine draws no source twice, and asks nothing of a graph that needs no drawing
        assert estimate.samples == (4000 if engine == "networkit" or method == "paths" else n)


@pytest.mark.parametrize("method", ["exact", "pivots", "paths"])
class TestNothingToMeasure:
    @pytest.mark.parametrize("directed", [True, False])
    @pytest.mark.parametrize(("n", "arcs"), [(0, []), (1, []), (2, []), (2, [(0, 1)]), (2, [(0, 1), (1, 0)])])
    def test_too_few_parties(self, build, engine, method, n, arcs, directed):
        estimate = betweenness(build(n, arcs, directed), method=method, engine=engine)
        assert estimate.betweenness.tolist() == estimate.upper.tolist() == [0.0] * n
        assert estimate.frame().height == n

    def test_pairs_only(self, build, engine, method):
        graph = build(9, [(0, 1), (1, 0), (2, 3), (4, 5), (6, 6)], True)
        assert betweenness(graph, method=method, engine=engine, samples=50).upper.max() == 0


def test_values_of_large_lattices(build, engine):
    small = betweenness(build(*lattice(5), False), method="exact", engine=engine)
    assert small.pairs.max() == pytest.approx(65.742857, abs=5e-7)
    # path counts pass 2**63 here; the value at the centre summed from whole binomials, no path walked
    large = betweenness(build(*lattice(50), False), method="exact", engine=engine, threads=2)
    assert large.pairs.max() == pytest.approx(90107.69863748744, rel=1e-10)


def test_equal_by_symmetry_is_equal(build, engine):
    # a circulant graph looks the same from everywhere, but the sums are added up in another order at each party
    arcs = [(i, (i + step) % 31) for i in range(31) for step in (1, 5, 8)]
    estimate = betweenness(build(31, arcs, False), method="exact", engine=engine)
    assert len(set(estimate.betweenness)) == 1
    frame = estimate.frame(top=3)
    assert set(frame["rank_best"]) == {1}
    assert set(frame["top"]) == {"open"}
    assert frame["party"].is_sorted()


# Identities on random graphs ------------------------------------------------------------------------------------------


@st.composite
def graphs(draw, weighted=True):
    n = draw(st.integers(3, 9))
    directed = draw(st.booleans())
    possible = [(a, b) for a in range(n) for b in range(n) if (a != b if directed else a < b)]
    arcs = draw(st.lists(st.sampled_from(possible), unique=True, max_size=3 * n))
    lengths = (
        draw(st.lists(st.integers(1, 4), min_size=len(arcs), max_size=len(arcs)))
        if weighted and draw(st.booleans())
        else None
    )
    return n, arcs, directed, lengths


often = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@often
@given(graphs())
def test_exact_is_the_oracle(build, engine, case):
    n, arcs, directed, lengths = case
    got = betweenness(build(n, arcs, directed, lengths), method="exact", engine=engine)
    assert got.betweenness == pytest.approx(oracles.betweenness(n, arcs, directed, lengths), rel=1e-10, abs=0)


@often
@given(graphs(), st.sampled_from(["pivots", "paths"]), st.integers(0, 2**63 - 1))
def test_sampled_contain_the_oracle(build, engine, case, method, seed):
    n, arcs, directed, lengths = case
    if method == "paths" and (directed or engine == "numba"):
        lengths = None
    graph = build(n, arcs, directed, lengths)
    got = betweenness(graph, method=method, engine=engine, samples=300, confidence=SURE, seed=seed)
    truth = np.array(oracles.betweenness(n, arcs, directed, lengths))
    # values are rounded to eleven digits, so an interval that has closed may miss by half of the last one
    assert (got.lower <= truth * (1 + 5e-11)).all()
    assert (truth <= got.upper * (1 + 5e-11) + 1e-15).all()
    assert (truth[got.upper == 0] == 0).all()


@often
@given(graphs(weighted=False))
def test_sum_is_the_sum_of_inner_vertices(build, engine, case):
    n, arcs, directed, _ = case
    reach = [d - 1 for row in oracles.distances(oracles.adjacency(n, arcs, directed)) for d in row if 0 < d < math.inf]
    total = betweenness(build(n, arcs, directed), method="exact", engine=engine).pairs.sum()
    assert total == pytest.approx(sum(reach) / (1 if directed else 2), rel=1e-10)


@often
@given(graphs(), st.randoms(use_true_random=False))
def test_relabelling_changes_nothing(build, engine, case, random):
    n, arcs, directed, lengths = case
    new = list(range(n))
    random.shuffle(new)
    one = betweenness(build(n, arcs, directed, lengths), method="exact", engine=engine)
    moved = [(new[a], new[b]) for a, b in arcs]
    two = betweenness(build(n, moved, directed, lengths), method="exact", engine=engine)
    assert two.pairs[new] == pytest.approx(one.pairs, rel=1e-10, abs=0)


@often
@given(graphs(weighted=False), graphs(weighted=False))
def test_disjoint_union_is_both(build, engine, case, other):
    n, arcs, directed, _ = case
    m, more, _, _ = other
    if not directed:
        more = list({(min(a, b), max(a, b)) for a, b in more})
    union = arcs + [(n + a, n + b) for a, b in more]
    one, two, both = (
        betweenness(build(size, ties, directed), method="exact", engine=engine).pairs
        for size, ties in ((n, arcs), (m, more), (n + m, union))
    )
    assert both == pytest.approx(np.concatenate([one, two]), rel=1e-10, abs=0)


def test_leaf_adds_a_known_count(build, engine):
    # a leaf on the end of a path makes it the longer path: i * (n-1-i) grows by i
    n, arcs, pairs = path(7)
    grown = betweenness(build(n + 1, [*arcs, (n - 1, n)], False), method="exact", engine=engine)
    assert grown.pairs == pytest.approx([x + i for i, x in enumerate(pairs)] + [0.0], rel=1e-10, abs=0)
