"""What goes wrong with payments, planted on purpose and counted while it is planted."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal

import numpy as np
import polars as pl

from isthmus.inventions.payments_isles import DAY, HUBS, PLACES, Ints, Isles, with_sides

__all__ = ["FILTERED", "REFUSED", "Told", "again", "between", "spoil", "taken_back", "written"]

# Shares of a day's payments, at least one each.
REFUSED = {
    "sender is an IBAN with a wrong check digit": 0.0005,
    "receiver is an IBAN with a wrong check digit": 0.0005,
    "null": 0.0001,
    "time is null": 0.0002,
    "amount is null": 0.0002,
    "amount is negative": 0.0003,
    "currency is not an ISO 4217 code": 0.0002,
    "currency without a rate": 0.0010,
    "more decimals than the currency has": 0.0004,
}
FILTERED = {
    "not booked": 0.01,
    "own account": 0.02,
    "self-contact": 0.002,
    "amount is zero": 0.001,
    "hub: payroll": 0.06,
    "hub: tax": 0.02,
    "hub: processor": 0.08,
    "return of a payment outside the window": 0.001,
    "return without an id of its payment": 0.0002,
}
AGAIN = {"uetr": 0.001, "tx_id": 0.001, "end_to_end_id": 0.001, "nothing": 0.0005}  # delivered twice on one day
LATE = 0.001  # delivered again on the next day
RETURNS = {  # on the next day
    "full by uetr": 0.001,
    "full by tx_id": 0.001,
    "full by end_to_end_id": 0.001,
    "reversal": 0.001,
    "part": 0.001,
    "part delivered twice": 0.0005,
    "two parts of the whole": 0.0005,
    "more than the whole": 0.0002,
}


@dataclass
class Told:
    """What was planted so far. `uses`: used payments of each account."""

    uses: Ints
    rows: int = 0
    amount: Decimal = Decimal(0)
    counts: Counter[tuple[str, str]] = field(default_factory=Counter)

    def use(self, isles: Isles, rows: pl.DataFrame, times: int = 1) -> None:
        """Count payments as used, or with times = -1 as no longer used."""
        for side in ("payer", "payee"):
            np.add.at(self.uses, rows[side].to_numpy(), times)
        self.amount += times * isles.worth(rows)

    def outcomes(self) -> dict[str, dict[str, int]]:
        found: dict[str, dict[str, int]] = {}
        for (outcome, reason), number in sorted(self.counts.items()):
            found.setdefault(outcome, {})[reason] = number
        return found


def between(isles: Isles, rows: pl.DataFrame, rng: np.random.Generator, which: slice) -> pl.DataFrame:
    """The same payments, from members to their second account."""
    pick = rng.integers(0, len(isles.owned[which]), len(rows))
    return with_sides(isles, rows, isles.owned[which][pick], isles.second[which][pick])


def spoil(isles: Isles, rows: pl.DataFrame, reason: str, side: str, rng: np.random.Generator) -> pl.DataFrame:
    payer, payee, count = rows["payer"].to_numpy(), rows["payee"].to_numpy(), len(rows)
    if reason.startswith("hub: "):
        label = reason.removeprefix("hub: ")
        hub = rng.choice(isles.hub[[at for at, name in enumerate(HUBS) if name == label]], count)
        return with_sides(isles, rows, *((hub, payee) if label == "payroll" else (payer, hub)))
    if reason.endswith("wrong check digit"):
        side = reason.split()[0]
        check = pl.col(side).str.slice(2, 2).cast(pl.Int64)
        check = pl.when(check == 98).then(2).otherwise(check + 1).cast(pl.String).str.zfill(2)
        return rows.with_columns((pl.col(side).str.slice(0, 2) + check + pl.col(side).str.slice(4)).alias(side))
    changes: dict[str, dict[str, pl.Expr | pl.Series]] = {
        "null": {side: pl.lit(None, pl.String)},
        "time is null": {"time": pl.lit(None, pl.Int64)},
        "amount is null": {"minor": pl.lit(None, pl.Int64)},
        "amount is negative": {"minor": -pl.col("minor")},
        "currency is not an ISO 4217 code": {"currency": pl.lit("QQQ")},
        "currency without a rate": {"currency": pl.lit("NZD")},
        "more decimals than the currency has": {"broken": pl.lit(1, pl.Int64)},
        "not booked": {"status": pl.Series(["PDNG", "INFO", None] * count, dtype=pl.String)[:count]},
        "self-contact": {"receiver": pl.col("sender"), "payee": pl.col("payer")},
        "amount is zero": {"minor": pl.lit(0, pl.Int64)},
        "return of a payment outside the window": {
            "original_uetr": pl.lit("20010101-0000-4000-8000-") + pl.col("seq").cast(pl.String).str.zfill(12),
            "reason": pl.lit("AC04"),
        },
        "return without an id of its payment": {
            "uetr": pl.lit(None, pl.String),
            "tx_id": pl.lit(None, pl.String),
            "end_to_end_id": pl.lit(None, pl.String),
            "reason": pl.lit("AM05"),
        },
    }
    if reason == "own account":
        return between(isles, rows, rng, slice(0, len(isles.owned) * 2 // 3))
    return rows.with_columns(**changes[reason])


def _known_by(name: str) -> pl.Expr:
    """Rows that have this id, and none that would be asked before it."""
    order = ("uetr", "tx_id", "end_to_end_id")
    if name == "nothing":
        return pl.all_horizontal(pl.col(order).is_null())
    before = [pl.col(other).is_null() for other in order[: order.index(name)]]
    return pl.all_horizontal(pl.col(name).is_not_null(), *before)


def again(isles: Isles, pool: pl.DataFrame, people: int, told: Told) -> list[pl.DataFrame]:
    """Second deliveries on the same day, of payments that the next day leaves alone. Without any id nobody can tell."""
    found = []
    for name, share in AGAIN.items():
        some = pool.filter(_known_by(name)).head(max(1, round(people * share)))
        if name == "nothing":
            told.use(isles, some)
        else:
            told.counts["duplicate", "delivered again"] += len(some)
        found.append(some)
    return found


def taken_back(isles: Isles, rows: pl.DataFrame, day: date, people: int, told: Told) -> list[pl.DataFrame]:
    """Returns of yesterday's payments, and yesterday's payments delivered again."""
    late = rows.filter(_known_by("uetr")).head(max(1, round(people * LATE)))
    told.counts["duplicate", "delivered again"] += len(late)
    found = [late]
    left = rows.join(late, on="seq", how="anti", maintain_order="left")
    for turn, (way, share) in enumerate(RETURNS.items()):
        name = way.removeprefix("full by ") if way.startswith("full") else "uetr"
        able = pl.col(name).is_not_null()
        if not way.startswith("full") and way != "reversal":
            able &= (pl.col("currency") == "XCD") & (pl.col("minor") > 10)
        some = left.filter(able).head(max(1, round(people * share)))
        left = left.join(some, on="seq", how="anti", maintain_order="left")
        back = _return_of(some, day, name, turn, reversal=way == "reversal")
        half = pl.col("minor") // 3
        if way.startswith("part"):
            parts = [back.with_columns(minor=half)]
            told.amount -= Decimal(int(parts[0]["minor"].sum())) / 100
            if way == "part delivered twice":
                parts *= 2
                told.counts["duplicate", "delivered again"] += len(back)
            told.counts["filtered", "return of a payment in the window"] += len(back)
        else:
            parts = [back]
            told.use(isles, some, -1)
            told.counts["filtered", "returned in full"] += len(some)
            if way == "two parts of the whole":
                rest = pl.col("minor") - half
                parts = [
                    back.with_columns(minor=half),
                    back.with_columns(minor=rest, tx_id=pl.col("tx_id") + pl.lit("b"), time=pl.col("time") + 1),
                ]
            if way == "more than the whole":
                parts = [back.with_columns(minor=pl.col("minor") + 1)]
                told.counts["filtered", "return of more than its payment"] += len(back)
            else:
                told.counts["filtered", "return of a payment in the window"] += len(back) * len(parts)
        found += parts
    return found


def _return_of(rows: pl.DataFrame, day: date, name: str, turn: int, reversal: bool) -> pl.DataFrame:
    """Payments back to their payers: a return names one id of its payment, a reversal carries all as its own."""
    back = rows.with_columns(
        payer="payee", payee="payer", sender="receiver", receiver="sender", day=pl.lit(day), time=pl.col("time") + DAY
    )
    if reversal:
        return back.with_columns(reversal=pl.lit(True))
    return back.with_columns(
        pl.col(name).alias(f"original_{name}"),
        uetr=pl.lit(None, pl.String),
        tx_id=pl.format(f"R{day:%Y%m%d}{turn}{{}}", "seq"),
        end_to_end_id=pl.lit(None, pl.String),
        reason=pl.lit("AC04"),
    )


def written(rows: pl.DataFrame, rng: np.random.Generator) -> pl.DataFrame:
    """The log's own columns; some accounts spaced or in small letters, and words where ids are missing."""
    count = len(rows)
    spelt = {}
    for side in ("sender", "receiver"):
        how, text = pl.Series(rng.integers(0, 20, count)), pl.col(side)
        spaced = text.str.replace_all("(.{4})", "${1} ").str.strip_chars()
        iban = text.str.contains("^(VG|LC)")
        spelt[side] = (
            pl.when((how == 0) & iban)
            .then(spaced)
            .when((how == 1) & iban)
            .then(text.str.to_lowercase())
            .otherwise(text)
        )
    places = pl.col("currency").replace_strict(PLACES, default=2, return_dtype=pl.Int64)
    stated = pl.col("minor") * 10 ** (5 - places) + pl.col("broken")
    none = pl.Series(["NOTPROVIDED", "notprovided", "NOTPROVIDED"] * (count // 3 + 1))[:count]
    upper = pl.Series(rng.random(count) < 0.1)
    return rows.select(
        DbtrAcct=spelt["sender"],
        CdtrAcct=spelt["receiver"],
        AccptncDtTm=pl.col("time").cast(pl.Datetime("us", "UTC")),
        IntrBkSttlmAmt=(stated.cast(pl.Decimal(38, 5)) / pl.lit(Decimal(100_000))).cast(pl.Decimal(18, 5)),
        Ccy="currency",
        Sts="status",
        UETR=pl.when(upper).then(pl.col("uetr").str.to_uppercase()).otherwise("uetr"),
        TxId="tx_id",
        EndToEndId=pl.coalesce("end_to_end_id", none),
        RvslInd="reversal",
        OrgnlUETR="original_uetr",
        OrgnlTxId="original_tx_id",
        OrgnlEndToEndId=pl.coalesce("original_end_to_end_id", pl.when(pl.col("reason").is_not_null()).then(none)),
        RtrRsnInf="reason",
    )
