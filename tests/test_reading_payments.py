"""Kind "payments": accounts, amounts, currencies, returns, owners, hubs; and the invented log's truth."""

from __future__ import annotations

import tomllib
from datetime import UTC, date, datetime
from decimal import ROUND_HALF_EVEN, Decimal
from pathlib import Path
from typing import Any

import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError
from stdnum import iban

from isthmus.errors import SettingsError
from isthmus.inventions.payments import CONFIG, make_log
from isthmus.readings import payments_accounts as accounts
from isthmus.readings import payments_returns as returns
from isthmus.readings.payments import PaymentsReading
from isthmus.readings.payments_money import FAULTS, Money
from isthmus.readings.reading import Reading
from isthmus.settings.payments import PaymentsColumns, PaymentsLog, PaymentsRules
from reading_harness import Told, tell

TYPES = {
    "debtor_account": pl.String(),
    "creditor_account": pl.String(),
    "time": pl.Datetime("us", "UTC"),
    "amount": pl.Decimal(18, 5),
    "currency": pl.String(),
    "status": pl.String(),
    "uetr": pl.String(),
    "tx_id": pl.String(),
    "end_to_end_id": pl.String(),
    "reversal": pl.Boolean(),
    "original_uetr": pl.String(),
    "original_tx_id": pl.String(),
    "original_end_to_end_id": pl.String(),
    "return_reason": pl.String(),
}
USUAL = {"debtor_account": "a", "creditor_account": "b", "amount": Decimal(10), "currency": "EUR", "status": "BOOK"}
IN_WINDOW, IN_FULL = "return of a payment in the window", "returned in full"
OUTSIDE = "return of a payment outside the window"
AGAIN = "delivered again"


def reading(columns: dict[str, str] | None = None, **rules: Any) -> Reading:
    told = PaymentsRules(**{"reporting_currency": "EUR", **rules})
    return PaymentsReading.open(PaymentsLog(path="log", columns=PaymentsColumns(**(columns or {})), rules=told))


def log(*rows: dict[str, Any], **types: pl.DataType) -> pl.DataFrame:
    """Rows in the order of time, a day apart, with usual values for what they do not tell."""
    whole = [
        {**dict.fromkeys(TYPES), **USUAL, "time": datetime(2026, 11, 1 + at, 12, tzinfo=UTC), **row}
        for at, row in enumerate(rows)
    ]
    return pl.DataFrame(whole, schema={**TYPES, **types})


def told_of(*rows: dict[str, Any], **rules: Any) -> Told:
    return tell(reading(**rules), log(*rows))


def left_out(told: Told) -> dict[str, int]:
    return {
        reason: number
        for outcome in told.counts
        if outcome != "used"
        for reason, number in told.counts[outcome].items()
    }


# Accounts --------------------------------------------------------------------------------------------------------

# Examples of the IBAN registry that belongs to ISO 13616, among them the shortest and the longest form.
REGISTRY = (
    "NO93 8601 1117 947",
    "GB29 NWBK 6016 1331 9268 19",
    "DE89 3704 0044 0532 0130 00",
    "FR14 2004 1010 0505 0001 3M02 606",
    "BR18 0036 0305 0000 1000 9795 493C 1",
    "SC18 SSCB 1101 0000 0000 0000 1497 USD",
    "MT84 MALT 0110 0001 2345 MTLC AST0 01S",
    "LC55 HEMM 0001 0001 0012 0012 0002 3015",
    "VG96 VPVG 0000 0123 4567 8901",
)


def modulus(key: str) -> int:
    """ISO 7064, mod 97-10, on the number as one whole number."""
    return int("".join(str(int(place, 36)) for place in key[4:] + key[:4])) % 97


@pytest.mark.parametrize("written", REGISTRY)
def test_the_registry_s_examples_are_one_key_however_they_are_spelt(written: str) -> None:
    key = written.replace(" ", "")
    spellings = [written, key, key.lower(), f"  {written} ", written.replace(" ", "-"), written.replace(" ", "\u00a0")]
    spellings += [f"{word}{written}" for word in ("IBAN", "IBAN ", "iban: ", "Iban:", " IBAN : ", "IBAN\u00a0")]
    found = accounts.normalised(pl.Series(spellings), iban_only=True)
    assert found["key"].to_list() == [key] * len(spellings)
    assert modulus(key) == 1


@pytest.mark.parametrize("written", REGISTRY)
def test_any_other_check_digits_are_refused(written: str) -> None:
    key = written.replace(" ", "")
    others = pl.Series([f"{key[:2]}{digits:02d}{key[4:]}" for digits in range(2, 99) if f"{digits:02d}" != key[2:4]])
    for iban_only in (True, False):
        assert set(accounts.normalised(others, iban_only)["fault"]) == {"is an IBAN with a wrong check digit"}


def test_other_ids_are_kept_or_refused_by_rule() -> None:
    ids = pl.Series([" 0012 ", "LEDGER-7", "ZZ12ABCDEFGHIJKLMNOP", "  "])
    found = accounts.normalised(ids, iban_only=False)
    assert found["key"].to_list() == ["0012", "LEDGER-7", "ZZ12ABCDEFGHIJKLMNOP", None]
    assert found["fault"].to_list() == [None] * 4
    found = accounts.normalised(ids, iban_only=True)
    assert found["key"].to_list() == [None] * 4
    assert found["fault"].to_list() == ["is not an IBAN"] * 3 + [None]


def test_a_right_check_digit_on_the_wrong_form_is_refused() -> None:
    short = "GB29NWBK601613319268"
    short = f"GB{iban.calc_check_digits(short)}{short[4:]}"
    digit_lost = ["GB29NWBK6016133192681", "GB29 NWBK 6016 1331 9268 1", "IBAN GB29NWBK601613319268190"]
    for iban_only in (True, False):
        found = accounts.normalised(pl.Series([short, *digit_lost]), iban_only)["fault"]
        assert found.to_list() == ["is an IBAN of the wrong form"] * 4


def test_the_word_iban_before_anything_else_is_part_of_the_id() -> None:
    ids = ["IBAN 12", "IBAN", "IBAN IBAN NO93 8601 1117 947", "IBANK-7"]
    assert accounts.normalised(pl.Series(ids), iban_only=False)["key"].to_list() == ids


PLACES = st.text("ABZ0129", min_size=11, max_size=30)
LIKE_IBANS = st.builds(
    lambda country, rest, right: f"{country}{iban.calc_check_digits(country + '00' + rest) if right else '42'}{rest}",
    st.sampled_from(["GB", "NO", "DE", "VG", "BE", "ES", "ZZ"]),
    PLACES | st.sampled_from([written.replace(" ", "")[4:] for written in REGISTRY]),
    st.booleans(),
)


PRINTED = st.builds(str.__add__, st.sampled_from(["", "IBAN ", "iban:", "IBAN IBAN"]), st.sampled_from(REGISTRY))


@settings(deadline=None)
@given(st.lists(LIKE_IBANS, min_size=1, max_size=30))
def test_the_library_judges_every_iban(keys: list[str]) -> None:
    found = accounts.normalised(pl.Series(keys), iban_only=True)
    assert found["key"].is_not_null().to_list() == [iban.is_valid(key, check_country=False) for key in keys]


@settings(deadline=None)
@given(st.lists(st.text() | LIKE_IBANS | PRINTED, min_size=1, max_size=20), st.booleans())
def test_any_text_is_a_key_that_stays_itself_or_is_refused_with_a_reason(raw: list[str], iban_only: bool) -> None:
    read = reading(accounts="iban" if iban_only else "any")
    keys = read.keys(pl.Series(raw, dtype=pl.String))
    assert len(keys) == len(raw)
    for text, key, fault in zip(raw, keys["key"], keys["fault"], strict=True):
        # Unicode's White_Space, to which Python adds four separators
        blank = all(place.isspace() and place not in "\x1c\x1d\x1e\x1f" for place in text)
        assert (key is None) == (fault is not None or blank)
    good = keys["key"].drop_nulls()
    assert read.keys(good)["key"].to_list() == good.to_list()


# Amounts ---------------------------------------------------------------------------------------------------------


def worth(money: Money, amounts: pl.Series, currency: str | None = "EUR", day: int = 20_000) -> pl.DataFrame:
    currencies = None if currency is None else pl.Series([currency] * len(amounts))
    return money.worth(amounts, currencies, pl.Series([day] * len(amounts), dtype=pl.Int32))


def faults(found: pl.DataFrame) -> list[str | None]:
    return [None if at is None else FAULTS[at] for at in found["fault"]]


# ISO 4217, table A.1 (the agency's list 1): digits of the minor unit.
@pytest.mark.parametrize(("code", "places"), [("JPY", 0), ("USD", 2), ("KWD", 3), ("TND", 3), ("IQD", 3), ("CLF", 4)])
def test_minor_units_are_those_of_iso_4217(code: str, places: int) -> None:
    money = Money.open(code, "major", "", 7)
    unit = Decimal(1).scaleb(-places)
    found = worth(money, pl.Series([unit, unit / 10, unit + 1], dtype=pl.Decimal(20, 8)), code)
    assert found["amount"].to_list() == [unit, None, unit + 1]
    assert faults(found) == [None, "more decimals than the currency has", None]
    assert worth(Money.open(code, "minor", "", 7), pl.Series([1, 25]), code)["amount"].to_list() == [unit, 25 * unit]


def test_floats_may_be_off_by_their_own_error_only() -> None:
    money = Money.open("EUR", "major", "", 7)
    found = worth(money, pl.Series([0.1 + 0.2, 1.1 * 3, 1e15 + 0.25, float("nan"), float("inf"), -0.01, 2e18, None]))
    assert found["amount"].to_list()[:3] == [Decimal("0.3"), Decimal("3.3"), Decimal("1000000000000000.25")]
    cents = worth(Money.open("EUR", "minor", "", 7), pl.Series([2.0, 3.4]))
    assert cents["amount"].to_list() == [Decimal("0.02"), None]
    assert faults(found)[3:] == [
        "amount is not finite",
        "amount is not finite",
        "amount is negative",
        "amount is above 1e+18",
        "amount is null",
    ]


@pytest.mark.parametrize(
    ("code", "unit", "written"),
    [
        ("JPY", "major", "1000.5"),
        ("EUR", "major", "0.004"),
        ("EUR", "major", "1.005"),
        ("EUR", "major", "2.675"),
        ("KWD", "major", "1.2345"),
        ("EUR", "minor", "267.5"),
    ],
)
def test_a_share_of_the_minor_unit_is_refused_in_whatever_type_it_is_written(
    code: str, unit: str, written: str
) -> None:
    money = Money.open(code, unit, "", 7)
    for amount in (Decimal(written), float(written)):
        assert faults(worth(money, pl.Series([amount]), code)) == ["more decimals than the currency has"]
    assert faults(worth(money, pl.Series([float(written)], dtype=pl.Float32), code)) == [
        "more decimals than the currency has"
    ]


@settings(deadline=None)
@given(st.sampled_from([("JPY", 0), ("EUR", 2), ("KWD", 3), ("CLF", 4)]), st.integers(0, 10**15))
def test_a_whole_number_of_minor_units_written_as_a_float_is_that_number(unit: tuple[str, int], minor: int) -> None:
    exact = Decimal(minor).scaleb(-unit[1])
    money = Money.open(unit[0], "major", "", 7)
    assert worth(money, pl.Series([float(exact)]), unit[0])["amount"].to_list() == [exact]
    small = Decimal(minor % 10**6).scaleb(-unit[1])  # seven digits fit into 32 bits
    assert worth(money, pl.Series([float(small)], dtype=pl.Float32), unit[0])["amount"].to_list() == [small]


def test_a_currency_must_be_one() -> None:
    money = Money.open("EUR", "major", "", 7)
    currencies = pl.Series(["EUR", " eur", "DMK", "", None, "XAU", "USD"])
    found = money.worth(pl.Series([1] * 7), currencies, pl.Series([20_000] * 7, dtype=pl.Int32))
    assert faults(found) == [
        None,
        None,
        "currency is not an ISO 4217 code",
        "currency is null",
        "currency is null",
        "currency without a minor unit",
        "currency without a rate",
    ]
    assert worth(money, pl.Series([5]), None)["amount"].to_list() == [5]


RATE = st.decimals("0.000000000000001", "999999", places=15)


@settings(deadline=None)
@given(
    st.lists(st.integers(0, 10**20), min_size=1, max_size=10),
    RATE,
    st.sampled_from([("USD", 2), ("JPY", 0), ("KWD", 3), ("CLF", 4)]),
    st.sampled_from([("EUR", 2), ("JPY", 0), ("KWD", 3)]),
)
def test_conversion_is_exact_and_rounded_half_even(
    minors: list[int], rate: Decimal, foreign: tuple[str, int], home: tuple[str, int]
) -> None:
    if foreign[0] == home[0]:
        return
    table = {"currency": [foreign[0]], "day": [20_000], "rate": [int(rate.scaleb(15))]}
    money = Money(
        home[0], True, 7, pl.DataFrame(table, schema=dict(zip(table, [pl.String, pl.Int32, pl.Int128], strict=True)))
    )
    found = worth(money, pl.Series(minors, dtype=pl.Int128), foreign[0])
    for minor, amount, fault in zip(minors, found["amount"], faults(found), strict=True):
        exact = Decimal(minor).scaleb(-foreign[1]) * rate
        if Decimal(minor).scaleb(-foreign[1]) > 10**18:
            assert fault == "amount is above 1e+18"
        elif abs(exact - 10**18) > 10**9:  # at the limit itself a float decides
            sound = exact.quantize(Decimal(1).scaleb(-home[1]), ROUND_HALF_EVEN) if exact < 10**18 else None
            assert amount == sound
            assert (fault == "amount is above 1e+18 once converted") == (exact > 10**18)


def test_halves_of_the_minor_unit_go_to_the_even_one(tmp_path: Path) -> None:
    (tmp_path / "rates.csv").write_text("currency,date,rate\nUSD,2024-10-04,0.5\n")
    money = Money.open("EUR", "minor", str(tmp_path / "rates.csv"), 7)
    assert worth(money, pl.Series([1, 3, 5, 7]), "USD")["amount"].to_list() == [
        Decimal(text) for text in ("0", "0.02", "0.02", "0.04")
    ]


def test_the_last_rate_on_or_before_the_day_counts_until_it_is_too_old(tmp_path: Path) -> None:
    file = tmp_path / "rates.csv"
    file.write_text("currency,date,rate\nUSD,2026-11-03,2\nUSD,2026-11-02,1\nJPY,2026-11-01,0.01\n")
    rows = log(*({"currency": "USD"} for _ in range(8)))
    told = tell(reading(rate_table=str(file), rate_days=3), rows)
    assert told.used["amount"].to_list() == [10, 20, 20, 20, 20]
    assert left_out(told) == {"currency without a rate": 3}  # the 1st, and from the 7th on
    assert left_out(tell(reading(rate_table=str(file), rate_days=0), rows)) == {"currency without a rate": 6}


@pytest.mark.parametrize(
    ("table", "fault"),
    [
        ("currency,date,rate\nEURO,2026-11-01,1\n", "not an ISO 4217 code"),
        ("currency,date,rate\nUSD,2026-11-01,-1\n", "from 1e-15"),
        ("currency,date,rate\nUSD,2026-11-01,x\n", "from 1e-15"),
        ("currency,date,rate\nUSD,2026-11-01,1\nUSD,2026-11-01,2\n", "two rates"),
    ],
)
def test_a_rate_table_that_cannot_be_is_refused(tmp_path: Path, table: str, fault: str) -> None:
    (tmp_path / "rates.csv").write_text(table)
    with pytest.raises(SettingsError, match=fault):
        reading(rate_table=str(tmp_path / "rates.csv"))


# Status, sign, duplicates ----------------------------------------------------------------------------------------


def test_only_booked_payments_of_something_count() -> None:
    rows = [{"status": " book "}, {"status": "PDNG"}, {"status": None}, {"amount": Decimal(0)}, {"amount": Decimal(-1)}]
    told = told_of(*rows)
    assert told.counts == {
        "used": {"used": 1},
        "filtered": {"not booked": 2, "amount is zero": 1},
        "refused": {"amount is negative": 1},
    }
    assert left_out(told_of(*rows, statuses=["BOOK", "PDNG"], zero_amounts="keep")) == {
        "not booked": 1,
        "amount is negative": 1,
    }


def test_a_second_delivery_is_known_by_uetr_then_tx_id_then_end_to_end_id_with_the_rest() -> None:
    same = datetime(2026, 11, 5, 9, tzinfo=UTC)
    told = told_of(
        {"uetr": "ab-1", "tx_id": "1"},
        {"uetr": " AB-1", "tx_id": "2"},  # UETR decides
        {"tx_id": "3", "end_to_end_id": "x", "time": same},
        {"tx_id": "4", "end_to_end_id": "x", "time": same},  # TxId decides
        {"tx_id": "3", "end_to_end_id": "y"},
        {"end_to_end_id": "rent", "time": same},
        {"end_to_end_id": "rent", "time": same.replace(hour=17)},
        {"end_to_end_id": "rent", "time": same.replace(day=6)},
        {"end_to_end_id": "rent", "time": same, "amount": Decimal(11)},
        {"end_to_end_id": "rent", "time": same, "creditor_account": "c"},
        *({"end_to_end_id": word, "time": same} for word in ("NOTPROVIDED", "notprovided", " ", None)),
    )
    assert left_out(told) == {AGAIN: 3}


def test_one_tx_id_of_two_banks_is_two_payments() -> None:
    told = told_of({"tx_id": "1"}, {"tx_id": "1", "creditor_account": "c"}, {"tx_id": "1", **BACK}, {"tx_id": "1"})
    assert left_out(told) == {AGAIN: 1}
    told = told_of({"tx_id": "1", "uetr": "u"}, {"tx_id": "1", "uetr": "u", "creditor_account": "c"})
    assert left_out(told) == {AGAIN: 1}


def test_placeholders_are_configurable() -> None:
    rows = [{"end_to_end_id": "none (a+b)", "time": datetime(2026, 11, 5, tzinfo=UTC)}] * 2
    assert left_out(told_of(*rows)) == {AGAIN: 1}
    assert left_out(told_of(*rows, placeholders=["None (A+B)"])) == {}


STATEMENT = {"own_account": "Acct", "counterparty_account": "Other", "direction": "CdtDbtInd"}


def test_statement_entries_lead_where_the_indicator_says() -> None:
    rows = log(
        *({"uetr": str(at), "amount": Decimal(amount)} for at, amount in enumerate([5, -6, 7, -8, 9, 9]))
    ).rename({"debtor_account": "own_account", "creditor_account": "counterparty_account"})
    rows = rows.with_columns(direction=pl.Series(["DBIT", "DBIT", "crdt", "CRDT", "C", None]))
    told = tell(reading(STATEMENT), rows)
    assert told.ties.select("sender", "receiver", "amount").rows() == [("a", "b", 11.0), ("b", "a", 7.0)]
    assert left_out(told) == {"amount is negative": 1, "direction is neither CRDT nor DBIT": 2}


def test_one_payment_in_the_statements_of_both_sides_is_one() -> None:
    rows = log({"uetr": "u"}, {"uetr": "u", "debtor_account": "b", "creditor_account": "a"})
    rows = rows.rename({"debtor_account": "own_account", "creditor_account": "counterparty_account"})
    told = tell(reading(STATEMENT), rows.with_columns(direction=pl.Series(["DBIT", "CRDT"])))
    assert told.ties["contacts"].to_list() == [1]
    assert left_out(told) == {AGAIN: 1}


# Returns ---------------------------------------------------------------------------------------------------------

BACK = {"debtor_account": "b", "creditor_account": "a"}


@pytest.mark.parametrize("name", ["uetr", "tx_id", "end_to_end_id"])
@pytest.mark.parametrize("swapped", [True, False])
def test_a_full_return_takes_its_payment_along_by_any_id(name: str, swapped: bool) -> None:
    back = {f"original_{name}": "P", "return_reason": "AC04", **(BACK if swapped else {})}
    told = told_of({name: "P"}, {name: "Q"}, back)
    assert left_out(told) == {IN_FULL: 1, IN_WINDOW: 1}
    assert told.ties.select("sender", "receiver", "contacts").rows() == [("a", "b", 1)]


def test_a_reversal_carries_the_ids_of_its_payment() -> None:
    told = told_of({"uetr": "u", "tx_id": "t"}, {"uetr": "u", "tx_id": "t", "reversal": True, **BACK})
    assert left_out(told) == {IN_FULL: 1, IN_WINDOW: 1}


def test_parts_lower_the_amount_until_nothing_is_left() -> None:
    def part(amount: str, tx_id: str) -> dict[str, Any]:
        return {"original_uetr": "u", "tx_id": tx_id, "amount": Decimal(amount), **BACK}

    told = told_of({"uetr": "u"}, part("2.50", "1"), part("2.50", "2"))
    assert told.used["amount"].to_list() == [5]
    assert left_out(told) == {IN_WINDOW: 2}
    told = told_of({"uetr": "u"}, part("2.50", "1"), part("7.50", "2"))
    assert left_out(told) == {IN_WINDOW: 2, IN_FULL: 1}
    told = told_of({"uetr": "u"}, part("2.50", "1"), part("7.51", "2"))
    assert left_out(told) == {IN_WINDOW: 1, IN_FULL: 1, "return of more than its payment": 1}
    same = {"time": datetime(2026, 11, 9, tzinfo=UTC)}
    told = told_of({"uetr": "u"}, part("2.50", "1") | same, part("2.50", "1") | same)
    assert told.used["amount"].to_list() == [Decimal("7.5")]
    assert left_out(told) == {IN_WINDOW: 1, AGAIN: 1}


def test_a_return_without_its_payment_is_never_a_payment() -> None:
    told = told_of(
        {"original_uetr": "u", **BACK}, {"reversal": True, "end_to_end_id": "NOTPROVIDED"}, {"return_reason": "AM05"}
    )
    assert left_out(told) == {OUTSIDE: 1, "return without an id of its payment": 2}
    assert told.used.is_empty()
    assert left_out(told_of({"uetr": "u", "status": "PDNG"}, {"original_uetr": "u"})) == {"not booked": 1, OUTSIDE: 1}


def test_an_end_to_end_id_used_again_means_the_last_such_payment_of_these_accounts() -> None:
    told = told_of(
        {"end_to_end_id": "rent", "amount": Decimal(1)},
        {"end_to_end_id": "rent", "amount": Decimal(2)},
        {"end_to_end_id": "rent", "amount": Decimal(2), "creditor_account": "c"},
        {"original_end_to_end_id": "rent", "amount": Decimal(2), **BACK},
        {"end_to_end_id": "rent", "amount": Decimal(4)},
    )
    assert left_out(told) == {IN_WINDOW: 1, IN_FULL: 1}
    assert told.used["amount"].to_list() == [1, 2, 4]
    assert told.used["receiver_key"].to_list() == ["b", "c", "b"]


@pytest.mark.parametrize("name", ["tx_id", "end_to_end_id"])
@pytest.mark.parametrize(
    ("paid", "back", "left"),
    [
        (["6", "5"], "6", ["5"]),  # the amount tells which
        (["6", "5", "6", "5"], "6", ["6", "5", "5"]),  # the latest of that amount
        (["6", "7", "5"], "5.50", ["6", "1.50", "5"]),  # the latest that is large enough
        (["6", "5"], "7", ["6"]),  # the latest
    ],
)
def test_of_several_payments_of_one_id_the_amount_tells_which_was_returned(
    name: str, paid: list[str], back: str, left: list[str]
) -> None:
    # a TxId twice between two accounts is a second delivery, unless the UETR says otherwise
    rows = [{name: "RENT", "uetr": str(at), "amount": Decimal(amount)} for at, amount in enumerate(paid)]
    told = told_of(*rows, {f"original_{name}": "RENT", "amount": Decimal(back), "return_reason": "AC04", **BACK})
    assert told.used["amount"].to_list() == [Decimal(amount) for amount in left]
    assert told.ties.select("sender", "receiver").rows() == [("a", "b")]
    lacking = reading({"currency": ""})
    rows.append({f"original_{name}": "RENT", "amount": Decimal(back), "return_reason": "AC04", **BACK})
    assert tell(lacking, log(*rows).drop("currency")).used["amount"].to_list() == [Decimal(amount) for amount in left]


def test_many_returns_are_matched_in_slices(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(returns, "AT_ONCE", 2)
    paid = [{"end_to_end_id": "RENT", "amount": Decimal(amount)} for amount in range(1, 7)]
    back = [{"original_end_to_end_id": "RENT", "amount": Decimal(amount), **BACK} for amount in (2, 3, 5, 6, 1)]
    told = told_of(*paid, *back)
    assert told.used["amount"].to_list() == [4]
    assert left_out(told) == {IN_WINDOW: 5, IN_FULL: 5}


def test_the_same_number_in_another_currency_is_not_the_same_amount(tmp_path: Path) -> None:
    (tmp_path / "rates.csv").write_text("currency,date,rate\nUSD,2026-11-01,0.5\n")
    rent = {"end_to_end_id": "RENT", "amount": Decimal(6)}
    back = {"original_end_to_end_id": "RENT", "amount": Decimal(6), **BACK}
    told = told_of(rent, rent | {"currency": "USD"}, back, rate_table=str(tmp_path / "rates.csv"))
    assert told.used["amount"].to_list() == [3]


def test_a_return_by_tx_id_takes_back_a_payment_of_its_own_accounts_only() -> None:
    told = told_of(
        {"tx_id": "1", "creditor_account": "c"}, {"tx_id": "1"}, {"original_tx_id": "1", **BACK}, {"tx_id": "2"}
    )
    assert told.ties.select("sender", "receiver", "contacts").rows() == [("a", "b", 1), ("a", "c", 1)]
    assert left_out(told) == {IN_WINDOW: 1, IN_FULL: 1}
    told = told_of({"tx_id": "1", "creditor_account": "c"}, {"original_tx_id": "1", **BACK})
    assert left_out(told) == {OUTSIDE: 1}


def test_a_rate_that_moved_leaves_nothing_over(tmp_path: Path) -> None:
    (tmp_path / "rates.csv").write_text(
        "currency,date,rate\nUSD,2026-11-01,0.9\nUSD,2026-11-02,0.95\nUSD,2026-11-03,0.8\n"
    )
    rules = {"rate_table": str(tmp_path / "rates.csv")}
    paid = {"uetr": "u", "currency": "USD"}
    back = {"original_uetr": "u", "currency": "USD"}
    assert left_out(told_of(paid, back, **rules)) == {IN_WINDOW: 1, IN_FULL: 1}
    told = told_of(paid, back | {"amount": Decimal("3.33")}, **rules)
    assert told.used["amount"].to_list() == [Decimal("6.00")]  # 6.67 USD at the payment's own 0.9, half-even
    told = told_of(paid, back | {"amount": Decimal("3.33"), "currency": "EUR"}, **rules)
    assert told.used["amount"].to_list() == [Decimal("5.67")]
    yen = rules | {"reporting_currency": "JPY"}  # 0.9 JPY a dollar: 10 dollars are 9 yen, 6.67 dollars 6 yen
    assert told_of(paid, back | {"amount": Decimal("3.33")}, **yen).used["amount"].to_list() == [6]


# Owners, hubs, sides ---------------------------------------------------------------------------------------------


def test_payments_between_accounts_of_one_owner_are_left_out_while_they_are_that(tmp_path: Path) -> None:
    file = tmp_path / "owners.csv"
    file.write_text("account,owner,from,to\na,Ann,,\nb,Ann,,2026-11-02\nb,Bob,2026-11-03,\n")
    told = told_of({}, {}, {}, {"creditor_account": "c"}, owner_table=str(file))
    assert left_out(told) == {"own account": 2}
    told = told_of({}, {}, {}, {"creditor_account": "c"}, owner_table=str(file), merge_owners=True)
    assert left_out(told) == {"own account": 2}
    assert told.ties.select("sender", "receiver").rows() == [("Ann", "Bob"), ("Ann", "c")]
    assert told.parties.select("party", "kind").cast(pl.String).rows() == [
        ("Ann", "party"),
        ("Bob", "party"),
        ("c", "account"),
    ]


def test_owners_on_one_day_are_one(tmp_path: Path) -> None:
    (tmp_path / "owners.csv").write_text("account,owner,from,to\na,Ann,,2026-11-02\na,Bob,2026-11-02,\n")
    with pytest.raises(SettingsError, match="two owners"):
        reading(owner_table=str(tmp_path / "owners.csv"))


def test_hubs_are_left_out_by_label_or_labelled(tmp_path: Path) -> None:
    (tmp_path / "hubs.csv").write_text("account,label\nGB29 NWBK 6016 1331 9268 19,payroll\nT-1,tax\n")
    rows = [{"debtor_account": "gb29nwbk60161331926819"}, {"creditor_account": "T-1"}, {}]
    table = {"hub_table": str(tmp_path / "hubs.csv")}
    told = told_of(*rows, **table)
    assert told.counts == {"used": {"used": 1}, "filtered": {"hub: payroll": 1, "hub: tax": 1}}
    told = told_of(*rows, **table, hubs="label")
    assert told.counts == {"used": {"used": 3}}
    found = {party: (kind, label) for party, kind, _, label in told.parties.cast({"party": pl.String}).iter_rows()}
    assert found["T-1"] == ("hub", "tax")
    assert found["GB29NWBK60161331926819"] == ("hub", "payroll")
    assert found["a"] == ("account", None)


def test_sides_follow_bank_codes_and_a_table(tmp_path: Path) -> None:
    (tmp_path / "own.csv").write_text("account\nL-1\n")
    raw = pl.Series(["GB29NWBK60161331926819", "NO9386011117947", "L-1", "GBNWBK"])
    assert reading().keys(raw)["side"].to_list() == ["unknown"] * 4
    found = reading(bank_codes=["GBNWBK"], institution_table=str(tmp_path / "own.csv")).keys(raw)
    assert found["side"].to_list() == ["internal", "external", "internal", "external"]


def test_a_table_with_a_wrong_account_is_refused(tmp_path: Path) -> None:
    (tmp_path / "hubs.csv").write_text("account,label\nx,tax\nGB29NWBK60161331926818,tax\n")
    with pytest.raises(SettingsError, match=r"row 2 .* is an IBAN with a wrong check digit"):
        reading(hub_table=str(tmp_path / "hubs.csv"))


# Settings --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("columns", "fault"),
    [
        ({"debtor_account": "x", **STATEMENT}, "two layouts"),
        ({"own_account": "x"}, "needs own_account, counterparty_account, direction"),
        ({"debtor_account": ""}, "needs debtor_account, creditor_account"),
        ({"debtor_account": "x", "creditor_account": "x"}, "both"),
    ],
)
def test_the_columns_are_of_one_layout(columns: dict[str, str], fault: str) -> None:
    with pytest.raises(ValidationError, match=fault):
        PaymentsColumns(**columns)


def test_the_fingerprint_follows_rules_and_the_content_of_tables(tmp_path: Path) -> None:
    file = tmp_path / "hubs.csv"
    file.write_text("account,label\nx,tax\n")
    prints = [reading().fingerprint, reading(accounts="iban").fingerprint, reading(hub_table=str(file)).fingerprint]
    file.write_text("account,label\ny,tax\n")
    prints.append(reading(hub_table=str(file)).fingerprint)
    assert len(set(prints)) == 4
    assert reading().fingerprint == prints[0]


# Any log, and the invented one -----------------------------------------------------------------------------------

CELLS: dict[str, st.SearchStrategy[Any]] = {
    **{name: st.none() | st.sampled_from(["u", "NOTPROVIDED", ""]) | st.text(max_size=3) for name in TYPES},
    "time": st.none() | st.datetimes(datetime(2026, 11, 1), datetime(2026, 11, 9)),
    "amount": st.none() | st.decimals(-10, 10**12, places=2),
    "currency": st.none() | st.sampled_from(["EUR", "USD", "", "?"]),
    "status": st.none() | st.sampled_from(["BOOK", "PDNG"]),
    "reversal": st.none() | st.booleans(),
}
EMPTY = st.sets(st.sampled_from(sorted(set(TYPES) - {"debtor_account", "creditor_account", "time"})))


@settings(max_examples=60, deadline=None)
@given(st.lists(st.fixed_dictionaries(CELLS), max_size=12), EMPTY, st.booleans())
def test_nothing_that_a_log_may_hold_raises(rows: list[dict[str, Any]], empty: set[str], floats: bool) -> None:
    types = {**dict.fromkeys(empty, pl.Null()), **({"amount": pl.Float64()} if floats else {})}
    told = [row | dict.fromkeys(empty) for row in rows]
    if floats and "amount" not in empty:
        told = [row | {"amount": None if row["amount"] is None else float(row["amount"])} for row in told]
    frame = pl.DataFrame(
        told, schema={**TYPES, "amount": pl.Decimal(38, 5), **types, **dict.fromkeys(empty, pl.Null())}
    )
    counts = tell(reading(), frame[: len(rows) // 2], frame[len(rows) // 2 :]).counts
    assert sum(number for reasons in counts.values() for number in reasons.values()) == len(rows)


MAY_LACK = sorted(set(TYPES) - {"debtor_account", "creditor_account", "time", "amount"})


@settings(max_examples=40, deadline=None)
@given(st.sets(st.sampled_from(MAY_LACK)))
def test_a_log_may_lack_any_of_the_other_columns(lacking: set[str]) -> None:
    paid = {"uetr": "u", "tx_id": "t", "end_to_end_id": "e"}
    originals = {f"original_{name}": value for name, value in paid.items()}
    same = {"time": datetime(2026, 11, 5, tzinfo=UTC), "amount": Decimal(7)}
    rows = log(paid | same, paid | same, {}, paid | {"reversal": True, "amount": Decimal(2)}, originals | BACK)
    read = reading(dict.fromkeys(lacking, ""))
    counts = tell(read, rows.drop(lacking)).counts
    assert sum(number for reasons in counts.values() for number in reasons.values()) == 5
    ids = set(paid) - lacking
    # what nothing marks as a reversal is its payment once more, as far as its ids tell
    again = bool(ids) + ("reversal" in lacking and not ids <= {"end_to_end_id"})
    assert counts.get("duplicate", {}).get(AGAIN, 0) == again
    told = sum(not lacking >= marks for marks in ({"reversal"}, set(originals)))
    filtered = counts.get("filtered", {})
    assert filtered.pop(IN_FULL, 0) <= 1
    assert sum(filtered.values()) == told


@pytest.mark.parametrize("whole", [True, False])
def test_the_invented_log_is_counted_as_it_was_planted(tmp_path: Path, whole: bool) -> None:
    truth = make_log(tmp_path / "payments", date(2026, 11, 30), days=8, people=1_500, seed=5)
    told = tomllib.loads(CONFIG)["log"]
    told["rules"] |= {key: str(tmp_path / told["rules"][key]) for key in told["rules"] if key.endswith("_table")}
    settings_ = PaymentsLog.model_validate(told)
    ours = {theirs: name for name, theirs in settings_.columns if theirs}
    parts = [
        pl.read_parquet(file, hive_partitioning=False).rename(ours) for file in sorted(tmp_path.glob("payments/*/*"))
    ]
    found = tell(PaymentsReading.open(settings_), *([pl.concat(parts)] if whole else parts))
    assert found.counts == truth.counts
    assert sum(map(len, parts)) == truth.rows
    assert found.used["amount"].sum() == truth.amount
    used = set(found.ties["sender"]) | set(found.ties["receiver"])
    sides = found.parties.filter(pl.col("party").cast(pl.String).is_in(list(used)))["side"].value_counts()
    assert dict(sides.iter_rows()) == truth.sides
    assert set(truth.brokers) <= used
    assert not set(truth.hubs) & used
