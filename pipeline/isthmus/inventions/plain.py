"""An invented log of kind "plain", of payments: seeded, of any size, with the truth about itself.

The Ombriel Isles and their mutual bank do not exist. Twelve towns trade among themselves, and almost nothing passes
from one town to another except through half a dozen travelling trades: parties of a dozen counterparts each, busy
with nothing, whom every route between towns must cross. The busiest accounts, shops that only take money in and wage
offices that only pay it out, carry no one else's money at all.

Everything that lasts (who exists, who pays whom, how much as a rule) is drawn once from the seed; a day is drawn from
(seed, day) alone. So one day is in memory at a time, and a log of any length is written as a stream.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

from isthmus.errors import StoreError
from isthmus.store import story

__all__ = ["CONFIG", "Truth", "make_log"]

CONFIG = """\
# Settings of the invented log. Every key that is not here has its default: `isthmus check` tells them.
series = "ombriel"

[log]
path = "plain"

[log.columns]
sender = "payer_account"
receiver = "payee_account"
time = "booked_at"
amount = "amount"
id = "payment_id"

[window]
days = 28

[run]
warehouse = "warehouse"
work = "work"
"""

TOWNS = ("VES", "HAL", "OND", "QUI", "TAR", "BRI", "ESS", "LUN", "DUN", "KEL", "MOR", "FEN")
BROKERS = ("Organ tuner", "Knife grinder", "Net menders' box", "Lamp oil round", "Bee swarm fair", "Bell rope maker")
SHOPS = ("Ropewalk Stores", "Saltpan Grocers", "Tidewater Fuel", "Kelp & Coal", "Quay Bakery", "Slipway Chandlers")
WAGES = ("Smokehouse Wages", "Boatyard Wages", "Lightkeepers' Wages")

TIES_PER_PARTY = 3.8
HABIT = 2.5  # a payment picks the tie at share u**HABIT of the book: the first are paid daily, the last about once
POPULAR = 2.0  # the same for members of a town: early ones have many counterparts, late ones one or two
HOURS = np.array([1, 1, 1, 1, 1, 2, 5, 12, 20, 26, 28, 27, 30, 26, 24, 24, 26, 28, 22, 15, 10, 7, 4, 2])
WEEKDAYS = np.array([1.05, 1.0, 1.0, 1.05, 1.3, 0.7, 0.45])  # Monday first

# Shares of a day's rows; all dirt together stays below one row in a hundred.
SPOILT = {
    "null_payer": 0.0002,
    "null_payee": 0.0002,
    "empty_payer": 0.0002,
    "empty_payee": 0.0002,
    "null_time": 0.0004,
    "odd_time": 0.0006,
    "negative_amount": 0.0006,
    "nan_amount": 0.0004,
    "self_payment": 0.0012,
}
AGAIN = 0.0012  # delivered a second time in the same file
LATE = 0.0010  # delivered a second time in the next day's file
STRAY = 0.0010  # delivered in the next day's file only
BLOCKS = ("main", "late", "stray")
MICROS_PER_DAY = 86_400_000_000
ODD_DAYS = np.array([date(102, 11, 5), date(9999, 12, 31)], "datetime64[D]").astype(np.int64)

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Truth:
    """What the log holds, counted while it was written. A row has one kind of dirt at most.

    `repeated` counts second deliveries only; `stray` rows are sound, but lie in the next day's file. `ties` are
    distinct ordered pairs among the `used` rows. `brokers` join the towns; `hubs` are the busiest and join nothing.
    """

    rows: int
    null_payer: int
    null_payee: int
    empty_payer: int
    empty_payee: int
    null_time: int
    odd_time: int
    negative_amount: int
    nan_amount: int
    self_payment: int
    repeated: int
    stray: int
    ties: int
    brokers: tuple[str, ...]
    hubs: tuple[str, ...]

    @property
    def refused(self) -> int:
        """Rows with a key, time or amount that cannot be."""
        return sum(self._refused.values())

    @property
    def used(self) -> int:
        """Sound rows between two parties, each counted once."""
        return self.rows - self.refused - self.self_payment - self.repeated

    @property
    def counts(self) -> dict[str, dict[str, int]]:
        """outcome -> reason -> rows, as CONFIG reads them."""
        found = {
            "used": {"used": self.used},
            "refused": self._refused,
            "filtered": {"self-contact": self.self_payment},
            "duplicate": {"duplicate": self.repeated},
        }
        return {outcome: reasons for outcome, reasons in found.items() if any(reasons.values())}

    @property
    def _refused(self) -> dict[str, int]:
        return {
            "amount is negative": self.negative_amount,
            "amount is not finite": self.nan_amount,
            "receiver is empty": self.empty_payee,
            "receiver is null": self.null_payee,
            "sender is empty": self.empty_payer,
            "sender is null": self.null_payer,
            "time is outside 1970..2199": self.odd_time,
            "time is null": self.null_time,
        }


def make_log(
    folder: Path,
    last_day: date,
    days: int = 28,
    people: int = 20_000,
    seed: int = 1,
    *,
    rows: int = 300_000,
    dirt: bool = True,
    progress: Callable[[float], None] = lambda share: None,
) -> Truth:
    """Write `rows` payments as `folder/dt=YYYY-MM-DD/part-0.parquet`, replacing what a former call wrote.

    Columns: payment_id (int64), payer_account, payee_account (string), booked_at (timestamp[us, UTC]), amount
    (float64). Each broker is paid and pays once in seven days, so `days` >= 7 shows them whole. `progress` hears the
    share done, 0..1.

    Raises ValueError (fewer than 100 rows a day, 50 people a town or 1 day), StoreError (the folder cannot be
    written, or holds days outside of these, which would be read along).
    """
    if days < 1 or rows < 100 * days or people < 50 * len(TOWNS):
        raise ValueError(
            f"rows={rows}, people={people}, days={days}: give at least 1 day, 100 rows a day and "
            f"{50 * len(TOWNS)} people"
        )
    wanted = [last_day - timedelta(days=back) for back in range(days - 1, -1, -1)]
    if others := {found.name for found in folder.glob("dt=*")} - {f"dt={day}" for day in wanted}:
        raise StoreError(f"{folder} holds other days ({min(others)} .. {max(others)}); give an empty folder")
    book = _Book.draw(people, seed)
    seen = np.zeros(len(book.payer), np.bool_)
    counts = dict.fromkeys((*SPOILT, "repeated", "stray"), 0)
    with story("write the log"):
        for done, (day, frame) in enumerate(_frames(book, wanted, rows, seed, dirt, seen, counts), 1):
            home = folder / f"dt={day}"
            home.mkdir(parents=True, exist_ok=True)
            frame.write_parquet(home / "part-0.parquet")
            progress(done / days)
    return Truth(rows=rows, ties=int(seen.sum()), brokers=BROKERS, hubs=SHOPS + WAGES, **counts)


@dataclass(frozen=True)
class _Book:
    """What lasts: the parties' keys, and the standing ties among them, most used first, the brokers' at the end.

    `payer`, `payee`, `usual` (amount) have one entry per tie; ties from `ordinary` on are the brokers'.
    """

    keys: pl.Series
    payer: Ints
    payee: Ints
    usual: Floats
    ordinary: int

    @classmethod
    def draw(cls, parties: int, seed: int) -> _Book:
        rng = np.random.default_rng([seed, 0])
        hubs = len(SHOPS) + len(WAGES)
        members = parties - hubs - len(BROKERS)
        share = np.linspace(1, 2.5, len(TOWNS))
        ends = np.rint(np.cumsum(share) / share.sum() * members).astype(np.int64)
        start, size = np.concatenate([[0], ends[:-1]]), np.diff(ends, prepend=0)
        town = np.repeat(np.arange(len(TOWNS)), size)

        # Everyday ties inside a town: both ends skewed, one in four also paid back.
        count = round(TIES_PER_PARTY * members)
        of = town[rng.integers(0, members, count)]
        ends_of = [start[of] + (size[of] * rng.random(count) ** POPULAR).astype(np.int64) for _ in range(2)]
        back = rng.random(count) < 0.25
        payer, payee = [ends_of[0], ends_of[1][back]], [ends_of[1], ends_of[0][back]]
        # Hubs, each in the larger towns' own: a third of the town's members, one way only.
        for hub in range(hubs):
            home = len(TOWNS) - 1 - hub
            guests = start[home] + rng.permutation(size[home])[: size[home] // 3]
            account = np.full(len(guests), members + hub)
            payer.append(guests if hub < len(SHOPS) else account)
            payee.append(account if hub < len(SHOPS) else guests)
        pair = np.unique(np.concatenate(payer) * parties + np.concatenate(payee))
        pair = rng.permutation(pair[pair // parties != pair % parties])

        # Brokers: four towns each, in each town three quiet members: one paid, one paying, one both.
        paid, paying = [], []
        for broker in range(len(BROKERS)):
            own = members + hubs + broker
            for step in (0, 1, 2, 7):  # every town has two brokers, and no two brokers share three towns
                home = (2 * broker + step) % len(TOWNS)
                quiet = start[home] + size[home] // 2 + rng.permutation(size[home] // 2)[:3]
                paid += [(own, quiet[0]), (own, quiet[1])]
                paying += [(quiet[1], own), (quiet[2], own)]
        brokered = np.array(paid + paying)
        ties = len(pair) + len(brokered)
        return cls(
            keys=_keys(town, start),
            payer=np.concatenate([pair // parties, brokered[:, 0]]),
            payee=np.concatenate([pair % parties, brokered[:, 1]]),
            usual=np.exp(rng.normal(3.6, 1.1, ties)),
            ordinary=len(pair),
        )


def _keys(town: Ints, start: Ints) -> pl.Series:
    """Account numbers of the members, town by town, then the names of hubs and brokers."""
    local = np.arange(len(town)) - start[town]
    number = (local * 48_271 + 10_007 * town) % 99_999_989  # prime, so distinct; scattered, so the order tells nothing
    members = pl.DataFrame({"town": pl.Series(np.array(TOWNS)[town]), "number": number}).select(
        key=pl.format("{}-{}", "town", pl.col("number").cast(pl.String).str.zfill(8))
    )
    return pl.concat([members["key"], pl.Series("key", [*SHOPS, *WAGES, *BROKERS])])


@dataclass
class _Rows:
    """Payments as columns, before they get keys. `tie` points into the book."""

    tie: Ints
    id: Ints
    time: Ints
    amount: Floats

    def __len__(self) -> int:
        return len(self.tie)

    def take(self, which: Ints) -> _Rows:
        return _Rows(self.tie[which], self.id[which], self.time[which], self.amount[which])

    @staticmethod
    def joined(parts: list[_Rows]) -> _Rows:
        return _Rows(*(np.concatenate([getattr(p, f) for p in parts]) for f in ("tie", "id", "time", "amount")))


def _draw(book: _Book, day: date, block: str, count: int, seed: int) -> _Rows:
    """Payments of one day in order of time, each block of a day drawn apart."""
    number = (day - date(1970, 1, 1)).days
    part = BLOCKS.index(block)
    rng = np.random.default_rng([seed, day.toordinal(), part])
    tie = (book.ordinary * rng.random(count) ** HABIT).astype(np.int64)
    if block == "main":  # the brokers' ties, each once in seven days
        brokered = np.arange(book.ordinary, len(book.payer))
        due = brokered[brokered % 7 == number % 7]
        tie[rng.permutation(count)[: len(due)]] = due[:count]
    hour = np.repeat(np.arange(24), rng.multinomial(count, HOURS / HOURS.sum()))
    time = np.sort(hour * 3_600_000_000 + rng.integers(0, 3_600_000_000, count))
    wobble = np.where(rng.random(count) < 0.4, 1.0, np.exp(rng.normal(0, 0.3, count)))  # some sums never change
    amount = np.maximum(np.round(book.usual[tie] * wobble, 2), 0.01)
    first = int(day.strftime("%Y%m%d")) * 10**10 + part * 10**9
    return _Rows(tie, first + np.arange(count), number * MICROS_PER_DAY + time, amount)


def _frames(
    book: _Book, days: list[date], rows: int, seed: int, dirt: bool, seen: NDArray[np.bool_], counts: dict[str, int]
) -> Iterator[tuple[date, pl.DataFrame]]:
    """Each day's file. Marks the ties `seen` in sound rows and adds the dirt to `counts`."""
    weight = WEEKDAYS[[day.weekday() for day in days]]
    quota = np.diff(np.rint(np.cumsum(weight) / weight.sum() * rows).astype(np.int64), prepend=0)
    late, stray = (np.rint(quota * share * dirt).astype(np.int64) for share in (LATE, STRAY))
    for at, day in enumerate(days):
        parts = [_draw(book, day, "late", int(late[at]), seed)]
        if at:  # what the day before left over
            for block, held, kind in (("late", late, "repeated"), ("stray", stray, "stray")):
                parts.append(_draw(book, days[at - 1], block, int(held[at - 1]), seed))
                counts[kind] += len(parts[-1])
        room = int(quota[at]) - sum(map(len, parts))
        sizes = {kind: round(room * share * dirt) for kind, share in (SPOILT | {"repeated": AGAIN}).items()}
        main = _draw(book, day, "main", room - sizes["repeated"], seed)
        spots = _pick(sizes, len(main), np.random.default_rng([seed, day.toordinal(), len(BLOCKS)]))
        for kind, chosen in spots.items():
            counts[kind] += len(chosen)
        repeated = main.take(spots.pop("repeated"))
        sound = np.ones(len(main), np.bool_)
        sound[np.concatenate(list(spots.values()))] = False
        for ties in (main.tie[sound], *(part.tie for part in parts)):
            seen[ties] = True
        yield day, _spoil(_Rows.joined([main, repeated, *parts]), spots, book)


def _pick(sizes: dict[str, int], length: int, rng: np.random.Generator) -> dict[str, Ints]:
    """Positions 0..length-1 for each kind, none twice."""
    ends = np.cumsum(list(sizes.values()))
    return dict(zip(sizes, np.split(rng.permutation(length)[: ends[-1]], ends[:-1]), strict=True))


def _spoil(rows: _Rows, where: dict[str, Ints], book: _Book) -> pl.DataFrame:
    """Give the rows their keys and the chosen positions their dirt."""
    payer, payee, time, amount = book.payer[rows.tie], book.payee[rows.tie], rows.time, rows.amount
    payee[where["self_payment"]] = payer[where["self_payment"]]
    odd = where["odd_time"]
    time[odd] = ODD_DAYS[np.arange(len(odd)) % 2] * MICROS_PER_DAY + time[odd] % MICROS_PER_DAY
    amount[where["negative_amount"]] *= -1
    amount[where["nan_amount"]] = np.nan
    keys = {"payer_account": book.keys.gather(payer), "payee_account": book.keys.gather(payee)}
    for word, value in (("null", None), ("empty", "")):
        for side in ("payer", "payee"):
            account = f"{side}_account"
            keys[account] = keys[account].scatter(np.sort(where[f"{word}_{side}"]), value)
    booked = pl.Series(time).scatter(np.sort(where["null_time"]), None)
    return pl.DataFrame(
        {"payment_id": rows.id, **keys, "booked_at": booked.cast(pl.Datetime("us", "UTC")), "amount": amount}
    )
