"""Tables of ties in the work folder, and the one way to add several up.

A table is a book of keys, `parties.arrow`, and a file of ties, one row per ordered pair, whose `sender` and
`receiver` are positions in that book. Amounts are decimals, so no sum depends on the order of adding.
"""

from __future__ import annotations

import shutil
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl

from isthmus.ingest.keys import shared_book

__all__ = ["AMOUNT", "DaySource", "Merge", "add_up", "merge_day", "ties_of_rows"]

AMOUNT = pl.Decimal(38, 9)


@dataclass(frozen=True)
class DaySource:
    """A file of ties of one day and the book that its codes point into."""

    ties: str
    parties: str


@dataclass(frozen=True)
class Merge:
    """A task: add the sources, all of one day, up into one table in the folder `target`."""

    target: str
    sources: tuple[DaySource, ...]

    @property
    def merged(self) -> DaySource:
        return DaySource(f"{self.target}/ties.arrow", f"{self.target}/parties.arrow")


def ties_of_rows(rows: pl.DataFrame) -> pl.DataFrame:
    """Rows (day, sender, receiver, amount, time) -> ties per day: contacts, amount, first_seen, last_seen."""
    sums = (
        pl.len().cast(pl.Int64).alias("contacts"),
        pl.col("amount").sum(),
        pl.col("time").min().alias("first_seen"),
        pl.col("time").max().alias("last_seen"),
    )
    return rows.lazy().group_by("day", "sender", "receiver").agg(*sums).collect(engine="streaming")


def merge_day(merge: Merge) -> None:
    """Write the day's table: ties.arrow with sender, receiver, contacts, amount, first_seen, last_seen."""
    Path(merge.target).mkdir(parents=True, exist_ok=True)  # Dask runs a task again when its worker has died
    if len(merge.sources) == 1:
        shutil.copyfile(merge.sources[0].ties, merge.merged.ties)
        shutil.copyfile(merge.sources[0].parties, merge.merged.parties)
        return
    book, frames = _on_one_book(merge.sources)
    ties = pl.concat(frames).lazy().group_by("sender", "receiver").agg(*_SUMS).collect(engine="streaming")
    book.to_frame().write_ipc(merge.merged.parties)
    ties.write_ipc(merge.merged.ties, compression="lz4")


def add_up(days: Sequence[DaySource], *, with_amounts: bool) -> pl.DataFrame:
    """Ties over several days, sorted by sender and receiver, the keys as an Enum of the sorted book.

    Columns: sender, receiver, contacts, amount (float, null without amounts), days, first_seen, last_seen.
    """
    book, frames = _on_one_book(days, in_order=True)
    keys = pl.Enum(book)
    amount = pl.col("amount").cast(pl.Float64) if with_amounts else pl.lit(None, pl.Float64)
    # one 64-bit number for a pair: grouped and sorted faster than two columns
    pair = pl.col("sender").cast(pl.UInt64) * len(book) + pl.col("receiver")
    summed = (
        pl.concat([frame.lazy() for frame in frames])
        .group_by(pair.alias("pair"))
        .agg(*_SUMS, days=pl.len().cast(pl.Int64))
        .collect(engine="streaming")
        .sort("pair")
    )
    del frames
    sender, receiver = pl.col("pair") // len(book), pl.col("pair") % len(book)
    return summed.select(
        sender.cast(pl.UInt32).cat.to(keys).alias("sender"),
        receiver.cast(pl.UInt32).cat.to(keys).alias("receiver"),
        "contacts",
        amount.alias("amount"),
        "days",
        "first_seen",
        "last_seen",
    )


_SUMS = (pl.col("contacts", "amount").sum(), pl.col("first_seen").min(), pl.col("last_seen").max())


def _on_one_book(sources: Sequence[DaySource], *, in_order: bool = False) -> tuple[pl.Series, list[pl.DataFrame]]:
    """The common book, sorted by its keys' bytes if asked, and the sources' ties with codes into it."""
    book, moved = shared_book([pl.read_ipc(source.parties)["party"] for source in sources])
    if in_order:
        order = book.arg_sort()
        rank = pl.DataFrame({"at": order}).with_row_index("rank").sort("at")["rank"]
        book, moved = book.gather(order), [rank.gather(places) for places in moved]
    frames = []
    for source, places in zip(sources, moved, strict=True):
        frame = pl.read_ipc(source.ties)
        frames.append(frame.with_columns(places.gather(frame[side]).alias(side) for side in ("sender", "receiver")))
    return book, frames
