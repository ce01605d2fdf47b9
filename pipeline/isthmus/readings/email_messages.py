"""Messages of three layouts as contacts, and what their headers tell."""

from __future__ import annotations

from collections.abc import Collection

import polars as pl

from isthmus.readings.email_addresses import items_of

__all__ = ["NOBODY", "contacts_of"]

# What RFC 5322 (A.1.3) has a message say that names nobody.
NOBODY = "Undisclosed recipients:;"

# RFC 2076 calls Precedence non-standard; these values are what list software writes.
_PRECEDENCES = ("bulk", "list", "junk")


def contacts_of(rows: pl.DataFrame, count: Collection[str], content_hash: bool) -> pl.DataFrame:
    """One row for each recipient; a message without any keeps one row, to NOBODY.

    Beside `row`, `time`, `sender` and `receiver`: `m1` and `m2` (UInt64) identify the message among its sender's, null
    where nothing does; `named` (UInt32) counts its recipients as written; `bulk`, `automatic` and `reply` (automatic,
    but on behalf of a person) are what its headers tell. `count`: which of to, cc and bcc name recipients.
    """
    # a column without any value has no type of its own
    rows = rows.cast({name: pl.String for name, type_ in rows.schema.items() if type_ == pl.Null})
    lists = [_mailboxes(rows, name) for name in ("recipients", *count) if name in rows.columns]
    if len(lists) > 1:
        lists = [pl.concat_list(one.fill_null([]) for one in lists)]
    messages = rows.select(
        pl.col("^_.*$"),
        "row",
        "time",
        "sender",
        *(one.alias("receiver") for one in lists or [pl.col("receiver")]),
        *_identified(rows, content_hash),
        *_headers(rows),
    )
    if not lists:
        return messages.with_columns(named=pl.lit(1, pl.UInt32))
    named = pl.col("receiver").list.len().fill_null(0)
    nobody = pl.when(named == 0).then(pl.lit([NOBODY])).otherwise("receiver")
    return messages.with_columns(named=named, receiver=nobody).explode("receiver")


def _mailboxes(rows: pl.DataFrame, name: str) -> pl.Expr:
    if isinstance(rows.schema[name], pl.List):
        return pl.col(name).cast(pl.List(pl.String))
    return items_of(pl.col(name))


def _identified(rows: pl.DataFrame, content_hash: bool) -> list[pl.Expr]:
    content = pl.struct("time", *(name for name in ("subject_hash", "size") if name in rows.columns))
    told = [content.hash(seed=seed) if content_hash else pl.lit(None, pl.UInt64) for seed in (1, 2)]
    if "message_id" in rows.columns:
        written = pl.col("message_id").str.strip_chars(" \t\r\n<>")
        known = written.is_not_null() & (written != "")
        told = [
            pl.when(known).then(written.hash(seed=seed)).otherwise(half)
            for seed, half in zip((1, 2), told, strict=True)
        ]
    return [half.alias(name) for half, name in zip(told, ("m1", "m2"), strict=True)]


def _headers(rows: pl.DataFrame) -> list[pl.Expr]:
    def text(name: str) -> pl.Expr:
        return pl.col(name).str.strip_chars() if name in rows.columns else pl.lit(None, pl.String)

    def there(name: str) -> pl.Expr:
        return (pl.col(name) if rows.schema.get(name) == pl.Boolean else text(name) != "").fill_null(False)

    # what follows the word are parameters and comments
    submitted = text("auto_submitted").str.extract(r"^([^;(\s]+)").str.to_lowercase()
    automatic = (submitted != "no").fill_null(False) | text("return_path").is_in(["<>", ""]).fill_null(False)
    precedence = text("precedence").str.to_lowercase().is_in(_PRECEDENCES).fill_null(False)
    return [
        (there("list_id") | there("list_unsubscribe") | precedence).alias("bulk"),
        automatic.alias("automatic"),
        (submitted == "auto-replied").fill_null(False).alias("reply"),
    ]
