"""One part of a log file -> its ties per day, its refused rows, its counts. Runs as a task, anywhere."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, timedelta
from pathlib import Path

import polars as pl
import pyarrow as pa

from isthmus.ingest.columns import DAY, PER_SECOND
from isthmus.ingest.files import Part, damaged, open_parquet
from isthmus.ingest.keys import Coded, to_codes
from isthmus.ingest.ties import AMOUNT

__all__ = ["AMOUNT", "EPOCH", "PartResult", "PartTask", "day_number", "read_part"]

USED, REFUSED, FILTERED, DUPLICATE = "used", "refused", "filtered", "duplicate"
SELF = "self-contact"
SIDES = ("sender", "receiver")

EPOCH = date(1970, 1, 1)
# Outside these days a time is a typing error or a placeholder, not a moment in anyone's log.
PLAUSIBLE = (date(1970, 1, 1), date(2200, 1, 1))
LARGEST_AMOUNT = 1e18


@dataclass(frozen=True)
class PartTask:
    """Read one part into `folder`. `columns`: our name -> theirs. `drop`: a file with rows that are duplicates."""

    part: Part
    folder: str
    columns: Mapping[str, str]
    drop: str = ""


@dataclass(frozen=True)
class PartResult:
    """`counts`: (day since 1970 or None, outcome, reason) -> rows. `days`: those with a ties file in the folder."""

    folder: str
    counts: dict[tuple[int | None, str, str], int] = field(default_factory=dict)
    days: tuple[int, ...] = ()


def day_number(day: date) -> int:
    return (day - EPOCH).days


def day_of(number: int) -> date:
    return EPOCH + timedelta(days=number)


def read_part(task: PartTask) -> PartResult:
    """Read, judge and add up one part.

    Writes into the task's folder `refused.arrow` (row, day, reason), `ids.arrow` (id hashes, row, day) where the log
    has ids, `parties.arrow`, and per day `ties-<day>.arrow` with codes into it (see ties.py).
    """
    book, rows = judge_part(task)
    if task.drop:
        again = pl.read_ipc(task.drop)["row"].implode()
        rows = rows.with_columns(
            outcome=pl.when(pl.col("row").is_in(again)).then(pl.lit(DUPLICATE)).otherwise("outcome")
        )
    folder = Path(task.folder)
    folder.mkdir(parents=True, exist_ok=True)
    rows.filter(outcome=REFUSED).select("row", "day", "reason").write_ipc(folder / "refused.arrow")
    used = rows.filter(outcome=USED)
    if "id" in task.columns:
        _hashed(used).write_ipc(folder / "ids.arrow")
    ties = used.group_by("day", "sender", "receiver").agg(
        pl.len().cast(pl.Int64).alias("contacts"),
        pl.col("amount").sum(),
        pl.lit(1, pl.Int64).alias("days"),
        pl.col("time").min().alias("first_seen"),
        pl.col("time").max().alias("last_seen"),
    )
    book.to_frame().write_ipc(folder / "parties.arrow")
    days = ties.partition_by("day", as_dict=True, include_key=False)
    for (day,), of_day in days.items():
        of_day.write_ipc(folder / f"ties-{day}.arrow", compression="lz4")
    return PartResult(task.folder, count_rows(rows), tuple(sorted(day for (day,) in days)))


def judge_part(task: PartTask) -> tuple[pl.Series, pl.DataFrame]:
    """The part's book of keys and its rows with day, outcome and reason. Raises DataRefused for a damaged file."""
    book, frame = _load(task)
    return book, _judge(frame, "amount" in task.columns)


def count_rows(rows: pl.DataFrame) -> dict[tuple[int | None, str, str], int]:
    """(day, outcome, reason) -> rows."""
    counted = rows.group_by("day", "outcome", "reason").len()
    return {(day, outcome, reason): number for day, outcome, reason, number in counted.iter_rows()}


def _load(task: PartTask) -> tuple[pl.Series, pl.DataFrame]:
    """The book of keys, and the part's rows under our names; row = position in the file."""
    part = task.part
    wanted = list(dict.fromkeys(task.columns.values()))
    with open_parquet(part.path, part.name, dictionaries=[task.columns[side] for side in SIDES]) as parquet:
        try:
            table = parquet.read_row_groups(part.groups, columns=wanted)
        except (OSError, pa.ArrowException) as error:
            raise damaged(part.name, error) from None
    arrays = {ours: table.column(theirs) for ours, theirs in task.columns.items()}
    book, frame = to_codes({side: Coded(arrays[side]) for side in SIDES})
    rest = [pl.Series(ours, _plain(array)) for ours, array in arrays.items() if ours not in SIDES]
    return book, frame.with_columns(*rest).with_columns(
        *_moment(pl.col("time"), _per_day(arrays["time"].type)),
        pl.int_range(part.first_row, part.first_row + pl.len()).alias("row"),
    )


def _plain(array: pa.ChunkedArray) -> pa.ChunkedArray:
    """Without dictionaries, and times as whole numbers of their own unit, which no zone can bend."""
    if pa.types.is_dictionary(array.type):
        array = array.cast(array.type.value_type)
    if pa.types.is_timestamp(array.type):
        return array.cast(pa.timestamp(array.type.unit)).cast(pa.int64())
    if pa.types.is_date64(array.type):
        return array.cast(pa.int64())
    if pa.types.is_decimal256(array.type):  # which Polars lacks
        return array.cast(pa.float64())
    return array.cast(pa.int32()).cast(pa.int64()) if pa.types.is_date32(array.type) else array


def _per_day(found: pa.DataType) -> int:
    """Ticks per day of a time column."""
    values = found.value_type if pa.types.is_dictionary(found) else found
    if pa.types.is_timestamp(values):
        return 86_400 * PER_SECOND[values.unit]
    return 86_400_000 if pa.types.is_date64(values) else 1


def _moment(ticks: pl.Expr, per_day: int) -> list[pl.Expr]:
    """`time` in UTC microseconds, null where it is not plausible, and `dated`: whether the log gave any time."""
    ticks = ticks.cast(pl.Int64)
    lowest, highest = (day_number(day) * per_day for day in PLAUSIBLE)
    plausible = ticks.is_between(lowest, highest, closed="left")
    micro = ticks * (DAY // per_day) if per_day <= DAY else ticks // (per_day // DAY)
    return [
        pl.when(plausible).then(micro).cast(pl.Datetime("us", "UTC")).alias("time"),
        ticks.is_not_null().alias("dated"),
    ]


def _judge(frame: pl.DataFrame, has_amount: bool) -> pl.DataFrame:
    """Add key, day, outcome and reason. A row gets the first reason that applies."""
    amount = pl.col("amount").cast(pl.Float64) if has_amount else pl.lit(0.0)
    frame = frame.with_columns(amount.alias("value"))
    faults = [
        *((pl.col(f"{side}_null"), f"{side} is null") for side in SIDES),
        *((pl.col(side).is_null(), f"{side} is empty") for side in SIDES),
        (~pl.col("dated"), "time is null"),
        (pl.col("time").is_null(), f"time is outside {PLAUSIBLE[0].year}..{PLAUSIBLE[1].year - 1}"),
    ]
    if has_amount:
        value = pl.col("value")
        faults += [
            (value.is_null(), "amount is null"),
            (~value.is_finite(), "amount is not finite"),
            (value < 0, "amount is negative"),
            (value > LARGEST_AMOUNT, f"amount is above {LARGEST_AMOUNT:.0e}"),
        ]
    reason = pl.coalesce(*(pl.when(fault).then(pl.lit(text)) for fault, text in faults)).fill_null(
        pl.when(pl.col("sender") == pl.col("receiver")).then(pl.lit(SELF)).otherwise(pl.lit(""))
    )
    judged = frame.with_columns(
        reason=reason, day=pl.col("time").dt.epoch("us").floordiv(DAY).cast(pl.Int32)
    ).with_columns(
        outcome=pl.when(reason="")
        .then(pl.lit(USED))
        .when(reason=SELF)
        .then(pl.lit(FILTERED))
        .otherwise(pl.lit(REFUSED))
    )
    exact = pl.when(outcome=USED).then("amount").cast(AMOUNT) if has_amount else pl.lit(None, AMOUNT)
    return judged.with_columns(exact.alias("amount"))


def _hashed(used: pl.DataFrame) -> pl.DataFrame:
    """128 bits for each id, so that the whole window's ids fit in memory; rows without an id are never duplicates."""
    ids = pl.col("id").cast(pl.String)
    return used.filter(pl.col("id").is_not_null()).select(
        ids.hash(seed=1).alias("a"), ids.hash(seed=2).alias("b"), "row", "day"
    )
