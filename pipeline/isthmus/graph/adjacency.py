"""The graph of a window as compressed adjacency (CSR), in memory or memory-mapped from the work folder."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

import numpy as np
import polars as pl
from numpy.typing import NDArray
from scipy import sparse

from isthmus.errors import DataRefused, SettingsError, StoreError
from isthmus.graph.arrays import Arrays, Ids, Ints
from isthmus.settings import Distance

__all__ = ["LENGTH_OF_WEAKEST", "Graph", "ids_of"]

# The weakest tie gets this length and a tie k times as strong gets 1/k of it, rounded to a whole number: sums of
# whole numbers below 2**53 are exact, so two routes of equal length are equal in every engine and on every machine.
# lcm(1..16) makes 1/2 + 1/2 = 1/3 + 1/3 + 1/3 = 1 hold; 2**20 leaves six digits for a tie a million times as strong.
LENGTH_OF_WEAKEST = 720_720 * 2**20


@dataclass(frozen=True, eq=False, kw_only=True)
class Graph(Arrays):
    """Who can reach whom in one step. `parties` (n strings, sorted) gives party of id 0..n-1.

    `folder` is where the arrays are mapped from, for workers that see the same disk; None for a graph in memory.
    """

    parties: pl.Series
    folder: Path | None = None

    @property
    def ties(self) -> int:
        """Number of ties: ordered pairs when directed, unordered ones when not."""
        return self.arcs if self.directed else self.arcs // 2

    @classmethod
    def from_ties(
        cls,
        ties: pl.DataFrame,
        *,
        directed: bool = True,
        distance: Distance = "hops",
    ) -> Graph:
        """Build from a frame with columns `sender` and `receiver` and, where `distance` asks, that strength.

        Repeated ties add their strengths up. Self-contacts are left out, and with a weighted distance ties whose
        strength is 0 or no number, for they are infinitely long; the parties stay in either case.

        Raises SettingsError for another distance, DataRefused when a column is missing or a key is null.
        """
        if distance not in (choices := get_args(Distance)):
            raise SettingsError(f"distance = {distance!r} is not known; it is one of {', '.join(choices)}")
        needed = {"sender", "receiver"} | ({distance} - {"hops"})
        if missing := sorted(needed - set(ties.columns)):
            raise DataRefused(f"ties lack the column {', '.join(missing)}; they have {', '.join(ties.columns)}")
        keys = [ties[side] for side in ("sender", "receiver")]
        if any(key.null_count() for key in keys):
            raise DataRefused("ties hold a null sender or receiver; drop those rows first")
        parties = pl.concat(key.unique().cast(pl.String) for key in keys).unique().sort().alias("party")
        tail, head = (ids_of(key, parties) for key in keys)
        strength = None if distance == "hops" else ties[distance].cast(pl.Float64).fill_null(0.0).to_numpy()
        kept = tail != head if strength is None else (tail != head) & (strength > 0)
        if not kept.all():
            tail, head = tail[kept], head[kept]
            strength = strength if strength is None else strength[kept]
        return cls.from_arcs(parties, tail, head, strength, directed=directed)

    @classmethod
    def from_arcs(
        cls,
        parties: pl.Series,
        tail: NDArray[Any],
        head: NDArray[Any],
        strength: NDArray[np.float64] | None = None,
        *,
        directed: bool,
    ) -> Graph:
        """Build from arrays of ids (tail[i] leads to head[i]); repeats are merged, their strengths added."""
        n = len(parties)
        data = np.ones(len(tail)) if strength is None else strength
        out = sparse.coo_array((data, (tail, head)), shape=(n, n)).tocsr()
        if not directed:
            out = (out + out.T).tocsr()
        out.sort_indices()
        back = out.T.tocsr() if directed else out
        back.sort_indices()
        weakest = float(out.data.min()) if strength is not None and out.nnz else 1.0
        forward, reverse = _rows(out, strength is not None, weakest), _rows(back, strength is not None, weakest)
        return cls(
            parties=parties,
            directed=directed,
            out_ptr=forward[0],
            out_adj=forward[1],
            out_lengths=forward[2],
            in_ptr=reverse[0],
            in_adj=reverse[1],
            in_lengths=reverse[2],
        )

    def save(self, folder: Path) -> None:
        """Write the arrays so that any process on any machine that sees the folder can map them."""
        folder.mkdir(parents=True, exist_ok=True)
        for name in _ARRAYS:
            array = getattr(self, name)
            if array is None or (name.startswith("in_") and not self.directed):
                (folder / f"{name}.npy").unlink(missing_ok=True)  # of a graph saved here before
            else:
                np.save(folder / f"{name}.npy", array)
        self.parties.to_frame().write_ipc(folder / "parties.arrow")
        (folder / "graph.json").write_text(json.dumps({"directed": self.directed, "n": self.n, "arcs": self.arcs}))

    @classmethod
    def open(cls, folder: Path) -> Graph:
        """Map what `save` wrote, read-only. Raises StoreError when it is not all there."""
        try:
            told = json.loads((folder / "graph.json").read_text())
            arrays = {
                name: np.load(folder / f"{name}.npy", mmap_mode="r")
                for name in _ARRAYS
                if (folder / f"{name}.npy").exists()
            }
            parties = pl.read_ipc(folder / "parties.arrow")["party"]
        except (OSError, ValueError) as error:
            raise StoreError(f"cannot map the graph in {folder}: {error}; run the night again") from None
        if not told["directed"]:
            arrays |= {f"in_{name.removeprefix('out_')}": array for name, array in arrays.items()}
        return cls(parties=parties, folder=folder, directed=told["directed"], **arrays)


_ARRAYS = ("out_ptr", "out_adj", "out_lengths", "in_ptr", "in_adj", "in_lengths")


def ids_of(keys: pl.Series, parties: pl.Series) -> NDArray[np.int64]:
    """Position of each key in `parties`; every key must be there. An Enum is looked up once per category."""
    if isinstance(keys.dtype, pl.Enum):
        found: Ints = _lookup(keys.dtype.categories, parties).fill_null(-1).to_numpy()
        codes: Ints = keys.to_physical().to_numpy()
        return found[codes]
    return _lookup(keys.cast(pl.String), parties).to_numpy()


def _lookup(keys: pl.Series, parties: pl.Series) -> pl.Series:
    book = pl.DataFrame({"key": parties, "id": pl.int_range(len(parties), dtype=pl.Int64, eager=True)})
    return keys.alias("key").to_frame().join(book, on="key", how="left", maintain_order="left")["id"]


def _rows(matrix: sparse.csr_array, weighted: bool, weakest: float) -> tuple[Ints, Ids, Ints | None]:
    lengths = None
    if weighted:
        # above six million parties a little shorter, so that the longest route still fits 62 bits
        longest = LENGTH_OF_WEAKEST >> max(0, (LENGTH_OF_WEAKEST * matrix.shape[0]).bit_length() - 62)
        lengths = np.maximum(np.rint(longest * (weakest / matrix.data)), 1).astype(np.int64)
    return matrix.indptr.astype(np.int64), matrix.indices.astype(np.int32), lengths
