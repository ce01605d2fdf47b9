"""Kind "payments": who paid whom, in one currency, without what was taken back.

Rows are payments (pacs.008 and its return pacs.004, flat) or entries of statements (camt.053); settings/payments.py
names the columns. In a statement CdtDbtInd tells the direction: DBIT leads from the own account, CRDT to it, and the
amount's own sign beside DBIT is not looked at, because some exports write it twice.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from functools import cached_property
from importlib.metadata import version
from pathlib import Path
from typing import Self

import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings import payments_accounts as accounts
from isthmus.readings import payments_money as money
from isthmus.readings import payments_returns as returns
from isthmus.readings.payments_owners import Owners
from isthmus.readings.reading import AMOUNT, FILTERED, KINDS, REFUSED, SIDES, Judged, Verdict, repeated
from isthmus.readings.tables import digest_of, read_table
from isthmus.settings.payments import PaymentsColumns, PaymentsLog, PaymentsRules

__all__ = ["PaymentsReading"]

_DIRECTION = "direction is neither CRDT nor DBIT"
_STATUS = "not booked"
_OWN = "own account"
_ZERO = "amount is zero"
_AGAIN = "delivered again"
_LOST = "return without an id of its payment"


@dataclass(frozen=True, eq=False)
class PaymentsReading:
    """`hubs`: account, label. `institution`: accounts of the institution's own beside those with its bank codes."""

    columns: PaymentsColumns
    rules: PaymentsRules
    money: money.Money
    owners: Owners
    hubs: pl.DataFrame
    institution: pl.Series
    tables: str

    @classmethod
    def open(cls, log: PaymentsLog) -> Self:
        """Raises SettingsError, StoreError for the user's tables."""
        rules = log.rules
        name = "log.rules.hub_table"
        hubs = read_table(rules.hub_table, name, {"account": pl.String(), "label": pl.String()})
        hubs = hubs.with_columns(account=_accounts(hubs["account"], f"{name}: {rules.hub_table}"))
        if hubs["account"].is_duplicated().any():
            raise SettingsError(f"{name}: {rules.hub_table} names an account twice; keep one label for each")
        name = "log.rules.institution_table"
        own = read_table(rules.institution_table, name, {"account": pl.String()})["account"]
        files = (rules.rate_table, rules.owner_table, rules.hub_table, rules.institution_table)
        return cls(
            columns=log.columns,
            rules=rules,
            money=money.Money.open(rules.reporting_currency, rules.amount_unit, rules.rate_table, rules.rate_days),
            owners=Owners.open(rules.owner_table, _accounts),
            hubs=hubs,
            institution=_accounts(own, f"{name}: {rules.institution_table}"),
            tables=" ".join(digest_of(file) or "-" for file in files),
        )

    @property
    def settles(self) -> bool:
        return True

    def stands_for(self, key: str) -> list[str]:
        return self.owners.of(key) if self.rules.merge_owners else []

    @property
    def names(self) -> pl.Series:
        return self.owners.names if self.rules.merge_owners else self.owners.names.clear()

    @property
    def left_out(self) -> frozenset[str]:
        return frozenset()

    @property
    def extras(self) -> dict[str, pl.DataType]:
        """`back`: it takes a payment back. The ids are its own, of a return its original's. `paid`, `currency`: the
        amount before it was converted. All of it only for a log that can tell of returns."""
        if not self._returns:
            return {}
        ids: dict[str, pl.DataType] = {name: pl.UInt64() for name in self._references}
        several: dict[str, pl.DataType] = {"paid": AMOUNT, "currency": pl.UInt16()} if self.columns.currency else {}
        return {"back": pl.Boolean(), **ids, **several}

    @cached_property
    def fingerprint(self) -> str:
        home = Path(__file__).parent
        sources = [*sorted(home.glob("payments*.py")), home / "reading.py", home / "tables.py"]
        rules = {key: value for key, value in self.rules.model_dump().items() if not key.endswith("_table")}
        told = [self.columns.model_dump_json(), repr(rules), self.tables]
        told += [version(name) for name in ("iso4217", "python-stdnum", "polars")]
        code = b"".join(source.read_bytes() for source in sources)
        return hashlib.blake2b("\n".join(told).encode() + code, digest_size=12).hexdigest()

    @property
    def _returns(self) -> bool:
        """Whether the log can tell that a row is a return."""
        told = self.columns
        return bool(told.reversal or told.return_reason or self._originals)

    @property
    def _own_ids(self) -> list[str]:
        return [name for name in returns.REFERENCES if getattr(self.columns, name)]

    @property
    def _originals(self) -> list[str]:
        return [f"original_{name}" for name in returns.REFERENCES if getattr(self.columns, f"original_{name}")]

    @property
    def _references(self) -> list[str]:
        """Ids by which a return may find its payment: the payment must carry them, too."""
        return self._own_ids if self._returns else []

    def contacts(self, rows: pl.DataFrame) -> pl.DataFrame:
        if not self.columns.statement:
            return rows.rename({"debtor_account": "sender", "creditor_account": "receiver"})
        credit = _code("direction") == "CRDT"
        own, other = pl.col("own_account"), pl.col("counterparty_account")
        return rows.with_columns(
            sender=pl.when(credit).then(other).otherwise(own), receiver=pl.when(credit).then(own).otherwise(other)
        ).drop("own_account", "counterparty_account")

    def keys(self, raw: pl.Series) -> pl.DataFrame:
        """Accounts; see payments_accounts. `side` is unknown as long as no account of the institution's own is told."""
        found = accounts.normalised(raw, self.rules.accounts == "iban")
        told = bool(self.rules.bank_codes) or not self.institution.is_empty()
        own = accounts.with_bank_code(found["key"], self.rules.bank_codes) | found["key"].is_in(
            self.institution.implode()
        ).fill_null(False)
        found = found.join(self.hubs, left_on="key", right_on="account", how="left", maintain_order="left")
        side = pl.when(own).then(pl.lit("internal")).otherwise(pl.lit("external")) if told else pl.lit("unknown")
        hub = pl.col("label").is_not_null()
        return found.select(
            "key",
            "fault",
            kind=pl.when(hub).then(pl.lit("hub")).otherwise(pl.lit("account")).cast(KINDS),
            side=side.cast(SIDES),
            label="label",
        )

    def judge(self, contacts: pl.DataFrame, book: pl.DataFrame) -> Judged:
        """The rows' own columns are dropped once judged. See payments_money for amounts."""
        day = contacts["time"].dt.epoch("d").cast(pl.Int32)
        worth = self.money.worth(self._amount(contacts), contacts["currency"] if self.columns.currency else None, day)
        ids = self._own_ids + self._originals
        hashes = returns.references(contacts, book["party"], ids, self.rules.placeholders)
        back = self._back(contacts, hashes)
        judged = contacts.select(pl.col("^_.*$"), "row", "sender", "receiver", "time").with_columns(
            worth["amount"].alias("amount"), back=back
        )
        rows = judged.select("back").with_columns(
            worth["paid"].alias("amount"),
            _party(book, contacts, "sender"),
            _party(book, contacts, "receiver"),
            day.alias("day"),
            *hashes.get_columns(),
        )
        judged = judged.with_columns(returns.own_identity(rows, ids))
        owners = {side: self.owners.at(book, contacts[side], day) for side in ("sender", "receiver")}
        verdicts = self._verdicts(contacts, book, worth, owners, rows)
        judged = judged.with_columns(verdict=_first([when for when, _, _ in verdicts]))
        if self._returns:
            judged = judged.with_columns(self._of_original(rows).get_columns())
            if self.columns.currency:
                judged = judged.with_columns(worth["paid"], worth["currency"])
        if self.rules.merge_owners:
            judged, book = self.owners.merged(judged, book, owners)
        told = [Verdict(pl.col("verdict") == at, reason, outcome) for at, (_, reason, outcome) in enumerate(verdicts)]
        return Judged(judged, book, told)

    def settle(self, rows: pl.LazyFrame) -> pl.DataFrame:
        """Deliveries repeated, then returns against their payments."""
        again = repeated(rows, _AGAIN)
        if not self._references:
            return again
        return pl.concat([again, returns.netted(rows, again, self._references, self.money.places)])

    def weigh(self, ties: pl.DataFrame, parties: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, dict[str, int]]:
        return ties, parties, {}

    def _amount(self, contacts: pl.DataFrame) -> pl.Series:
        """As written; beside DBIT in a statement without its sign."""
        amount = contacts["amount"]
        type_ = amount.dtype
        if not self.columns.statement or not type_.is_numeric() or type_.is_unsigned_integer():
            return amount
        if type_.is_integer():
            amount = amount.cast(pl.Int128)  # the lowest number of a type has no positive twin in it
        debit = contacts.select(debit=(_code("direction") == "DBIT").fill_null(False))["debit"]
        return amount.abs().zip_with(debit, amount)

    def _back(self, contacts: pl.DataFrame, hashes: pl.DataFrame) -> pl.Series:
        """Whether a row takes a payment back."""
        back = pl.Series("back", [False]).new_from_index(0, len(contacts))
        if self.columns.reversal:
            flag = pl.col("reversal")
            if contacts.schema["reversal"] != pl.Boolean():
                flag = _code("reversal").is_in(["TRUE", "1"])
            back |= contacts.select(flag.fill_null(False).alias("back"))["back"]
        if self.columns.return_reason:
            back |= contacts.select((_code("return_reason") != "").fill_null(False).alias("back"))["back"]
        for name in self._originals:
            back |= hashes[name].is_not_null()
        return back

    def _of_original(self, rows: pl.DataFrame) -> pl.DataFrame:
        """A payment's ids, and for a return those of its original: where it names none, it carries them as its own."""
        named = [f"original_{name}" for name in self._own_ids if f"original_{name}" in self._originals]
        any_named = pl.any_horizontal(pl.lit(False), *(pl.col(name).is_not_null() for name in named))
        if not self._own_ids:
            return pl.DataFrame()
        return rows.select(
            pl.when(pl.col("back") & any_named)
            .then(pl.col(f"original_{name}") if f"original_{name}" in named else pl.lit(None, pl.UInt64))
            .otherwise(name)
            .alias(name)
            for name in self._own_ids
        )

    def _verdicts(
        self,
        contacts: pl.DataFrame,
        book: pl.DataFrame,
        worth: pl.DataFrame,
        owners: dict[str, pl.Series],
        rows: pl.DataFrame,
    ) -> list[tuple[pl.Series, str, str]]:
        """Which contacts, why and with what outcome."""
        found: list[tuple[pl.Series, str, str]] = []
        if self.columns.statement:
            wrong = contacts.select(_code("direction").is_in(["CRDT", "DBIT"]).fill_null(False).not_().alias("wrong"))
            found.append((wrong["wrong"], _DIRECTION, REFUSED))
        if self.columns.status:
            accepted = [code.strip().upper() for code in self.rules.statuses]
            booked = contacts.select(_code("status").is_in(accepted).fill_null(False).alias("booked"))["booked"]
            found.append((~booked, _STATUS, FILTERED))
        found += [(worth["fault"] == at, fault, REFUSED) for at, fault in enumerate(money.FAULTS)]
        same = (owners["sender"] == owners["receiver"]) & (contacts["sender"] != contacts["receiver"])
        found.append((same, _OWN, FILTERED))
        if self.rules.hubs == "leave out":
            labels = {side: book["label"].gather(contacts[side]) for side in ("sender", "receiver")}
            for label in self.hubs["label"].unique(maintain_order=True):
                either = (labels["sender"] == label).fill_null(False) | (
                    labels["sender"].is_null() & (labels["receiver"] == label).fill_null(False)
                )
                found.append((either, f"hub: {label}", FILTERED))
        if self.rules.zero_amounts == "leave out":
            found.append((worth["paid"] == 0, _ZERO, FILTERED))
        if self._returns:
            known = self._of_original(rows)
            lost = rows.select(lost="back")["lost"]
            for name in known.columns:
                lost &= known[name].is_null()
            found.append((lost, _LOST, FILTERED))
        return found


def _code(column: str) -> pl.Expr:
    return pl.col(column).cast(pl.String).str.strip_chars().str.to_uppercase()


def _party(book: pl.DataFrame, contacts: pl.DataFrame, side: str) -> pl.Series:
    return book["party"].hash(9).gather(contacts[side]).alias(side)


def _first(whens: list[pl.Series]) -> pl.Series:
    """Place of the first that is true (UInt16; null: none)."""
    frame = pl.DataFrame({str(at): when for at, when in enumerate(whens)})
    told = (pl.when(pl.col(str(at))).then(pl.lit(at, pl.UInt16)) for at in range(len(whens)))
    return frame.select(verdict=pl.coalesce(*told))["verdict"]


def _accounts(told: pl.Series, where: str) -> pl.Series:
    """Accounts of a user's table as keys. Raises SettingsError."""
    found = accounts.normalised(told, iban_only=False)
    if (bad := found["key"].is_null().arg_true()).len():
        raise SettingsError(
            f"{where}, row {bad[0] + 1} after the header: the account {found['fault'][bad[0]]}; mend it"
        )
    return found["key"].alias("account")
