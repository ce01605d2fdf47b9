"""Party keys as whole numbers: each distinct key is normalised once, not once a row."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import polars as pl
import pyarrow as pa

__all__ = ["code_columns", "shared_book"]


def code_columns(columns: dict[str, pa.ChunkedArray]) -> tuple[pl.Series, pl.DataFrame]:
    """The book of usable keys, and for each column its codes in that book and whether the row had none.

    Returns (book, frame). The frame has, per column name, `<name>` (position in the book, null when unusable) and
    `<name>_null` (the log has no value there).
    """
    arrays = [_decoded(column) for column in columns.values()]
    if len({array.type for array in arrays}) > 1:
        arrays = [array.cast(pa.large_string()) for array in arrays]
    chunks = [chunk for array in arrays for chunk in array.chunks]
    raw, codes = _encoded(pa.chunked_array(chunks, arrays[0].type))
    missing = codes.is_null()
    book = raw.cast(pl.String)
    clean = normalise(book)
    usable = clean.str.len_bytes() > 0
    if (clean == book).filter(usable).all():
        book, places = book.filter(usable), (usable.cum_sum() - 1).cast(pl.UInt32).set(~usable, None)
    else:  # some keys are equal only once normalised
        book, places = _encoded(clean.set(~usable, None).to_arrow())
    codes = places.gather(codes)
    coded, start = {}, 0
    for name, array in zip(columns, arrays, strict=True):
        coded[name] = codes.slice(start, len(array)).alias(name)
        coded[f"{name}_null"] = missing.slice(start, len(array))
        start += len(array)
    return book.alias("party"), pl.DataFrame(coded)


def normalise(values: pl.Series) -> pl.Series:
    """A key as it counts: without the blanks around it that fixed-width exports leave."""
    return values.str.strip_chars()


def shared_book(books: Sequence[pl.Series]) -> tuple[pl.Series, list[pl.Series]]:
    """All keys of some books, sorted by their bytes, each once; and for each book where its keys are (UInt32)."""
    keys, codes = _encoded(pl.concat([book.alias("party") for book in books], rechunk=False).to_arrow())
    order = keys.arg_sort()
    rank = pl.Series(np.empty(len(keys), np.uint32)).scatter(order, np.arange(len(keys), dtype=np.uint32))
    places = rank.gather(codes)
    ends = np.cumsum([len(book) for book in books])
    parts = [places.slice(end - len(book), len(book)) for end, book in zip(ends, books, strict=True)]
    return keys.gather(order).alias("party"), parts


def _encoded(column: pa.ChunkedArray | pa.Array) -> tuple[pl.Series, pl.Series]:
    """Distinct values in the order of their first appearance, and each row's position among them; nulls stay null."""
    if isinstance(column, pa.Array):
        column = pa.chunked_array([column])
    coded = column.dictionary_encode().unify_dictionaries()
    indices = pa.chunked_array([chunk.indices for chunk in coded.chunks], pa.int32())
    values = coded.chunk(0).dictionary if coded.num_chunks else pa.array([], column.type)
    return pl.Series("key", pl.from_arrow(values)), pl.Series("code", pl.from_arrow(indices)).cast(pl.UInt32)


def _decoded(column: pa.ChunkedArray) -> pa.ChunkedArray:
    return column.cast(column.type.value_type) if pa.types.is_dictionary(column.type) else column
