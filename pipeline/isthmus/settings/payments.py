"""`[log]` of kind "payments": columns, and the rules by which payments count.

Names are those of ISO 20022 elements: pacs.008 (FIToFICustomerCreditTransfer), pacs.004 (PaymentReturn: Orgnl...,
RtrRsnInf) and camt.053 (BankToCustomerStatement: CdtDbtInd, RvslInd, Sts, BookgDt).
"""

from __future__ import annotations

import re
from typing import Any, Literal

from pydantic import Field, model_validator

from isthmus.settings.log import PATH
from isthmus.settings.section import Section, column, file_key, key

__all__ = ["PaymentsColumns", "PaymentsLog", "PaymentsRules"]

_FLAT = ("debtor_account", "creditor_account")
_STATEMENT = ("own_account", "counterparty_account", "direction")
_ID = "string integer"


class PaymentsColumns(Section):
    """Our name = the log's own; "" = it has none. A row is a payment (pacs.008) or a statement's entry (camt.053)."""

    # Told apart by what is named: the first two, or the three after them.
    debtor_account: str = column("DbtrAcct", _ID, "account that paid; pacs.008 DbtrAcct/Id", optional=True)
    creditor_account: str = column("CdtrAcct", _ID, "account that was paid; pacs.008 CdtrAcct/Id", optional=True)
    own_account: str = column("", _ID, "statements: account that the statement is of; camt.053 Stmt/Acct/Id")
    counterparty_account: str = column("", _ID, "statements: the other account; camt.053 RltdPties/DbtrAcct, CdtrAcct")
    direction: str = column("", "string", "statements: CRDT, paid to the own account, or DBIT; camt.053 CdtDbtInd")
    time: str = column(
        "AccptncDtTm",
        "timestamp date",
        "when it was accepted or booked, never the value date; pacs.008 AccptncDtTm, camt.053 BookgDt. "
        "A date is its midnight: the order within a day is then unknown",
    )
    amount: str = column(
        "IntrBkSttlmAmt",
        "number integer",
        "what was paid; pacs.008 IntrBkSttlmAmt, pacs.004 RtrdIntrBkSttlmAmt, camt.053 Amt",
    )
    currency: str = column(
        "Ccy", "string", "ISO 4217 code of the amount; empty: all in `reporting_currency`", optional=True
    )
    status: str = column("Sts", "string", "camt.053 Ntry/Sts; empty: every row is booked", optional=True)
    uetr: str = column("UETR", "string", "unique end-to-end transaction reference; pacs.008 PmtId/UETR", optional=True)
    tx_id: str = column("TxId", _ID, "pacs.008 PmtId/TxId", optional=True)
    end_to_end_id: str = column(
        "EndToEndId", _ID, "chosen by the payer, so not unique; pacs.008 PmtId/EndToEndId", optional=True
    )
    reversal: str = column(
        "RvslInd", "boolean string", "true (or 1): takes an earlier payment back; camt.053 RvslInd", optional=True
    )
    original_uetr: str = column(
        "OrgnlUETR", "string", "of the payment that a return takes back; pacs.004 OrgnlUETR", optional=True
    )
    original_tx_id: str = column("OrgnlTxId", _ID, "the same; pacs.004 OrgnlTxId", optional=True)
    original_end_to_end_id: str = column("OrgnlEndToEndId", _ID, "the same; pacs.004 OrgnlEndToEndId", optional=True)
    return_reason: str = column("RtrRsnInf", "string", "code on returns only; pacs.004 RtrRsnInf/Rsn/Cd", optional=True)

    @model_validator(mode="before")
    @classmethod
    def _one_layout(cls, told: Any) -> Any:
        """Who names a statement's columns need not empty the other layout's defaults."""
        if isinstance(told, dict) and any(told.get(name) for name in _STATEMENT):
            return {**dict.fromkeys(_FLAT, ""), **told}
        return told

    @model_validator(mode="after")
    def _layout_is_whole(self) -> PaymentsColumns:
        flat, statement = ([name for name in names if getattr(self, name)] for names in (_FLAT, _STATEMENT))
        if flat and statement:
            raise ValueError(
                f'log.columns.{flat[0]} = "{getattr(self, flat[0])}" and log.columns.{statement[0]} = '
                f'"{getattr(self, statement[0])}" belong to two layouts; empty one of them'
            )
        wanted = _STATEMENT if statement else _FLAT
        if missing := [name for name in wanted if not getattr(self, name)]:
            raise ValueError(f'log.columns.{missing[0]} = ""; this layout needs {", ".join(wanted)}: name the column')
        accounts = wanted[:2]
        if getattr(self, accounts[0]) == getattr(self, accounts[1]):
            raise ValueError(
                f'log.columns.{accounts[0]} and log.columns.{accounts[1]} are both "{getattr(self, accounts[0])}"; '
                "name the column of each side"
            )
        return self

    @property
    def statement(self) -> bool:
        """Whether a row is an entry of a statement."""
        return bool(self.own_account)


class PaymentsRules(Section):
    """Which payments count, and as what. Defaults are this project's unless a standard is named."""

    reporting_currency: str = key(..., "ISO 4217 code in which all amounts are added up", pattern="^[A-Z]{3}$")
    rate_table: str = file_key(
        "",
        "CSV or Parquet with currency, date, rate (units of `reporting_currency` for 1 unit of the currency); "
        "empty: only `reporting_currency` is known",
    )
    rate_days: int = key(7, "how old the last rate on or before a payment's day may be", "days", ge=0, le=366)
    amount_unit: Literal["major", "minor"] = key("major", "what amounts count: 12.34, or 1234 of the minor unit")
    statuses: list[str] = key(["BOOK"], "codes of `status` that count; camt.053 BOOK = booked")
    placeholders: list[str] = key(
        ["NOTPROVIDED", "NONREF"], "what stands in a column of ids where there is no id; case does not matter"
    )
    zero_amounts: Literal["leave out", "keep"] = key("leave out", "payments of nothing")
    accounts: Literal["any", "iban"] = key(
        "any",
        "any: account ids of every kind, but what looks like an IBAN must be one; iban: nothing else (ISO 13616)",
    )
    owner_table: str = file_key(
        "",
        "CSV or Parquet with account, owner and, where it changes, from, to (first and last day): payments between "
        "accounts of one owner are left out",
    )
    merge_owners: bool = key(False, "the parties are owners instead of accounts, where the owner table knows them")
    hub_table: str = file_key(
        "", "CSV or Parquet with account, label, such as merchant, payroll, tax, processor, ledger"
    )
    hubs: Literal["leave out", "label"] = key("leave out", "payments from and to the accounts of the hub table")
    bank_codes: list[str] = key(
        [],
        "IBANs of the institution's own accounts: country code and what follows the check digits, as far as needed, "
        "such as VGOMBR for VG44OMBR...",
    )
    institution_table: str = file_key("", "CSV or Parquet with account: further accounts of the institution's own")

    @model_validator(mode="after")
    def _usable(self) -> PaymentsRules:
        for code in self.bank_codes:
            if not re.fullmatch("[A-Z]{2}[A-Z0-9]+", code):
                raise ValueError(
                    f'log.rules.bank_codes has "{code}"; write two capital letters of the country and the bank\'s code'
                )
        if not self.statuses:
            raise ValueError("log.rules.statuses = []: nothing would count; empty log.columns.status to count all")
        if self.merge_owners and not self.owner_table:
            raise ValueError("log.rules.merge_owners = true needs log.rules.owner_table; name the file")
        return self


class PaymentsLog(Section):
    """Where the rows come from."""

    path: str = file_key(..., PATH, min_length=1)
    kind: Literal["payments"] = key("payments", "how the rows are to be understood")
    columns: PaymentsColumns = Field(default_factory=PaymentsColumns)
    rules: PaymentsRules

    @property
    def has_amounts(self) -> bool:
        return True
