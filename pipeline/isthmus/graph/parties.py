"""What the window's ties say of each party before any path is looked at."""

from __future__ import annotations

import numpy as np
import polars as pl
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from isthmus.graph.adjacency import Graph, ids_of

__all__ = ["describe"]

# Sums of decimals do not depend on the order of adding, so not on the number of threads either.
EXACT = pl.Decimal(38, 9)


def describe(graph: Graph, ties: pl.DataFrame) -> pl.DataFrame:
    """One row per party of the graph, in id order.

    `ties` has one row per ordered pair: sender, receiver, contacts, amount (null where the log has none),
    first_seen, last_seen. Columns returned: party, degree, degree_in, degree_out (distinct counterparts),
    contacts_in, contacts_out (log rows), amount_in, amount_out, component (0 = largest), component_size,
    first_seen, last_seen.
    """
    coded = ties.with_columns(pl.Series(side, ids_of(ties[side], graph.parties)) for side in ("sender", "receiver"))
    out = _one_side(coded, "sender", "out")
    into = _one_side(coded, "receiver", "in")
    ends = [coded.select(id=one, other=two) for one, two in (("sender", "receiver"), ("receiver", "sender"))]
    degree = pl.concat(ends).unique().group_by("id").agg(degree=pl.len().cast(pl.Int64))
    component, size = _components(graph)
    counts = ("degree", "degree_in", "degree_out", "contacts_in", "contacts_out")
    amounts = ("amount_in", "amount_out")
    no_amounts = ties["amount"].null_count() == ties.height
    described = pl.DataFrame({"id": np.arange(graph.n), "component": component, "component_size": size})
    for side in (degree, out, into):
        described = described.join(side, on="id", how="left", maintain_order="left")
    return described.with_columns(
        graph.parties,
        pl.col(counts).fill_null(0),
        pl.lit(None, pl.Float64).alias("amount_in") if no_amounts else pl.col("amount_in").fill_null(0.0),
        pl.lit(None, pl.Float64).alias("amount_out") if no_amounts else pl.col("amount_out").fill_null(0.0),
        first_seen=pl.min_horizontal("first_in", "first_out"),
        last_seen=pl.max_horizontal("last_in", "last_out"),
    ).select("party", *counts, *amounts, "component", "component_size", "first_seen", "last_seen")


def _one_side(ties: pl.DataFrame, key: str, side: str) -> pl.DataFrame:
    return ties.group_by(id=key).agg(
        pl.len().cast(pl.Int64).alias(f"degree_{side}"),
        pl.col("contacts").sum().alias(f"contacts_{side}"),
        pl.col("amount").cast(EXACT).sum().cast(pl.Float64).alias(f"amount_{side}"),
        pl.col("first_seen").min().alias(f"first_{side}"),
        pl.col("last_seen").max().alias(f"last_{side}"),
    )


def _components(graph: Graph) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Weakly connected components, numbered by size, equal sizes by their first party. Shapes (n,), (n,)."""
    n = graph.n
    matrix = sparse.csr_array((np.ones(graph.arcs, np.int8), graph.out_adj, graph.out_ptr), shape=(n, n))
    count, label = connected_components(matrix, directed=True, connection="weak")
    sizes = np.bincount(label, minlength=count)
    first = np.full(count, n)
    np.minimum.at(first, label, np.arange(n))
    number = np.empty(count, np.int64)
    number[np.lexsort((first, -sizes))] = np.arange(count)
    return number[label], sizes[label]
