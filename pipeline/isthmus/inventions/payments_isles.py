"""Who pays whom on the Ombriel Isles: accounts, towns, travelling trades, owners, rates, and a day's sound payments."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta
from decimal import ROUND_HALF_EVEN, Decimal

import numpy as np
import polars as pl
from numpy.typing import NDArray

__all__ = ["DAY", "HUBS", "PLACES", "Ints", "Isles", "payments", "with_sides"]

TOWNS, BROKERS = 12, 6
HUBS = ("payroll", "payroll", "tax", "processor", "processor")
EXTERNAL = 0.15  # share of a town's members with an account elsewhere
DAY = 86_400_000_000  # microseconds
PLACES = {"XCD": 2, "EUR": 2, "JPY": 0, "KWD": 3, "NZD": 2}  # ISO 4217; nobody gives a rate for NZD
RATES = {"EUR": Decimal("2.9133"), "JPY": Decimal("0.017945"), "KWD": Decimal("8.78325")}

Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Isles:
    """What lasts. Accounts are numbered: members town by town, second accounts, hubs, brokers.

    `owned`: members with a second account (`second`, as many); the last third of these changed hands before the log.
    `ties`: payer and payee of the brokers' payments.
    """

    keys: pl.Series
    start: Ints
    size: Ints
    internal: NDArray[np.bool_]
    owned: Ints
    second: Ints
    hub: Ints
    brokers: Ints
    ties: tuple[Ints, Ints]
    rates: pl.DataFrame
    owners: pl.DataFrame
    hubs: pl.DataFrame

    @classmethod
    def draw(cls, people: int, seed: int, first_day: date) -> Isles:
        rng = np.random.default_rng([seed, 0])
        share = np.linspace(1, 2.5, TOWNS)
        ends = np.rint(np.cumsum(share) / share.sum() * people).astype(np.int64)
        start, size = np.concatenate([[0], ends[:-1]]), np.diff(ends, prepend=0)
        owned = np.flatnonzero(np.arange(people) % 20 == 0)
        second = people + np.arange(len(owned))
        hub = second[-1] + 1 + np.arange(len(HUBS))
        brokers = hub[-1] + 1 + np.arange(BROKERS)
        internal = np.ones(brokers[-1] + 1, np.bool_)
        internal[:people] = rng.random(people) >= EXTERNAL
        internal[owned] = True
        internal[hub[2]] = False  # the treasury
        keys = _keys(internal)
        keys = keys.scatter(hub[2:3], ["TREASURY-01"])
        payer, payee = [], []
        for at, broker in enumerate(brokers):
            for step in (0, 1, 2, 7):  # every town has two brokers, and no two brokers share three towns
                town = (2 * at + step) % TOWNS
                quiet = start[town] + size[town] // 2 + rng.permutation(size[town] // 2)[:3]
                payer += [broker, broker, quiet[1], quiet[2]]
                payee += [quiet[0], quiet[1], broker, broker]
        former = np.arange(len(owned)) >= len(owned) * 2 // 3
        names = [f"Household {at:06d}" for at in owned]
        gone = str(first_day - timedelta(days=1))
        owners = pl.DataFrame(
            {
                "account": pl.concat([keys[owned.tolist()], keys[second.tolist()]]),
                "owner": names * 2,
                "from": pl.Series([None] * (2 * len(owned)), dtype=pl.String),
                "to": [None] * len(owned) + [gone if one else None for one in former],
            }
        )
        days = [first_day - timedelta(days=2) + timedelta(days=5 * turn) for turn in range(800)]
        rates = [
            (currency, day, rate + turn % 7 * rate.scaleb(-3))
            for currency, rate in RATES.items()
            for turn, day in enumerate(days)
        ]
        return cls(
            keys=keys,
            start=start,
            size=size,
            internal=internal,
            owned=owned,
            second=second,
            hub=hub,
            brokers=brokers,
            ties=(np.array(payer), np.array(payee)),
            rates=pl.DataFrame(rates, schema=["currency", "date", "rate"], orient="row").cast({"rate": pl.String}),
            owners=owners,
            hubs=pl.DataFrame({"account": keys[hub.tolist()], "label": HUBS}),
        )

    def worth(self, rows: pl.DataFrame) -> Decimal:
        """Sum in XCD, each payment rounded half-even, at the last rate on or before its day."""
        at_home = rows["currency"] == "XCD"
        total = Decimal(int(rows.filter(at_home)["minor"].sum())) / 100
        table: dict[tuple[str, date], Decimal] = {}
        for currency, day, minor in rows.filter(~at_home).select("currency", "day", "minor").iter_rows():
            if (currency, day) not in table:
                known = self.rates.filter((pl.col("currency") == currency) & (pl.col("date") <= day))
                table[currency, day] = Decimal(known["rate"][-1])
            exact = Decimal(minor).scaleb(-PLACES[currency]) * table[currency, day]
            total += exact.quantize(Decimal("0.01"), ROUND_HALF_EVEN)
        return total


def _keys(internal: NDArray[np.bool_]) -> pl.Series:
    """IBANs: of the isles' own bank, or of another."""
    from stdnum.iban import calc_check_digits

    keys = []
    for at, own in enumerate(internal):
        number = (at * 48_271 + 10_007) % 99_999_989  # prime, so distinct; scattered, so the order tells nothing
        country, rest = ("VG", f"OMBR{number:016d}") if own else ("LC", f"SALT{number:024d}")
        keys.append(f"{country}{calc_check_digits(f'{country}00{rest}')}{rest}")
    return pl.Series("key", keys)


def payments(isles: Isles, day: date, rng: np.random.Generator, count: int) -> pl.DataFrame:
    """Sound payments: first those of the brokers that are due, each once in seven days, then those inside towns."""
    town = rng.choice(TOWNS, count, p=isles.size / isles.size.sum())
    # the later half of each town pays and is paid less often; hence quiet
    payer, payee = (isles.start[town] + (isles.size[town] * rng.random(count) ** 2).astype(np.int64) for _ in range(2))
    same = payer == payee
    payee[same] = isles.start[town[same]] + (payee[same] + 1 - isles.start[town[same]]) % isles.size[town[same]]
    due = np.flatnonzero(np.arange(len(isles.ties[0])) % 7 == day.toordinal() % 7)
    payer[: len(due)], payee[: len(due)] = isles.ties[0][due], isles.ties[1][due]
    currency = rng.choice(["XCD", "EUR", "JPY", "KWD"], count, p=[0.94, 0.03, 0.02, 0.01])
    places = np.array([PLACES[name] for name in ("XCD", "EUR", "JPY", "KWD")])
    names = np.array(["XCD", "EUR", "JPY", "KWD"])
    minor = np.rint(np.exp(rng.normal(3.6, 1.1, count)) * 10.0 ** places[np.argmax(currency[:, None] == names, 1)])
    known = rng.random((3, count)) < np.array([[0.6], [0.6], [0.5]])
    number = (day - date(1970, 1, 1)).days
    seq = pl.Series("seq", np.arange(count))
    digits = seq.cast(pl.String).str.zfill(12)
    frame = pl.DataFrame(
        {
            "seq": seq,
            "day": pl.Series([day]).new_from_index(0, count),
            "payer": payer,
            "payee": payee,
            "sender": isles.keys.gather(payer),
            "receiver": isles.keys.gather(payee),
            "time": number * DAY + rng.integers(6 * DAY // 24, 22 * DAY // 24, count),
            "minor": np.maximum(minor, 2).astype(np.int64),
            "currency": pl.Series(currency, dtype=pl.String),
            "status": pl.Series(["BOOK"]).new_from_index(0, count),
            "digits": digits,
            "broken": pl.Series([0]).new_from_index(0, count),  # hundred-thousandths beyond the minor unit
            "reversal": pl.Series([False]).new_from_index(0, count),
        }
    ).with_columns(
        uetr=pl.when(pl.Series(known[0])).then(pl.format(f"{day:%Y%m%d}-0000-4000-8000-{{}}", "digits")),
        tx_id=pl.when(pl.Series(known[1])).then(pl.format(f"T{day:%Y%m%d}{{}}", "digits")),
        end_to_end_id=pl.when(pl.Series(known[2])).then(pl.format(f"E{day:%Y%m%d}{{}}", "digits")),
        **{f"original_{name}": pl.lit(None, pl.String) for name in ("uetr", "tx_id", "end_to_end_id")},
        reason=pl.lit(None, pl.String),
    )
    return frame.drop("digits")


def with_sides(isles: Isles, rows: pl.DataFrame, payer: Ints, payee: Ints) -> pl.DataFrame:
    return rows.with_columns(
        payer=pl.Series(payer),
        payee=pl.Series(payee),
        sender=isles.keys.gather(payer),
        receiver=isles.keys.gather(payee),
    )
