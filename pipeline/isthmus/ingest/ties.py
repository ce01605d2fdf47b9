"""Tables of ties in the work folder, and the one way to add several up.

A table is a folder with `parties.arrow`, the sorted book of keys, and `ties.arrow`, one row per ordered pair, whose
`sender` and `receiver` are positions in that book. Amounts are decimals, so no sum depends on the order of adding.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl

from isthmus.ingest.keys import positions, shared_book

__all__ = ["AMOUNT", "DaySource", "Merge", "add_up", "add_up_to", "as_frame"]

AMOUNT = pl.Decimal(38, 9)


@dataclass(frozen=True)
class DaySource:
    """A file of ties and the book that its codes point into."""

    ties: str
    parties: str


@dataclass(frozen=True)
class Merge:
    """A task: add the sources up into one table in the folder `target`."""

    target: str
    sources: tuple[DaySource, ...]


def add_up(sources: Sequence[DaySource]) -> tuple[pl.Series, pl.DataFrame]:
    """The common book and the summed ties: sender, receiver, contacts, amount, days, first_seen, last_seen."""
    books = {source.parties: pl.read_ipc(source.parties)["party"] for source in sources}
    book = next(iter(books.values())) if len(books) == 1 else shared_book(list(books.values()))
    known = {path: positions(keys, book) if len(books) > 1 else None for path, keys in books.items()}
    frames = []
    for source in sources:
        frame = pl.read_ipc(source.ties)
        new = known[source.parties]
        if new is not None:
            frame = frame.with_columns(new.gather(frame[side]).alias(side) for side in ("sender", "receiver"))
        frames.append(frame)
    if len(frames) == 1:
        return book, frames[0]
    summed = (
        pl.concat(frames)
        .lazy()
        .group_by("sender", "receiver")
        .agg(pl.col("contacts", "amount", "days").sum(), pl.col("first_seen").min(), pl.col("last_seen").max())
        .collect(engine="streaming")
    )
    return book, summed


def add_up_to(merge: Merge) -> None:
    """Run a merge. Rows of several sources of one day are of that one day."""
    book, ties = add_up(merge.sources)
    folder = Path(merge.target)
    folder.mkdir(parents=True, exist_ok=True)  # Dask runs a task again when its worker has died
    book.to_frame().write_ipc(folder / "parties.arrow")
    ties.with_columns(days=pl.lit(1, pl.Int64)).write_ipc(folder / "ties.arrow", compression="lz4")


def as_frame(book: pl.Series, ties: pl.DataFrame, *, with_amounts: bool) -> pl.DataFrame:
    """Ties sorted by sender and receiver, the keys as an Enum of the sorted book, the amounts as floats."""
    keys = pl.Enum(book)
    amount = pl.col("amount").cast(pl.Float64) if with_amounts else pl.lit(None, pl.Float64)
    # one 64-bit key sorts twice as fast as two columns
    pair = pl.col("sender").cast(pl.UInt64) * len(book) + pl.col("receiver")
    return ties.sort(pair).select(
        pl.col("sender", "receiver").cat.to(keys), "contacts", amount.alias("amount"), "days", "first_seen", "last_seen"
    )
