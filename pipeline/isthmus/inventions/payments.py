"""An invented log of payments with ISO 20022 names, as the mutual bank of the Ombriel Isles might keep it.

Neither the isles nor the banks exist: their bank codes OMBR and SALT are invented, set into IBANs of two island
countries so that they have a form to be right or wrong in. Twelve towns pay among themselves; what passes between towns
passes through half a dozen travelling trades, each with a dozen quiet counterparties. Wages, taxes and card payments go
through hubs that everybody knows and that carry nobody's money to anybody.

Who exists and what rates hold comes from the seed; a day from (seed, day) and, for returns and late deliveries, the day
before. Everything that is planted is counted while it is planted.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta
from decimal import Decimal
from pathlib import Path

import numpy as np
import polars as pl

from isthmus.inventions.payments_dirt import FILTERED, REFUSED, Told, again, between, spoil, taken_back, written
from isthmus.inventions.payments_isles import Isles, payments

__all__ = ["CONFIG", "Truth", "make_log"]

CONFIG = """\
# Settings of the invented log. Every key that is not here has its default: `isthmus check` tells them.
series = "ombriel-payments"

[log]
path = "payments"
kind = "payments"

[log.rules]
reporting_currency = "XCD"
rate_table = "rates.csv"
owner_table = "owners.csv"
hub_table = "hubs.csv"
bank_codes = ["VGOMBR"]

[run]
warehouse = "warehouse"
work = "work"
"""


@dataclass(frozen=True)
class Truth:
    """`counts`: outcome -> reason -> contacts, with default rules and the log's tables. `amount`: sum over the used
    payments in XCD. `sides`: parties of used payments. `kinds`: account -> kind, of those that have a part to play.
    `brokers` join the towns; `hubs`: account -> label."""

    rows: int
    counts: dict[str, dict[str, int]]
    amount: Decimal
    sides: dict[str, int]
    kinds: dict[str, str]
    brokers: tuple[str, ...]
    hubs: dict[str, str]


def make_log(folder: Path, last_day: date, days: int = 28, people: int = 10_000, seed: int = 1) -> Truth:
    """Write `folder/dt=YYYY-MM-DD/part-0.parquet` for each day, and rates.csv, owners.csv, hubs.csv beside `folder`.

    About people x days payments. Columns have the ISO 20022 names that are the defaults of kind "payments"; amounts are
    decimal(18, 5). Raises ValueError (fewer than 600 people or 1 day).
    """
    if people < 600 or days < 1:
        raise ValueError(f"people={people}, days={days}: give at least 600 people and 1 day")
    wanted = [last_day - timedelta(days=back) for back in range(days - 1, -1, -1)]
    isles = Isles.draw(people, seed, wanted[0])
    folder.mkdir(parents=True, exist_ok=True)
    for name in ("rates", "owners", "hubs"):
        getattr(isles, name).write_csv(folder.parent / f"{name}.csv")
    told = Told(np.zeros(len(isles.keys), np.int64))
    yesterday: pl.DataFrame | None = None
    for day in wanted:
        rows, yesterday = _day(isles, day, seed, yesterday, told)
        home = folder / f"dt={day}"
        home.mkdir(parents=True, exist_ok=True)
        rows.write_parquet(home / "part-0.parquet")
    used = told.uses > 0
    own = isles.internal
    brokers = tuple(isles.keys[isles.brokers.tolist()])
    hubs: dict[str, str] = dict(isles.hubs.iter_rows())
    return Truth(
        rows=told.rows,
        counts={
            **told.outcomes(),
            "used": {"used": told.rows - sum(told.counts.values())},
        },
        amount=told.amount,
        sides={"internal": int((used & own).sum()), "external": int((used & ~own).sum())},
        kinds=dict.fromkeys(hubs, "hub") | dict.fromkeys(brokers, "account"),
        brokers=brokers,
        hubs=hubs,
    )


def _day(
    isles: Isles, day: date, seed: int, yesterday: pl.DataFrame | None, told: Told
) -> tuple[pl.DataFrame, pl.DataFrame]:
    """The day's file, and those of its payments that the next day may take back or deliver again."""
    rng = np.random.default_rng([seed, day.toordinal()])
    people = int(isles.size.sum())
    count = {reason: max(1, round(people * share)) for reason, share in (REFUSED | FILTERED).items()}
    extra = max(1, round(people * 0.01))  # payments to accounts that changed hands
    sizes = [*count.values(), extra]
    sound = max(100, people - sum(sizes))
    rows = payments(isles, day, rng, sound + sum(sizes))
    plain, former, *spoilt = _cut(rows, [sound, extra, *count.values()])
    former = between(isles, former, rng, slice(len(isles.owned) * 2 // 3, None))
    told.use(isles, pl.concat([plain, former]))
    parts = [plain, former]
    for (reason, number), some in zip(count.items(), spoilt, strict=True):
        side = ("sender", "receiver")[day.toordinal() % 2]
        outcome = "refused" if reason in REFUSED else "filtered"
        told.counts[outcome, f"{side} is null" if reason == "null" else reason] += number
        parts.append(spoil(isles, some, reason, side, rng))
    once, later = _cut(plain, [len(plain) // 4, len(plain) - len(plain) // 4])  # the brokers' are in `once`
    parts += again(isles, once, people, told)
    if yesterday is not None:
        parts += taken_back(isles, yesterday, day, people, told)
    file = pl.concat(parts)
    told.rows += len(file)
    file = file.sort("time", "seq", maintain_order=True)
    return written(file, rng), later


def _cut(rows: pl.DataFrame, sizes: list[int]) -> list[pl.DataFrame]:
    ends = np.cumsum(sizes)
    return [rows[int(end - size) : int(end)] for end, size in zip(ends, sizes, strict=True)]
