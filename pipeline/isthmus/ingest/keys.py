"""Party keys as whole numbers: each distinct key goes through the log's reading once a part, not once a row."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import polars as pl
import pyarrow as pa

from isthmus.readings import Reading

__all__ = ["ABOUT", "code_sides", "shared_book"]

# What is known of a party besides its key. `named`: the kind that the key itself tells, which a pseudonym cannot.
ABOUT = ("kind", "named", "side", "label")
SIDES = ("sender", "receiver")
# What readings have told in this process, by their fingerprints: parts hold mostly the same keys.
_MOST_KNOWN = 1_000_000  # more would cost more to look through than to ask again
_known: dict[str, pl.DataFrame] = {}


def code_sides(contacts: pl.DataFrame, reading: Reading) -> tuple[pl.DataFrame, pl.DataFrame, list[str]]:
    """The book of the parties, the contacts with positions in it for their sides, and what can be wrong with a side.

    The book has `party` (distinct) and ABOUT. For each side the contacts get `<side>` (UInt32; null when unusable),
    `_<side>_null` (the log has no value there) and `_<side>_fault` (which of the returned texts; null: none).
    """
    both = pl.concat([contacts[side].rename("raw") for side in SIDES]).cast(pl.Categorical(pl.Categories.random()))
    places, distinct = both.to_physical(), both.drop_nulls().unique()
    raw = pl.DataFrame({"raw": distinct.cast(pl.String), "at": distinct.to_physical()}).sort("at")["raw"]
    told = _told(raw, reading)
    key, usable = told["key"], told["key"].is_not_null()
    why = told["fault"].fill_null("is empty").set(usable, None)
    faults = why.drop_nulls().unique().sort().to_list()
    fault = why.cast(pl.Enum(faults)).to_physical().cast(pl.UInt8)
    if key.drop_nulls().is_unique().all():
        book = told.filter(usable).select(pl.col("key").alias("party"), *ABOUT)
        codes = (usable.cum_sum() - 1).cast(pl.UInt32).set(~usable, None)
    else:  # some keys are equal only once normalised
        party, codes = _encoded(key.to_arrow())
        book = _about(party, [codes], [told])
    sides: dict[str, pl.Series] = {}
    start = 0
    for side in SIDES:
        own = places.slice(start, contacts.height)
        sides |= {side: codes.gather(own), f"_{side}_null": own.is_null(), f"_{side}_fault": fault.gather(own)}
        start += contacts.height
    return book, contacts.with_columns(**sides), faults


def _told(raw: pl.Series, reading: Reading) -> pl.DataFrame:
    """What the reading tells of each distinct text, asked only for those that it has not been asked before."""
    known = _known.get(reading.fingerprint)
    if known is None:
        told = _asked(raw, reading)
        _known.clear()  # one log at a time
    else:
        told = raw.to_frame().join(known.with_columns(asked=True), on="raw", how="left", maintain_order="left")
        if (new := told["asked"].is_null()).any():
            told = told.drop("asked").with_row_index("at")
            texts = raw.filter(new)
            answers = _asked(texts, reading).with_columns(at=told["at"].filter(new))
            told = pl.concat([told.filter(~new), answers.select(told.columns)]).sort("at")
            known = pl.concat([known, answers.select(known.columns)])
    if known is None or len(known) <= _MOST_KNOWN:
        _known[reading.fingerprint] = told.select("raw", "key", "fault", *ABOUT) if known is None else known
    return told


def _asked(raw: pl.Series, reading: Reading) -> pl.DataFrame:
    return reading.keys(raw).with_columns(raw, named="kind")


def shared_book(books: Sequence[pl.DataFrame]) -> tuple[pl.DataFrame, list[pl.Series]]:
    """One book of all parties, sorted by their keys' bytes, each once; and for each book where its are (UInt32)."""
    keys, codes = _encoded(pl.concat([book["party"] for book in books], rechunk=False).to_arrow())
    order = keys.arg_sort()
    rank = pl.Series(np.empty(len(keys), np.uint32)).scatter(order, np.arange(len(keys), dtype=np.uint32))
    places = rank.gather(codes)
    ends = np.cumsum([len(book) for book in books])
    parts = [places.slice(end - len(book), len(book)) for end, book in zip(ends, books, strict=True)]
    return _about(keys.gather(order), parts, books), parts


def _about(parties: pl.Series, places: Sequence[pl.Series], books: Sequence[pl.DataFrame]) -> pl.DataFrame:
    """The book of `parties`, with what the books say of them; where they differ the later kind and side win."""
    told = pl.concat(
        [book.select(ABOUT).with_columns(place=place) for book, place in zip(books, places, strict=True)]
    ).filter(pl.col("place").is_not_null())
    about = (
        told.lazy()
        .group_by("place")
        .agg(pl.col("kind", "named", "side").max(), pl.col("label").drop_nulls().min())
        .sort("place")
        .collect(engine="streaming")
    )
    return pl.DataFrame({"party": parties}).hstack(about.select(ABOUT))


def _encoded(column: pa.ChunkedArray | pa.Array) -> tuple[pl.Series, pl.Series]:
    """Distinct values in the order of their first appearance, and each row's position among them; nulls stay null."""
    if isinstance(column, pa.Array):
        column = pa.chunked_array([column])
    coded = column.dictionary_encode().unify_dictionaries()
    indices = pa.chunked_array([chunk.indices for chunk in coded.chunks], pa.int32())
    values = coded.chunk(0).dictionary if coded.num_chunks else pa.array([], column.type)
    return pl.Series("party", pl.from_arrow(values)), pl.Series("code", pl.from_arrow(indices)).cast(pl.UInt32)
