"""Amounts as payment logs write them -> exact amounts in one reporting currency.

Arithmetic is on whole minor units (128 bits). Minor units are those of ISO 4217, from the package iso4217, which
carries the maintenance agency's own table; CLDR's digits, which others use, are for display and differ (IQD, AFN).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from decimal import ROUND_HALF_EVEN, Decimal, InvalidOperation
from functools import cache

import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings.reading import AMOUNT
from isthmus.readings.tables import read_table

__all__ = ["FAULTS", "LARGEST", "Money"]

LARGEST = 10**18  # in whole units: ISO 20022 amounts have 18 digits
FAULTS = (
    "amount is null",
    "amount is not finite",
    "amount is negative",
    f"amount is above {LARGEST:.0e}",
    "currency is null",
    "currency is not an ISO 4217 code",
    "currency without a minor unit",
    "more decimals than the currency has",
    "currency without a rate",
    f"amount is above {LARGEST:.0e} once converted",
)
NULL, NOT_FINITE, NEGATIVE, LARGE, NO_CURRENCY, UNKNOWN, NO_UNIT, DECIMALS, NO_RATE, LARGE_CONVERTED = range(
    len(FAULTS)
)

_WHOLE = pl.Int128()
_NOISE = 1e-6  # minor units by which a sum of floats may be off, beside 4 units in the last place
_RATE_PLACES = 15  # 10^18 x 10^4 minor units x 10^15 fits into 128 bits
_LARGEST_RATE = Decimal(10) ** 12
_RATES = {"currency": pl.String(), "day": pl.Int32(), "rate": _WHOLE}


@cache
def minor_units() -> dict[str, int | None]:
    """ISO 4217 code -> digits after the point; None: it has no minor unit (metals, test codes)."""
    from iso4217 import Currency

    return {currency.code: currency.exponent for currency in Currency}


@dataclass(frozen=True, eq=False)
class Money:
    """`rates`: currency (String), day (Int32 since 1970), rate (Int128: times 10^15), sorted by day.

    days: how old a rate may be. minor: whether the log's amounts count minor units.
    """

    reporting: str
    minor: bool = False
    days: int = 0
    rates: pl.DataFrame = field(default_factory=lambda: pl.DataFrame(schema=_RATES))

    @classmethod
    def open(cls, reporting: str, unit: str, rate_table: str, days: int) -> Money:
        """Raises SettingsError, StoreError."""
        if minor_units().get(reporting) is None:
            raise SettingsError(
                f"log.rules.reporting_currency = {reporting!r} is no ISO 4217 currency with a minor unit; "
                "give one, such as EUR"
            )
        return cls(reporting, unit == "minor", days, _read_rates(rate_table))

    @property
    def places(self) -> int:
        """Digits after the point of the reporting currency."""
        return minor_units()[self.reporting] or 0

    def worth(self, amount: pl.Series, currency: pl.Series | None, day: pl.Series) -> pl.DataFrame:
        """`amount` (any number; of a currency's major unit, or of its minor unit), `currency` (String; None: all in the
        reporting currency), `day` (Int32).

        Returned: `amount` (AMOUNT, reporting currency, rounded half-even to its minor unit), `paid` (AMOUNT, in the
        currency itself), `currency` (UInt16, place in the table of ISO 4217) and `fault` (UInt8, place in FAULTS). A
        fault makes the amounts null.
        """
        codes = list(minor_units())
        told = pl.DataFrame({"value": amount, "day": day})
        if currency is None:
            home = pl.lit(codes.index(self.reporting), pl.UInt16)
            told = told.with_columns(code=home, told=pl.lit(True), places=pl.lit(self.places, pl.Int8))
        else:
            told = told.hstack(_coded(currency, codes))
        minor, faults = self._whole(told)
        told = told.with_columns(minor=minor, fault=_first(faults)).with_columns(own="minor")
        foreign = told["fault"].is_null() & (told["code"] != codes.index(self.reporting))
        foreign = foreign.fill_null(False).arg_true()
        if len(foreign):
            converted = self._converted(told[foreign].select("minor", "code", "places", "day"), codes)
            told = told.with_columns(
                own=told["own"].scatter(foreign, converted["minor"]),
                fault=told["fault"].scatter(foreign, converted["fault"]),
            )
        good = pl.col("fault").is_null()
        return told.select(
            amount=pl.when(good).then(_decimal("own", pl.lit(self.places))),
            paid=pl.when(good).then(_decimal("minor", pl.col("places"))),
            currency="code",
            fault="fault",
        )

    def _whole(self, told: pl.DataFrame) -> tuple[pl.Expr, list[tuple[pl.Expr, int]]]:
        """The amount in minor units (Int128), and what can be wrong with it."""
        value, places = pl.col("value"), pl.col("places")
        type_ = told.schema["value"]
        if not type_.is_numeric():
            value, type_ = pl.lit(None, pl.Float64), pl.Float64()
        rough = value.cast(pl.Float64)
        limit = LARGEST * 10.0**places if self.minor else float(LARGEST)
        # a share of a minor unit is a mistake, unless it is a float's noise
        excess: pl.Expr = pl.lit(False)
        if type_.is_float():
            sound = pl.when(rough.is_finite() & (rough.abs() <= limit)).then(rough)
            base = sound.floor()  # apart, so that it is exact beyond 2^53, too
            power = pl.lit(0) if self.minor else places
            rest = (sound - base) * 10.0**power
            whole = base.cast(_WHOLE) * _power(power) + rest.round().cast(_WHOLE)
            ulps = 4 * sound.abs() * 10.0**power * (2.0**-23 if type_ == pl.Float32() else 2.0**-52)
            excess = (rest - rest.round()).abs() > _NOISE + ulps
        else:
            scale = type_.scale if isinstance(type_, pl.Decimal) else 0
            stated = value.to_physical().cast(_WHOLE) if scale else value.cast(_WHOLE, strict=False)
            stated = pl.when(rough.abs() <= limit).then(stated)
            shift = -scale if self.minor else places - scale
            whole = stated * _power(shift) // _power(-shift)
            excess = (stated % _power(-shift)) != 0 if scale else excess
        return whole, [
            (rough.is_null(), NULL),
            (~rough.is_finite(), NOT_FINITE),
            (rough < 0, NEGATIVE),
            (pl.col("told").not_(), NO_CURRENCY),
            (pl.col("code").is_null(), UNKNOWN),
            (places.is_null(), NO_UNIT),
            (rough > limit, LARGE),
            (excess, DECIMALS),
        ]

    def _converted(self, rows: pl.DataFrame, codes: list[str]) -> pl.DataFrame:
        """`minor` of the reporting currency, and `fault`, of rows in other currencies."""
        asked = rows.select("code", "day").unique().drop_nulls().sort("day")
        asked = asked.with_columns(currency=pl.Series(codes).gather(asked["code"]))
        found = asked.join_asof(
            self.rates, on="day", by="currency", strategy="backward", tolerance=self.days, check_sortedness=False
        )
        rows = rows.join(found.select("code", "day", "rate"), on=["code", "day"], how="left", maintain_order="left")
        result = pl.col("minor").cast(pl.Float64) / 10.0 ** pl.col("places") * pl.col("rate").cast(pl.Float64) / 1e15
        large = result > LARGEST
        product = pl.when(~large).then(pl.col("minor") * pl.col("rate"))
        return rows.select(
            minor=_half_even(product, pl.col("places") + (_RATE_PLACES - self.places)),
            fault=_first([(pl.col("rate").is_null(), NO_RATE), (large, LARGE_CONVERTED)]),
        )


def _read_rates(path: str) -> pl.DataFrame:
    name = "log.rules.rate_table"
    table = read_table(path, name, {"currency": pl.String(), "date": pl.Date(), "rate": pl.String()})
    scaled = []
    for at, (currency, rate) in enumerate(table.select("currency", "rate").iter_rows(), 1):
        if currency not in minor_units():
            raise SettingsError(f"{name}: {path}, row {at} after the header: column 'currency' is not an ISO 4217 code")
        try:
            number = Decimal(rate)
        except InvalidOperation:
            number = Decimal("nan")
        if not number.is_finite() or not Decimal(1).scaleb(-_RATE_PLACES) <= number < _LARGEST_RATE:
            raise SettingsError(
                f"{name}: {path}, row {at} after the header: column 'rate' is not a number from 1e-15 to 1e12"
            )
        scaled.append(int(number.scaleb(_RATE_PLACES).to_integral_value(ROUND_HALF_EVEN)))
    if table.select("currency", "date").is_duplicated().any():
        raise SettingsError(f"{name}: {path} has two rates of one currency and date; keep one")
    return (
        table.select("currency", day=pl.col("date").dt.epoch("d").cast(pl.Int32))
        .with_columns(rate=pl.Series(scaled, dtype=_WHOLE))
        .sort("day")
    )


def _coded(currency: pl.Series, codes: list[str]) -> pl.DataFrame:
    """`code` (UInt16: place in `codes`; null: unknown), `told` (whether anything is written), `places` (Int8)."""
    written = currency.cast(pl.String)
    distinct = written.drop_nulls().unique()
    place = {code: at for at, code in enumerate(codes)}
    code = pl.Series([place.get(text.strip().upper()) for text in distinct], dtype=pl.UInt16)
    places = pl.Series([minor_units().get(text.strip().upper()) for text in distinct], dtype=pl.Int8)
    at = written.cast(pl.Enum(distinct)).to_physical().cast(pl.UInt32)
    told = pl.Series([bool(text.strip()) for text in distinct], dtype=pl.Boolean)
    return pl.DataFrame(
        {"code": code.gather(at), "told": told.gather(at).fill_null(False), "places": places.gather(at)}
    )


def _first(faults: list[tuple[pl.Expr, int]]) -> pl.Expr:
    return pl.coalesce(*(pl.when(when).then(pl.lit(at, pl.UInt8)) for when, at in faults))


def _power(places: int | pl.Expr) -> pl.Expr:
    """10 to the power of `places` (Int128), 1 where it is below 0."""
    if isinstance(places, int):
        return pl.lit(10 ** max(places, 0), _WHOLE)
    powers = pl.Series([10**place for place in range(39)], dtype=_WHOLE)
    return pl.lit(powers).gather(places.clip(0, 38).cast(pl.UInt32))


def _half_even(number: pl.Expr, places: pl.Expr) -> pl.Expr:
    """`number` (Int128, 0 or more) without its last `places` digits, rounded half to even."""
    unit = _power(places)
    quotient, rest = number // unit, number % unit
    up = (2 * rest > unit) | ((2 * rest == unit) & (quotient % 2 == 1))
    return quotient + up.cast(_WHOLE)


def _decimal(minor: str, places: pl.Expr) -> pl.Expr:
    whole = pl.col(minor).cast(AMOUNT)
    return (whole / _power(places.cast(pl.Int8)).cast(pl.Decimal(38, 0))).cast(AMOUNT)
