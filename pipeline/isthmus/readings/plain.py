"""Two columns taken at their word: who, whom, when, and perhaps how much and known by what."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Self

import polars as pl

from isthmus.readings.reading import AMOUNT, KINDS, REFUSED, SIDES, Judged, Verdict, identity, repeated
from isthmus.settings import PlainLog

__all__ = ["LARGEST_AMOUNT", "PlainReading"]

LARGEST_AMOUNT = 1e18


@dataclass(frozen=True)
class PlainReading:
    has_amount: bool
    has_id: bool

    extras: ClassVar[dict[str, pl.DataType]] = {}
    left_out: ClassVar[frozenset[str]] = frozenset()
    fingerprint: ClassVar[str] = "plain 1"

    @classmethod
    def open(cls, log: PlainLog) -> Self:
        return cls(bool(log.columns.amount), bool(log.columns.id))

    def stands_for(self, key: str) -> list[str]:
        return []

    @property
    def names(self) -> pl.Series:
        return pl.Series(dtype=pl.String)

    @property
    def settles(self) -> bool:
        return self.has_id

    def contacts(self, rows: pl.DataFrame) -> pl.DataFrame:
        return rows

    def keys(self, raw: pl.Series) -> pl.DataFrame:
        """A key as it counts: without the blanks around it that fixed-width exports leave."""
        key = raw.str.strip_chars()
        return pl.select(
            key=pl.when(key != "").then(key),
            fault=pl.when(key == "").then(pl.lit("is empty")),
            kind=pl.lit("party", KINDS),
            side=pl.lit("unknown", SIDES),
            label=pl.lit(None, pl.String),
        )

    def judge(self, contacts: pl.DataFrame, book: pl.DataFrame) -> Judged:
        verdicts = []
        if self.has_amount:
            value = pl.col("value").cast(pl.Float64)
            verdicts = [
                Verdict(value.is_null(), "amount is null", REFUSED),
                Verdict(~value.is_finite(), "amount is not finite", REFUSED),
                Verdict(value < 0, "amount is negative", REFUSED),
                Verdict(value > LARGEST_AMOUNT, f"amount is above {LARGEST_AMOUNT:.0e}", REFUSED),
            ]
            contacts = contacts.with_columns(pl.col("amount").alias("value"))
        amount = pl.col("amount").cast(AMOUNT, strict=False) if self.has_amount else pl.lit(None, AMOUNT)
        marks = identity(pl.col("id")) if self.has_id else []
        return Judged(contacts.with_columns(*marks, amount=amount), book, verdicts)

    def settle(self, rows: pl.LazyFrame) -> pl.DataFrame:
        return repeated(rows)

    def weigh(self, ties: pl.DataFrame, parties: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, dict[str, int]]:
        return ties, parties, {}
