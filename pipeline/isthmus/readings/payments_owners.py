"""Whose account it is on a payment's day."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings.reading import KINDS
from isthmus.readings.tables import read_table

__all__ = ["Owners"]

_EVER = (-(2**31), 2**31 - 1)  # days since 1970


@dataclass(frozen=True, eq=False)
class Owners:
    """`names`: distinct owners. `periods`: tables of account, owner (place in `names`), first, last (days since 1970);
    each holds an account once, so an account that changed hands stands in several."""

    names: pl.Series
    periods: Sequence[pl.DataFrame]

    @classmethod
    def open(cls, path: str, accounts: Callable[[pl.Series, str], pl.Series]) -> Owners:
        """accounts: normalises those of a table whose setting is named. Raises SettingsError, StoreError."""
        name = "log.rules.owner_table"
        types = {"account": pl.String(), "owner": pl.String(), "from": pl.Date(), "to": pl.Date()}
        table = read_table(path, name, types, frozenset({"from", "to"}))
        names = table["owner"].unique(maintain_order=True)
        table = table.select(
            account=accounts(table["account"], f"{name}: {path}"),
            owner=pl.col("owner").replace_strict(names, list(range(len(names))), return_dtype=pl.UInt32),
            first=pl.col("from").dt.epoch("d").cast(pl.Int32).fill_null(_EVER[0]),
            last=pl.col("to").dt.epoch("d").cast(pl.Int32).fill_null(_EVER[1]),
        ).sort("account", "first")
        if not table["last"].ge(table["first"]).all():
            raise SettingsError(f"{name}: {path}: a row ends (to) before it begins (from); mend it")
        if table.select((pl.col("first") <= pl.col("last").shift(1).over("account")).any()).item():
            raise SettingsError(f"{name}: {path} gives an account two owners on one day; part their from and to")
        turn = pl.int_range(pl.len()).over("account")
        return cls(names, table.with_columns(turn=turn).partition_by("turn", include_key=False, maintain_order=True))

    def of(self, account: str) -> list[str]:
        """All owners that an account ever had."""
        places = [period.filter(pl.col("account") == account)["owner"] for period in self.periods]
        return self.names.gather(pl.concat(places)).to_list() if places else []

    def at(self, book: pl.DataFrame, code: pl.Series, day: pl.Series) -> pl.Series:
        """Owner (UInt32, place in `names`; null: not told) of the parties `code` of the book on each `day`."""
        owner = pl.Series([None], dtype=pl.UInt32).new_from_index(0, len(code))
        for period in self.periods:
            told = book.select("party").join(
                period, left_on="party", right_on="account", how="left", maintain_order="left"
            )
            found = told["owner"].gather(code)
            if period["first"].max() != _EVER[0] or period["last"].min() != _EVER[1]:
                valid = (told["first"].gather(code) <= day) & (day <= told["last"].gather(code))
                found = found.zip_with(valid.fill_null(False), owner)
            owner = owner.zip_with(owner.is_not_null(), found)
        return owner

    def merged(
        self, contacts: pl.DataFrame, book: pl.DataFrame, owners: dict[str, pl.Series]
    ) -> tuple[pl.DataFrame, pl.DataFrame]:
        """Contacts between owners where `owners` (of each side) are known, and the book of who is left."""
        home = pl.concat([period.select("account", "owner") for period in self.periods])
        told = book.join(home, left_on="party", right_on="account")
        told = told.group_by("owner").agg(
            hub=(pl.col("kind") == "hub").any(), side=pl.col("side").max(), label=pl.col("label").drop_nulls().first()
        )
        told = told.sort("owner").select(
            party=pl.lit(self.names).gather("owner"),
            kind=pl.when("hub").then(pl.lit("hub")).otherwise(pl.lit("party")).cast(KINDS),
            side="side",
            label="label",
        )
        told = told.with_columns(named="kind").select(book.columns)
        known = book["party"].to_list()
        whole = pl.concat([book, told.filter(~pl.col("party").is_in(known))])
        place = pl.DataFrame({"party": self.names}).join(
            whole.with_row_index("place"), on="party", how="left", maintain_order="left"
        )["place"]
        sides = {
            side: place.gather(owner).zip_with(owner.is_not_null(), contacts[side]) for side, owner in owners.items()
        }
        left = pl.concat([codes.rename("code") for codes in sides.values()]).drop_nulls().unique().sort()
        now = pl.Series([None], dtype=pl.UInt32).new_from_index(0, whole.height)
        now = now.scatter(left, pl.int_range(len(left), dtype=pl.UInt32, eager=True))
        return contacts.with_columns(**{side: now.gather(code) for side, code in sides.items()}), whole[left]
