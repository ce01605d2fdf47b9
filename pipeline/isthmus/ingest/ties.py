"""Tables of ties in the work folder, and the one way to add several up.

A table has one row per ordered pair, whose `sender` and `receiver` are positions in a book of keys, a file of its
own: each part has one, each day, and the window. Amounts are decimals, so no sum depends on the order of adding.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import polars as pl

from isthmus.ingest.kept import Facts, keep
from isthmus.ingest.keys import shared_book

__all__ = [
    "DayTask",
    "Recode",
    "Source",
    "add_up",
    "add_up_day",
    "recode",
    "ties_of_rows",
    "window_book",
]

_SUMS = (pl.col("contacts", "amount").sum(), pl.col("first_seen").min(), pl.col("last_seen").max())


@dataclass(frozen=True)
class Source:
    """A part's ties of one day: the kept folder of its ties, and that of its book."""

    ties: str
    book: str
    day: int


@dataclass(frozen=True)
class DayTask:
    """Add the sources, all of one day, up into the kept folder `folder`, made below `scratch`."""

    folder: str
    scratch: str
    sources: tuple[Source, ...]

    @property
    def reads(self) -> set[str]:
        """The kept folders that are read."""
        return {folder for source in self.sources for folder in (source.ties, source.book)}


@dataclass(frozen=True)
class Recode:
    """Write a day's ties to `target` with positions in another book: `places` gives them for each of the day's keys."""

    folder: str
    places: str
    target: str


def ties_of_rows(rows: pl.DataFrame) -> pl.DataFrame:
    """Rows (day, sender, receiver, amount, time) -> ties per day: contacts, amount, first_seen, last_seen."""
    sums = (
        pl.len().cast(pl.Int64).alias("contacts"),
        pl.col("amount").sum(),
        pl.col("time").min().alias("first_seen"),
        pl.col("time").max().alias("last_seen"),
    )
    return rows.lazy().group_by("day", "sender", "receiver").agg(*sums).collect(engine="streaming")


def add_up_day(task: DayTask) -> None:
    """Keep one day's table: `ties.arrow` (sender, receiver, contacts, amount, first_seen, last_seen) and its book."""

    def fill(folder: Path) -> Facts:
        books, tables, used = [], [], []
        for source in task.sources:
            book = pl.read_ipc(f"{source.book}/parties.arrow")
            ties = pl.read_ipc(f"{source.ties}/ties-{source.day}.arrow")
            codes = pl.concat([ties["sender"], ties["receiver"]]).unique().sort()
            books.append(book[codes])
            tables.append(ties)
            used.append((codes, len(book)))
        day_book, places = shared_book(books)
        frames = []
        for ties, (codes, size), places_of_part in zip(tables, used, places, strict=True):
            place = pl.Series(np.zeros(size, np.uint32)).scatter(codes, places_of_part)
            frames.append(ties.with_columns(place.gather(ties[side]).alias(side) for side in ("sender", "receiver")))
        ties = frames[0]
        if len(frames) > 1:
            ties = pl.concat(frames).lazy().group_by("sender", "receiver").agg(*_SUMS).collect(engine="streaming")
        ties.write_ipc(folder / "ties.arrow")
        day_book.write_ipc(folder / "parties.arrow")
        return {}

    keep(Path(task.folder), Path(task.scratch), fill)


def window_book(folders: Sequence[str], scratch: Path) -> tuple[pl.DataFrame, list[Recode]]:
    """The sorted book of some days' parties, and the tasks that bring their ties there."""
    book, places = shared_book([pl.read_ipc(f"{folder}/parties.arrow") for folder in folders])
    tasks = []
    for at, (folder, places_of_day) in enumerate(zip(folders, places, strict=True)):
        target = str(scratch / f"places-{at}.arrow")
        places_of_day.alias("place").to_frame().write_ipc(target)
        tasks.append(Recode(folder, target, str(scratch / f"window-{at}.arrow")))
    return book, tasks


def recode(task: Recode) -> str:
    """Do what a Recode says; returns its target."""
    places, ties = pl.read_ipc(task.places)["place"], pl.read_ipc(f"{task.folder}/ties.arrow")
    ties = ties.with_columns(places.gather(ties[side]).alias(side) for side in ("sender", "receiver"))
    ties.write_ipc(task.target)
    return task.target


def add_up(book: pl.Series, days: pl.LazyFrame, *, with_amounts: bool) -> pl.DataFrame:
    """Ties over several days' tables, sorted by sender and receiver, the keys as an Enum of the book.

    Columns: sender, receiver, contacts, amount (float, null without amounts), days, first_seen, last_seen.
    """
    keys = pl.Enum(book)
    amount = pl.col("amount").cast(pl.Float64) if with_amounts else pl.lit(None, pl.Float64)
    # one 64-bit number for a pair: grouped and sorted faster than two columns
    pair = pl.col("sender").cast(pl.UInt64) * len(book) + pl.col("receiver")
    sender, receiver = pl.col("pair") // len(book), pl.col("pair") % len(book)
    return (
        days.group_by(pair.alias("pair"))
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
