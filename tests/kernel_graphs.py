"""Small graphs of our own, as arcs and as the arrays that kernels take."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from hypothesis import strategies as st

import oracles
from isthmus.betweenness.engine_numba import subgraphs
from isthmus.graph import Arrays

Arc = tuple[int, int]
Case = tuple[int, list[Arc], bool, list[int] | None]


def arrays(n: int, arcs: Iterable[Arc], directed: bool, lengths: Iterable[int] | None = None) -> Arrays:
    """Loops and repeats dropped."""
    out = oracles.adjacency(n, arcs, directed, lengths)
    rows = [(v, w, length) for v in range(n) for w, length in out[v].items()]
    tail, tip, length = np.array(rows, np.int64).reshape(-1, 3).T
    return subgraphs.from_arcs(n, tail, tip, None if lengths is None else length, directed=directed)


def scattered(n: int, ties: int, seed: int, lean: float = 1.0) -> list[Arc]:
    """Random arcs whose ends lean towards low numbers; leaves, bridges and loose parts included."""
    ends = (n * np.random.default_rng(seed).random((ties, 2)) ** lean).astype(int)
    return sorted({(int(s), int(t)) for s, t in ends if s != t})


def undirected(arcs: Iterable[Arc]) -> list[Arc]:
    return sorted({(min(arc), max(arc)) for arc in arcs})


def chain_of_gates(gates: int, wide: int) -> tuple[int, list[Arc]]:
    """Posts 0..gates in a row; between two posts a gate of `wide` places, numbered from gates + 1 on."""
    arcs = []
    for i in range(gates):
        for place in range(gates + 1 + i * wide, gates + 1 + (i + 1) * wide):
            arcs += [(i, place), (place, i + 1)]
    return gates + 1 + gates * wide, arcs


@st.composite
def cases(draw: st.DrawFn, weighted: bool = False, most: int = 9) -> Case:
    """Graphs, directed or not, often disconnected, with hanging trees, blocks and twins."""
    n = draw(st.integers(0, most))
    directed = draw(st.booleans())
    pairs = [(u, v) for u in range(n) for v in range(n) if (u != v if directed else u < v)]
    arcs = draw(st.lists(st.sampled_from(pairs), max_size=2 * n, unique=True)) if pairs else []
    if n > 2 and draw(st.booleans()):  # make v a copy of u
        u, v = draw(st.lists(st.integers(0, n - 1), min_size=2, max_size=2, unique=True))
        kept = [arc for arc in arcs if v not in arc]
        copied = [tuple(v if end == u else end for end in arc) for arc in kept if u in arc]
        arcs = kept + [arc if directed else (min(arc), max(arc)) for arc in copied]
    lengths = draw(st.lists(st.integers(1, 4), min_size=len(arcs), max_size=len(arcs))) if weighted else None
    return n, arcs, directed, lengths
