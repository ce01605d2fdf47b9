"""Tables of ties in the work folder, and the one way to add several up.

A table has one row per ordered pair, whose `sender` and `receiver` are positions in a book of keys, a file of its
own. Amounts are decimals, so no sum depends on the order of adding.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl

from isthmus.ingest.keys import shared_book

__all__ = ["AMOUNT", "Merge", "Source", "add_up", "merge_day", "one_book", "ties_of_rows"]

AMOUNT = pl.Decimal(38, 9)

_SUMS = (pl.col("contacts", "amount").sum(), pl.col("first_seen").min(), pl.col("last_seen").max())


@dataclass(frozen=True)
class Source:
    """A part's ties of one day, and the file that says where each key of the part's book is in the window's book."""

    ties: str
    places: str


@dataclass(frozen=True)
class Merge:
    """A task: add the sources, all of one day, up into the file `target`."""

    target: str
    sources: tuple[Source, ...]


def ties_of_rows(rows: pl.DataFrame) -> pl.DataFrame:
    """Rows (day, sender, receiver, amount, time) -> ties per day: contacts, amount, first_seen, last_seen."""
    sums = (
        pl.len().cast(pl.Int64).alias("contacts"),
        pl.col("amount").sum(),
        pl.col("time").min().alias("first_seen"),
        pl.col("time").max().alias("last_seen"),
    )
    return rows.lazy().group_by("day", "sender", "receiver").agg(*sums).collect(engine="streaming")


def one_book(folders: Sequence[Path], target: Path) -> pl.Series:
    """Write the sorted book of all parts' keys to `target`, and into each part's folder its `places.arrow`."""
    book, places = shared_book([pl.read_ipc(folder / "parties.arrow")["party"] for folder in folders])
    for folder, places_of_part in zip(folders, places, strict=True):
        places_of_part.alias("place").to_frame().write_ipc(folder / "places.arrow")
    book.to_frame().write_ipc(target)
    return book


def merge_day(merge: Merge) -> None:
    """Write one day's table: sender, receiver, contacts, amount, first_seen, last_seen."""
    frames = []
    for source in merge.sources:
        places, ties = pl.read_ipc(source.places)["place"], pl.read_ipc(source.ties)
        frames.append(ties.with_columns(places.gather(ties[side]).alias(side) for side in ("sender", "receiver")))
    ties = frames[0]
    if len(frames) > 1:
        ties = pl.concat(frames).lazy().group_by("sender", "receiver").agg(*_SUMS).collect(engine="streaming")
    ties.write_ipc(merge.target)


def add_up(book: pl.Series, days: list[str], *, with_amounts: bool) -> pl.DataFrame:
    """Ties over several days' tables, sorted by sender and receiver, the keys as an Enum of the book.

    Columns: sender, receiver, contacts, amount (float, null without amounts), days, first_seen, last_seen.
    """
    keys = pl.Enum(book)
    amount = pl.col("amount").cast(pl.Float64) if with_amounts else pl.lit(None, pl.Float64)
    # one 64-bit number for a pair: grouped and sorted faster than two columns
    pair = pl.col("sender").cast(pl.UInt64) * len(book) + pl.col("receiver")
    sender, receiver = pl.col("pair") // len(book), pl.col("pair") % len(book)
    return (
        pl.scan_ipc(days)
        .group_by(pair.alias("pair"))
        .agg(*_SUMS, days=pl.len().cast(pl.Int64))
        .collect(engine="streaming")
        .sort("pair")
        .select(
            sender.cast(pl.UInt32).cat.to(keys).alias("sender"),
            receiver.cast(pl.UInt32).cat.to(keys).alias("receiver"),
            "contacts",
            amount.alias("amount"),
            "days",
            "first_seen",
            "last_seen",
        )
    )
