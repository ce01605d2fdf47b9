"""What several test files share."""

from __future__ import annotations

import os

# Read once, when the libraries are loaded: two cores are enough for every test, and equal on every machine.
os.environ.setdefault("POLARS_MAX_THREADS", "2")

import numpy as np
import polars as pl
import pytest

from isthmus.graph import Graph

# Every test of a method runs for each engine named here.
ENGINES = ["networkit", "numba"]


@pytest.fixture(params=ENGINES)
def engine(request: pytest.FixtureRequest) -> str:
    return request.param


@pytest.fixture(scope="session")
def build():
    """build(n, arcs, directed, lengths=None) -> Graph on parties p000000.. in id order."""

    def build_graph(n, arcs, directed, lengths=None) -> Graph:
        arcs = np.array(list(arcs), np.int64).reshape(-1, 2)
        parties = pl.Series("party", [f"p{i:06d}" for i in range(n)], dtype=pl.String)
        strength = None if lengths is None else 1.0 / np.asarray(list(lengths), np.float64)
        return Graph.from_arcs(parties, arcs[:, 0], arcs[:, 1], strength, directed=directed)

    return build_graph
