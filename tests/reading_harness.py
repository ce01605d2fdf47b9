"""A reading over frames in memory, in the order in which ingest asks it, without files, days or Dask."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import polars as pl

from isthmus.readings.reading import AMOUNT, FILTERED, KINDS, REFUSED, SIDES, Reading

PLACES = ("sender", "receiver")


@dataclass(frozen=True)
class Told:
    """`counts`: outcome -> reason -> contacts ("used" has the one reason "used"). `used`: the contacts that count.

    `ties` and `parties`: what `weigh` returned, keys as text.
    """

    counts: dict[str, dict[str, int]]
    used: pl.DataFrame
    ties: pl.DataFrame
    parties: pl.DataFrame


def tell(reading: Reading, *parts: pl.DataFrame) -> Told:
    """`parts`: rows under our names, without `row`; key columns String, times Datetime("us")."""
    counts: Counter[tuple[str, str]] = Counter()
    judged, books = [], []
    for at, part in enumerate(parts):
        rows = part.with_row_index("row").with_columns(pl.col("row").cast(pl.Int64))
        contacts, book, told = _part(reading, rows)
        counts.update(told)
        judged.append(contacts.with_columns(part=pl.lit(at, pl.UInt32)).with_row_index("at"))
        books.append(book)
    used = pl.concat(judged)
    settled = reading.settle(used.select("part", "at", "day", "time", "amount", "a", "b", *reading.extras).lazy())
    assert settled.select("part", "at").is_unique().all()
    used = used.join(settled.rename({"amount": "now"}), on=["part", "at"], how="left", maintain_order="left")
    gone = used.filter(pl.col("outcome").fill_null("") != "")
    counts.update({(o, r): n for o, r, n in gone.group_by("outcome", "reason").len().iter_rows()})
    used = used.filter(pl.col("outcome").fill_null("") == "").with_columns(amount=pl.coalesce("now", "amount"))
    ties, parties = _added_up(used, books)
    ties, parties, left_out = reading.weigh(ties, parties)
    counts.update({(FILTERED, reason): contacts for reason, contacts in left_out.items()})
    counts["used", "used"] = used.height - sum(left_out.values())
    outcomes: dict[str, dict[str, int]] = {}
    for (outcome, reason), number in sorted(counts.items()):
        outcomes.setdefault(outcome, {})[reason] = number
    return Told(outcomes, used, ties.with_columns(pl.col(PLACES).cast(pl.String)), parties.drop("named"))


def _part(reading: Reading, rows: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, Counter[tuple[str, str]]]:
    contacts = reading.contacts(rows.with_columns(_mark=pl.lit(True)))
    assert contacts["_mark"].all()
    assert set(contacts["row"]) == set(rows["row"]), "every row must be accounted for"
    raw = pl.concat([contacts[side].rename("raw") for side in PLACES]).drop_nulls().unique(maintain_order=True)
    keys = reading.keys(raw)
    assert keys.schema["kind"] == KINDS
    assert keys.schema["side"] == SIDES
    known = pl.DataFrame({"raw": raw}).hstack(keys)
    usable = known.filter(pl.col("key").is_not_null())
    book = usable.group_by("key", maintain_order=True).agg(
        pl.col("kind", "side").max(), pl.col("label").drop_nulls().first()
    )
    book = book.rename({"key": "party"}).with_columns(named="kind")
    codes = book.select("party").with_row_index("code")
    known = known.join(codes, left_on="key", right_on="party", how="left", maintain_order="left")
    for side in PLACES:
        told = known.select(pl.col("raw").alias(side), pl.col("code"), pl.col("fault").alias(f"_{side}_fault"))
        contacts = contacts.join(told, on=side, how="left", maintain_order="left")
        contacts = (
            contacts.with_columns(pl.col(side).is_null().alias(f"_{side}_null")).drop(side).rename({"code": side})
        )
    answer = reading.judge(contacts, book)
    after = answer.contacts
    assert after.height == contacts.height
    assert after.schema["amount"] == AMOUNT
    verdicts = [
        *((pl.col(f"_{side}_null"), REFUSED, f"{side} is null") for side in PLACES),
        *((pl.col(side).is_null(), REFUSED, "") for side in PLACES),
        (pl.col("time").is_null(), REFUSED, "time is null"),
        *((verdict.when, verdict.outcome, verdict.reason) for verdict in answer.verdicts),
        (pl.col("sender") == pl.col("receiver"), FILTERED, "self-contact"),
    ]
    number = pl.coalesce(*(pl.when(when).then(at) for at, (when, _, _) in enumerate(verdicts)), pl.lit(-1))
    after = after.with_columns(_verdict=number)
    counts: Counter[tuple[str, str]] = Counter()
    for row in after.filter(pl.col("_verdict") >= 0).iter_rows(named=True):
        _, outcome, reason = verdicts[row["_verdict"]]
        if not reason:  # why a key is not one
            outcome = FILTERED if row[f"_{PLACES[row['_verdict'] - 2]}_fault"] in reading.left_out else outcome
            side = PLACES[row["_verdict"] - 2]
            reason = f"{side} {row[f'_{side}_fault'] or 'is empty'}"
        counts[outcome, reason] += 1
    used = after.filter(pl.col("_verdict") < 0).with_columns(
        *(
            pl.lit(None, type_).alias(name)
            for name, type_ in {"a": pl.UInt64(), "b": pl.UInt64()}.items()
            if name not in after.columns
        ),
        day=pl.col("time").dt.epoch("d").cast(pl.Int32),
    )
    names = answer.book["party"]
    texts = [names.gather(used[side]).alias(f"{side}_key") for side in PLACES]
    return used.with_columns(*texts), answer.book, counts


def _added_up(used: pl.DataFrame, books: Sequence[pl.DataFrame]) -> tuple[pl.DataFrame, pl.DataFrame]:
    parties = pl.concat([book.select("party", "kind", "named", "side", "label") for book in books])
    about = pl.col("kind", "named", "side").max(), pl.col("label").drop_nulls().first()
    parties = parties.group_by("party").agg(*about).sort("party")
    keys = pl.Enum(parties["party"])
    ties = (
        used.select(sender="sender_key", receiver="receiver_key", amount="amount", time="time", day="day")
        .group_by("sender", "receiver")
        .agg(
            pl.len().cast(pl.Int64).alias("contacts"),
            pl.col("amount").sum().cast(pl.Float64),
            pl.col("day").n_unique().cast(pl.Int64).alias("days"),
            pl.col("time").min().alias("first_seen"),
            pl.col("time").max().alias("last_seen"),
        )
        .sort("sender", "receiver")
        .with_columns(pl.col(PLACES).cast(keys))
    )
    return ties, parties.with_columns(pl.col("party").cast(keys))
