"""What structure settles before any path is drawn, and the renumbered graph that the sampler searches.

Undirected, without a hop limit:

- a vertex that separates s from t lies on all their shortest paths, so what separating earns is counted, not
  sampled (`Prepared.exact`), and the sampler scores a vertex only where its path runs through a single block;
- searches start where an end's hanging tree meets the core, and never enter the trees;
- vertices whose neighbours are tied to each other in every block are settled completely.

Directed, or with a hop limit, separating is not enough (the path need not exist), so only certain zeros are
known: parties without incoming or outgoing arcs, and those that every pair of neighbours bypasses. Arcs into
dead ends are not searched.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from isthmus.betweenness.engine_numba.kernels_paths import NO_IN, NO_OUT
from isthmus.betweenness.engine_numba.kernels_structure import anchor_trees, blocks, bypassed, peel, renumber
from isthmus.betweenness.engine_numba.reach import reach_limits
from isthmus.betweenness.engine_numba.trees import pairs_apart
from isthmus.graph.arrays import Arrays


@dataclass(frozen=True)
class Prepared:
    """A graph made ready for `kernels_paths.sample_paths`: plain arrays, so it can be memory-mapped or sent.

    n: vertices pairs are drawn from; searched: vertices of the renumbered graph. exact: float64[n], the part
    of each party's betweenness (Freeman's scale, 0..1) that is known without sampling. ceiling: float64[n],
    what no party can exceed: all pairs of its weak component, and when directed those that can reach it times
    those that it can reach. settled: bool[n], True where `exact` is the whole of it. old: int32[searched],
    original ids; anchor: int32[n], searched vertex from which a party's searches start.
    """

    n: int
    directed: bool
    max_hops: int
    exact: NDArray[np.float64]
    ceiling: NDArray[np.float64]
    settled: NDArray[np.bool_]
    old: NDArray[np.int32]
    anchor: NDArray[np.int32]
    component: NDArray[np.int32]
    ends: NDArray[np.uint8]
    out_rows: NDArray[np.int64]
    out_adj: NDArray[np.uint32]
    in_rows: NDArray[np.int64]
    in_adj: NDArray[np.uint32]
    home: NDArray[np.int32]
    entry: NDArray[np.int32]


def prepare(
    n: int,
    out_ptr: NDArray[np.int64],
    out_adj: NDArray[np.int32],
    in_ptr: NDArray[np.int64],
    in_adj: NDArray[np.int32],
    directed: bool,
    max_hops: int = 0,
    structure: bool = True,
) -> Prepared:
    """Settle what can be settled and renumber the rest, busiest vertices first.

    out_ptr: int64[n + 1], out_adj: int32[m], rows sorted, no self-contacts, no repeats; in_ptr, in_adj: the
    reverse (the same arrays when undirected). max_hops: 0 = no limit. structure=False samples everything (for
    tests).
    """
    arcs = csr_array((np.ones(out_adj.size, np.int8), out_adj, out_ptr), shape=(n, n))
    _, component = connected_components(arcs, directed=directed, connection="weak")
    component = component.astype(np.int32)
    anchor = np.arange(n, dtype=np.int32)
    home, entry = np.zeros(n, np.int32), np.full(n, -1, np.int32)
    pairs = max(1.0, (n - 1.0) * (n - 2.0))
    company = np.bincount(component, minlength=1)
    ceiling = ((company - 1.0) * (company - 2.0))[component] / pairs
    if directed:
        graph = Arrays(directed=True, out_ptr=out_ptr, out_adj=out_adj, in_ptr=in_ptr, in_adj=in_adj)
        before, after = reach_limits(graph)
        ceiling = np.minimum(ceiling, before * after / pairs)
    exact = np.zeros(n)
    settled = np.zeros(n, np.bool_)
    if structure:
        if not directed and max_hops == 0:
            anchor_trees(*peel(out_ptr, out_adj), anchor)
            size, below, squares = company[component].astype(float), np.ones(n), np.zeros(n)
            _, _, home, entry = blocks(out_ptr, out_adj, below, squares, size)
            exact = pairs_apart(size, below, squares) / pairs
        settled = bypassed(out_ptr, out_adj, in_ptr, in_adj, home, entry) | (ceiling <= exact)

    out_degree, in_degree = np.diff(out_ptr), np.diff(in_ptr)
    core = np.flatnonzero(anchor == np.arange(n))
    busiest = np.argsort(-(out_degree + in_degree)[core], kind="stable")
    old = core[busiest].astype(np.int32)
    new = np.full(n, -1, np.int32)
    new[old] = np.arange(old.size, dtype=np.int32)
    no_out, no_in = out_degree[old] == 0, in_degree[old] == 0
    # Undirected vertices without arcs have no neighbours to be left out by.
    out_rows, out_arcs = _searched(out_ptr, out_adj, new, old, no_out)
    in_rows, in_arcs = _searched(in_ptr, in_adj, new, old, no_in) if directed else (out_rows, out_arcs)
    # `entry` is compared with searched vertices; entries outside the core are never met there.
    return Prepared(
        n=n,
        directed=directed,
        max_hops=max_hops,
        exact=exact,
        ceiling=ceiling,
        settled=settled,
        old=old,
        anchor=new[anchor],
        component=component[old],
        ends=(no_out * NO_OUT + no_in * NO_IN).astype(np.uint8),
        out_rows=out_rows,
        out_adj=out_arcs,
        in_rows=in_rows,
        in_adj=in_arcs,
        home=home[old],
        entry=np.where(entry[old] >= 0, new[entry[old]], np.int32(-1)).astype(np.int32),
    )


def _searched(
    ptr: NDArray[np.int64],
    adj: NDArray[np.int32],
    new: NDArray[np.int32],
    old: NDArray[np.int32],
    aside: NDArray[np.bool_],
) -> tuple[NDArray[np.int64], NDArray[np.uint32]]:
    rows = np.empty((old.size + 1, 2), np.int64)
    arcs = np.empty(adj.size, np.uint32)
    kept = renumber(ptr, adj, new, old, aside, rows, arcs)
    return rows, arcs[:kept].copy() if kept < arcs.size else arcs
