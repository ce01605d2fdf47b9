"""Party keys as whole numbers: each distinct key is normalised once, not once a row."""

from __future__ import annotations

import polars as pl
import pyarrow as pa

__all__ = ["Coded", "positions", "shared_book", "to_codes"]


class Coded:
    """One key column: `codes` point into `values`, the distinct raw keys as text; both may hold nulls."""

    def __init__(self, column: pa.ChunkedArray) -> None:
        if not pa.types.is_dictionary(column.type):
            column = column.dictionary_encode()
        column = column.unify_dictionaries()
        chunks = column.chunks
        book = chunks[0].dictionary if chunks else pa.array([], pa.string())
        indices = pa.chunked_array([chunk.indices.cast(pa.int64()) for chunk in chunks], pa.int64())
        self.values: pl.Series = pl.Series("key", pl.from_arrow(book)).cast(pl.String)
        self.codes: pl.Series = pl.Series("code", pl.from_arrow(indices))


def normalise(values: pl.Series) -> pl.Series:
    """A key as it counts: without the blanks around it that fixed-width exports leave."""
    return values.str.strip_chars()


def to_codes(columns: dict[str, Coded]) -> tuple[pl.Series, pl.DataFrame]:
    """The sorted book of usable keys, and for each column its codes in that book and whether the row had none.

    Returns (book, frame). The frame has, per column name, `<name>` (position in the book, null when unusable) and
    `<name>_null` (the log has no value there).
    """
    clean = {name: normalise(column.values) for name, column in columns.items()}
    book = shared_book([keys.filter(keys.str.len_bytes() > 0) for keys in clean.values()])
    coded = {}
    for name, column in columns.items():
        coded[name] = positions(clean[name], book).gather(column.codes).alias(name)
        coded[f"{name}_null"] = clean[name].is_null().gather(column.codes).fill_null(True)
    return book, pl.DataFrame(coded)


def shared_book(books: list[pl.Series]) -> pl.Series:
    """All keys of some books, sorted by their bytes, each once."""
    return pl.concat([book.alias("party") for book in books]).drop_nulls().unique().sort()


def positions(keys: pl.Series, book: pl.Series) -> pl.Series:
    """Position of each key in the book (UInt32), null when it is not there."""
    index = pl.DataFrame({"key": book, "code": pl.int_range(len(book), dtype=pl.UInt32, eager=True)})
    found = keys.alias("key").to_frame().join(index, on="key", how="left", maintain_order="left")
    return found["code"]
