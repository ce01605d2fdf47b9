"""What else a party's ties say of it, so that a broker can be told from the merely busy.

Pure functions: no files, no settings, the same bits for any number of threads.
"""

from __future__ import annotations

import numpy as np
import polars as pl
from numpy.typing import NDArray
from scipy import sparse

from isthmus.companions.cuts import articulation_points
from isthmus.companions.harmonic import closeness
from isthmus.companions.holes import burt
from isthmus.companions.library import core_numbers
from isthmus.companions.position import percentile, residual, standardised
from isthmus.companions.walks import eigenvector, pagerank
from isthmus.errors import DataRefused
from isthmus.graph import Graph, ids_of

__all__ = ["companions"]


def companions(
    graph: Graph,
    ties: pl.DataFrame,
    betweenness: pl.DataFrame,
    *,
    seed: int = 1,
    confidence: float = 0.95,
    samples: int = 4096,
    threads: int = 1,
) -> pl.DataFrame:
    """One row per party of the graph, in id order; columns as `tables.COMPANIONS` declares them, `run_id` aside.

    `ties`: one row per ordered pair, with sender, receiver, contacts > 0; self-contacts are left out.
    `betweenness`: one row per party in any order, with party, pairs, betweenness.

    Closeness and PageRank follow the graph's arcs, and its direction where it has one. All else is of the ties:
    strength and reciprocity with their direction; core number, articulation point and eigenvector of the simple
    undirected graph that joins whoever had contact either way; Burt's figures of the contacts both ways together.

    `samples`, `confidence`, `seed`: of closeness, where it is not exact (see `harmonic.closeness`). `threads` share
    that out; all else takes one.

    Raises DataRefused when ties or betweenness do not fit the graph's parties.
    """
    order = _placed(betweenness["party"], graph, "betweenness")
    if len(order) != graph.n or len(np.unique(order)) != graph.n:
        raise DataRefused(f"betweenness has {len(order)} rows, not one for each of {graph.n} parties")
    sent = _contacts(graph, ties)
    received = sent.T.tocsr()
    both = (sent + received).tocsr()
    both.sort_indices()
    degree = np.diff(both.indptr).astype(np.int64)
    # arcs out and arcs in, less each counterpart once, leaves those that are both
    mutual = np.diff(sent.indptr) + np.diff(received.indptr) - degree
    pattern = sparse.csr_array((np.ones(both.nnz), both.indices, both.indptr), shape=both.shape)
    out = sparse.csr_array((np.ones(graph.arcs), graph.out_adj, graph.out_ptr), shape=both.shape)
    near = closeness(graph, samples=samples, confidence=confidence, seed=seed, threads=threads)
    constraint, effective_size = burt(both)
    aligned = {name: np.empty(graph.n) for name in ("pairs", "betweenness")}
    for name, values in aligned.items():
        values[order] = betweenness[name].to_numpy()
    rest = residual(aligned["pairs"], degree.astype(np.float64))
    well_joined = eigenvector(pattern)
    return pl.DataFrame(
        {
            "party": graph.parties,
            "strength_in": _sums(received),
            "strength_out": _sums(sent),
            "reciprocity": _some(np.divide(mutual, degree, out=np.full(graph.n, np.nan), where=degree > 0)),
            "closeness": near.value,
            "closeness_lower": near.lower,
            "closeness_upper": near.upper,
            "eigenvector": _some(np.full(graph.n, np.nan) if well_joined is None else well_joined),
            "pagerank": pagerank(out),
            "core_number": core_numbers(pattern),
            "articulation_point": articulation_points(pattern),
            "constraint": _some(constraint),
            "effective_size": _some(effective_size),
            "betweenness_percentile": percentile(aligned["betweenness"]),
            "degree_percentile": percentile(degree.astype(np.float64)),
            "residual": _some(rest),
            "residual_z": _some(standardised(rest, degree.astype(np.float64))),
        }
    )


def _contacts(graph: Graph, ties: pl.DataFrame) -> sparse.csr_array:
    """Row = sender, column = receiver, int64: contacts."""
    tail, head = (_placed(ties[side], graph, "ties") for side in ("sender", "receiver"))
    contacts = ties["contacts"].to_numpy()
    kept = (tail != head) & (contacts > 0)
    shape = (graph.n, graph.n)
    return sparse.coo_array((contacts[kept].astype(np.int64), (tail[kept], head[kept])), shape=shape).tocsr()


def _placed(keys: pl.Series, graph: Graph, name: str) -> NDArray[np.int64]:
    """Ids of the keys; refuses those that the graph does not know."""
    placed = ids_of(keys, graph.parties)
    if not np.isfinite(placed).all() or (len(placed) and placed.min() < 0):
        raise DataRefused(f"{name} name parties that the graph does not have")
    return placed.astype(np.int64)


def _sums(matrix: sparse.csr_array) -> NDArray[np.int64]:
    sums = np.concatenate(([0], np.cumsum(matrix.data)))
    rows: NDArray[np.int64] = np.diff(sums[matrix.indptr])
    return rows


def _some(values: NDArray[np.float64]) -> pl.Series:
    return pl.Series(values, nan_to_null=True)
