"""What a kind of log must tell so that its rows become contacts. The readings beside this file answer it.

The order in which ingest asks, for one part of one file:

    contacts(rows)          rows as the log has them  -> one row per contact, its two sides as raw text
    keys(raw)               each distinct raw side    -> a key, or what is wrong with it; what kind of party it is
    judge(contacts, book)   contacts with coded sides -> what each is worth, what it is known by, what is left out

and for the whole window:

    settle(rows)            what only several rows together tell: deliveries repeated, returns and their originals
    weigh(ties, parties)    what only a party's ties together tell: who sends to everybody and hears from nobody

Everything is Polars on whole columns; only `keys` may go value by value through a library, because each distinct value
comes once a part. A reading holds no state but its settings and the tables that the user gave. Nothing in it raises
for what a log holds: a contact that cannot be understood gets a reason, which names no content.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import polars as pl

__all__ = [
    "AMOUNT",
    "DUPLICATE",
    "FILTERED",
    "KINDS",
    "REFUSED",
    "SIDES",
    "Judged",
    "Reading",
    "Verdict",
    "identity",
    "repeated",
]

REFUSED, FILTERED, DUPLICATE = "refused", "filtered", "duplicate"

# Exact while adding up, whatever the order.
AMOUNT = pl.Decimal(38, 9)

# Where two parts of the log see a party differently the later name wins.
KINDS = pl.Enum(["party", "person", "account", "role", "short code", "machine", "bulk sender", "hub"])
SIDES = pl.Enum(["unknown", "external", "internal"])


@dataclass(frozen=True)
class Verdict:
    """Contacts for which `when` is true are not used. The first verdict that applies names the reason.

    `outcome`: REFUSED (cannot be understood), FILTERED (left out on purpose) or DUPLICATE.
    """

    when: pl.Expr
    reason: str
    outcome: str


@dataclass(frozen=True)
class Judged:
    """`contacts`: as given, and `amount` (AMOUNT; null: not counted), `a` and `b` (UInt64, see `identity`), and the
    reading's own `extras`. `book`: as given, or with other keys and the contacts' codes changed accordingly."""

    contacts: pl.DataFrame
    book: pl.DataFrame
    verdicts: Sequence[Verdict]


class Reading(Protocol):
    @property
    def extras(self) -> dict[str, pl.DataType]:
        """Columns, beside a, b and amount, that `judge` adds and `settle` needs. Numbers only: they lie in files."""

    @property
    def left_out(self) -> frozenset[str]:
        """Faults of `keys` that are no mistakes of the log: their contacts are filtered, not refused."""

    @property
    def settles(self) -> bool:
        """Whether `settle` is to be asked; else each part of the log can be added up by itself, which is quicker."""

    def stands_for(self, key: str) -> list[str]:
        """The parties that the user's tables make of a key, on whatever days."""

    @property
    def names(self) -> pl.Series:
        """Parties (String) that only the user's tables name, such as persons and owners: no row of the log has them."""

    @property
    def fingerprint(self) -> str:
        """Changes whenever the same rows may be read otherwise: with the code, the rules, or a table of the user's."""

    def contacts(self, rows: pl.DataFrame) -> pl.DataFrame:
        """`rows`: `row` (Int64, place in the file), and each mapped column under our name. Text is String (keys of
        integer type are text by now), lists are List(String), times are Datetime("us") in UTC (null when not plausible;
        a date is its midnight), all else is as in the log.

        Returned: at least `row`, `time`, and `sender` and `receiver` (String as written; null: none told), one row per
        contact and at least one for each row of the log, so that every row is accounted for. Columns whose names begin
        with `_` are ingest's and are carried along.
        """

    def keys(self, raw: pl.Series) -> pl.DataFrame:
        """`raw`: distinct texts, none null. Returned, in that order: `key` (String; null: unusable), `fault` (String,
        such as "is not an address"; null: none), `kind` (KINDS), `side` (SIDES), `label` (String or null).

        Normalising a key gives the key itself.
        """

    def judge(self, contacts: pl.DataFrame, book: pl.DataFrame) -> Judged:
        """`contacts`: what `contacts` returned, `sender` and `receiver` as positions in the book (UInt32; null:
        unusable). `book`: `party` (String, distinct), `kind`, `named` (the kind that the key tells), `side`, `label`.
        Keys or times that are missing or unusable, and contacts of a party with itself, are ingest's to judge, not the
        reading's."""

    def settle(self, rows: pl.LazyFrame) -> pl.DataFrame:
        """`rows`: the window's contacts that are still used: `part` and `at` (UInt32: which part, which place in it; in
        the order of the files), `day` (Int32), `time`, `amount`, `a`, `b` and the extras. Returned: `part`, `at`,
        `outcome`, `reason` (both empty: it stays used) and `amount` (as it is from now on) of the contacts that change.
        """

    def weigh(self, ties: pl.DataFrame, parties: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, dict[str, int]]:
        """`ties`: sender and receiver (Enum over all keys), contacts, amount, days, first_seen, last_seen. `parties`:
        party (the Enum; perhaps pseudonyms, so nothing can be read from it), kind, named, side, label. Returned: the
        ties that stay, the parties as they are now known, and for each filter's name how many contacts it took."""


def identity(*columns: pl.Expr, seed: int = 0) -> list[pl.Expr]:
    """`a` and `b`: 128 bits that contacts share when all `columns` are equal; null where any of them is null."""
    told = pl.struct(*columns)
    known = pl.all_horizontal(column.is_not_null() for column in columns)
    return [pl.when(known).then(told.hash(seed=seed + at)).alias(name) for at, name in ((1, "a"), (2, "b"))]


def repeated(rows: pl.LazyFrame, reason: str = "") -> pl.DataFrame:
    """What `settle` answers for contacts whose `a` and `b` an earlier contact has already: the first one counts."""
    # first by one half of the hash: sorting plain numbers is the cheapest way to find the few that repeat
    half = rows.select("a").collect()["a"].drop_nulls().sort()
    suspects = half.filter(half == half.shift(1)).unique()
    found = rows.filter(pl.col("a").is_in(suspects.implode())).select("part", "at", "amount", "a", "b").collect()
    later = found.filter(~pl.struct("a", "b").is_first_distinct())
    return later.select(
        "part", "at", outcome=pl.lit(DUPLICATE), reason=pl.lit(reason or DUPLICATE), amount=pl.col("amount")
    )
