"""Whose address it was, and when: the user's table of aliases."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings.reading import KINDS
from isthmus.readings.tables import read_table

__all__ = ["Aliases"]

KEY = "log.rules.aliases"
COLUMNS = {"address": pl.String(), "person": pl.String(), "from": pl.Date(), "to": pl.Date()}
SIDES = ("sender", "receiver")


@dataclass(frozen=True)
class Aliases:
    """`table`: address (a key), person (a key), first and last (Int32, days since 1970, both included)."""

    table: pl.DataFrame

    @classmethod
    def open(cls, path: str, key_of: Callable[[pl.Series], pl.Series]) -> Aliases:
        """Raises SettingsError (not an address, days the wrong way round, two persons on one day), StoreError."""
        raw = read_table(path, KEY, COLUMNS, frozenset({"from", "to"})).with_row_index("at", 1)
        table = raw.with_columns(
            address=key_of(raw["address"]),
            # a person may be named by an address too, and is then the same party as that address
            person=pl.coalesce(key_of(raw["person"]), "person"),
            first=pl.col("from").cast(pl.Int32).fill_null(-(2**31)),
            last=pl.col("to").cast(pl.Int32).fill_null(2**31 - 1),
        ).select("at", "address", "person", "first", "last")
        _refuse(path, table.filter(pl.col("address").is_null()), "the address is none", "write it as name@domain")
        _refuse(path, table.filter(pl.col("first") > pl.col("last")), "`from` is after `to`", "change one of them")
        ordered = table.sort("address", "first", "at")
        before = ordered.select(pl.all().shift(1).over("address"))
        meets = (ordered["first"] <= before["last"]).fill_null(False)
        told = "the address has another row for the same days"
        _refuse(path, ordered.filter(meets), told, "end one before the other starts")
        return cls(ordered.drop("at"))

    def apply(self, contacts: pl.DataFrame, book: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame]:
        """Contacts and book with persons in the place of their addresses, on the days that the table gives."""
        codes = book.select(code=pl.int_range(pl.len(), dtype=pl.UInt32), address="party", side="side")
        known = codes.join(self.table, on="address", maintain_order="left")
        if not known.height:
            return contacts, book
        persons = known.group_by("person", maintain_order=True).agg(pl.col("side").max())
        persons = persons.select(
            party="person", kind=pl.lit("person", KINDS), side="side", label=pl.lit(None, pl.String)
        )
        whole = pl.concat([book.select(persons.columns), persons])
        after = whole.group_by("party", maintain_order=True).agg(
            pl.col("kind").max(), pl.col("side").max(), pl.col("label").drop_nulls().first()
        )
        places = after.select(person="party", now=pl.int_range(pl.len(), dtype=pl.UInt32))
        # a book's keys are distinct and come first, so that codes of before mean the same
        known = known.join(places, on="person").select("code", "now", "first", "last")
        return contacts.with_columns(_changed(contacts, side, known) for side in SIDES), after


def _changed(contacts: pl.DataFrame, side: str, known: pl.DataFrame) -> pl.Series:
    codes = contacts[side]
    at = codes.is_in(known["code"].unique().implode()).fill_null(False).arg_true()
    day = contacts["time"].gather(at).dt.epoch("d").cast(pl.Int32)
    asked = pl.DataFrame({"at": at, "code": codes.gather(at), "day": day})
    # no day: only what is true of every day
    day_known = pl.col("day").is_between("first", "last")
    always = (pl.col("first") == -(2**31)) & (pl.col("last") == 2**31 - 1)
    told = asked.join(known, on="code").filter(day_known.fill_null(always))
    return codes.scatter(told["at"], told["now"]) if told.height else codes


def _refuse(path: str, rows: pl.DataFrame, fault: str, advice: str) -> None:
    if rows.height:
        raise SettingsError(f"{KEY}: {path}, row {rows['at'].sort()[0]} after the header: {fault}; {advice}")
