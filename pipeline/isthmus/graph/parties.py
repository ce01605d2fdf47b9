"""What the window's ties say of each party before any path is looked at."""

from __future__ import annotations

import numpy as np
import polars as pl
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from isthmus.graph.adjacency import Graph

__all__ = ["describe"]


def describe(graph: Graph, ties: pl.DataFrame) -> pl.DataFrame:
    """One row per party of the graph, in id order.

    `ties` has one row per ordered pair: sender, receiver, contacts, amount (null where the log has none),
    first_seen, last_seen. Columns returned: party, degree, degree_in, degree_out (distinct counterparts),
    contacts_in, contacts_out (log rows), amount_in, amount_out, component (0 = largest), component_size,
    first_seen, last_seen.
    """
    out, into = _one_side(ties, "sender", "out"), _one_side(ties, "receiver", "in")
    both = pl.concat([ties.select("sender", "receiver"), ties.select(sender="receiver", receiver="sender")])
    degree = both.unique().group_by(party="sender").agg(degree=pl.len().cast(pl.Int64))
    component, size = _components(graph)
    counted = ("degree", "degree_in", "degree_out", "contacts_in", "contacts_out")
    with_amounts = ties["amount"].null_count() < ties.height
    return (
        graph.parties.to_frame()
        .with_columns(component=component, component_size=size)
        .join(degree, on="party", how="left", maintain_order="left")
        .join(out, on="party", how="left", maintain_order="left")
        .join(into, on="party", how="left", maintain_order="left")
        .with_columns(
            pl.col(counted).fill_null(0),
            *(
                pl.col(f"amount_{side}").fill_null(0.0)
                if with_amounts
                else pl.lit(None, pl.Float64).alias(f"amount_{side}")
                for side in ("in", "out")
            ),
            first_seen=pl.min_horizontal("first_in", "first_out"),
            last_seen=pl.max_horizontal("last_in", "last_out"),
        )
        .select("party", *counted, "amount_in", "amount_out", "component", "component_size", "first_seen", "last_seen")
    )


def _one_side(ties: pl.DataFrame, key: str, side: str) -> pl.DataFrame:
    # sorted first, so that the float sums are added in one order whatever the number of threads
    ordered = ties.sort("sender", "receiver")
    return ordered.group_by(party=key, maintain_order=True).agg(
        pl.len().cast(pl.Int64).alias(f"degree_{side}"),
        pl.col("contacts").sum().alias(f"contacts_{side}"),
        pl.col("amount").sum().alias(f"amount_{side}"),
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
