"""One part of a log file -> its ties per day, its refused rows, its counts. Runs as a task, anywhere."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import polars as pl
import pyarrow as pa

from isthmus.errors import TryAgain
from isthmus.ingest.columns import DAY, PER_SECOND
from isthmus.ingest.files import Part, damaged, open_parquet, state_of
from isthmus.ingest.kept import Facts, keep
from isthmus.ingest.keys import code_columns
from isthmus.ingest.ties import AMOUNT, ties_of_rows

__all__ = [
    "AddTask",
    "PartResult",
    "PartTask",
    "add_up_rows",
    "count_rows",
    "day_number",
    "day_of",
    "judge_part",
    "read_part",
    "used_rows",
]

USED, REFUSED, FILTERED, DUPLICATE = "used", "refused", "filtered", "duplicate"
NOTHING, SELF = "", "self-contact"
SIDES = ("sender", "receiver")

EPOCH = date(1970, 1, 1)
# Outside these days a time is a typing error or a placeholder, not a moment in anyone's log.
PLAUSIBLE = (date(1970, 1, 1), date(2200, 1, 1))
LARGEST_AMOUNT = 1e18


@dataclass(frozen=True)
class PartTask:
    """Read one part into the kept folder `folder`, made below `scratch`. `columns`: our name -> theirs."""

    part: Part
    folder: str
    scratch: str
    columns: Mapping[str, str]

    def recalled(self, facts: Facts) -> PartResult:
        """The result, from what was kept of it."""
        return PartResult.recalled(self.folder, self.folder, facts)


@dataclass(frozen=True)
class AddTask:
    """Add up what `read_part` left for `result`, into `folder`. `marks`: file with the places of duplicates, or ""."""

    result: PartResult
    marks: str
    folder: str
    scratch: str

    def recalled(self, facts: Facts) -> PartResult:
        """The result, from what was kept of it."""
        return PartResult.recalled(self.result.folder, self.folder, facts)


@dataclass(frozen=True)
class PartResult:
    """What is known of a part. `counts`: (day since 1970 or None, outcome, reason) -> rows.

    `folder` holds its book of keys and its refused rows, `ties` a file of ties for each of `days` (see ties.py).
    """

    folder: str
    counts: dict[tuple[int | None, str, str], int]
    days: tuple[int, ...] = ()
    ties: str = ""

    @classmethod
    def recalled(cls, folder: str, ties: str, facts: Facts) -> PartResult:
        counts = {(day, outcome, reason): rows for day, outcome, reason, rows in facts["counts"]}
        return cls(folder, counts, tuple(facts["days"]), ties)


def day_number(day: date) -> int:
    return (day - EPOCH).days


def day_of(number: int) -> date:
    return EPOCH + timedelta(days=number)


def read_part(task: PartTask) -> PartResult:
    """Read, judge and add up one part.

    Keeps `refused.arrow` (row, day, reason), `parties.arrow`, and per day `ties-<day>.arrow` with codes into it (see
    ties.py). Where the log has ids, the rows are not added up yet, because other parts may hold the same ones: they lie
    in `rows.arrow` until `add_up_rows`.
    """
    book, rows = judge_part(task)

    def fill(folder: Path) -> Facts:
        refused = ~pl.col("reason").is_in([NOTHING, SELF])
        rows.filter(refused).select("row", "day", pl.col("reason").cast(pl.String)).write_ipc(folder / "refused.arrow")
        book.to_frame().write_ipc(folder / "parties.arrow")
        counts, used, days = count_rows(rows), used_rows(rows), list[int]()
        if "id" in task.columns:
            kept = used.select("day", "sender", "receiver", "amount", "time", *_hashes())
            kept.write_ipc(folder / "rows.arrow")
        else:
            days = _write_ties(used, folder)
        return _facts(counts, days)

    return task.recalled(keep(Path(task.folder), Path(task.scratch), fill))


def add_up_rows(task: AddTask) -> PartResult:
    """Add up the rows that `read_part` left, without the duplicates."""

    def fill(folder: Path) -> Facts:
        rows = pl.read_ipc(Path(task.result.folder) / "rows.arrow")
        counts = Counter(task.result.counts)
        if task.marks:
            duplicate = pl.int_range(len(rows), eager=True).is_in(pl.read_ipc(task.marks)["at"].implode())
            for day, number in rows.filter(duplicate)["day"].value_counts().iter_rows():
                counts[day, USED, NOTHING] -= number
                counts[day, DUPLICATE, NOTHING] += number
            rows = rows.filter(~duplicate)
        return _facts(counts, _write_ties(rows, folder))

    return task.recalled(keep(Path(task.folder), Path(task.scratch), fill))


def _facts(counts: Mapping[tuple[int | None, str, str], int], days: list[int]) -> Facts:
    return {"counts": [[*key, rows] for key, rows in counts.items()], "days": days}


def _write_ties(rows: pl.DataFrame, folder: Path) -> list[int]:
    days = ties_of_rows(rows).partition_by("day", as_dict=True, include_key=False)
    for (day,), ties in days.items():
        ties.write_ipc(folder / f"ties-{day}.arrow")
    return sorted(day for (day,) in days)


def _hashes() -> list[pl.Expr]:
    """128 bits for each id, so that the whole window's ids fit in memory; both null where a row has no id."""
    ids = pl.col("id").cast(pl.String)
    return [pl.when(ids.is_not_null()).then(ids.hash(seed=seed)).alias(name) for name, seed in (("a", 1), ("b", 2))]


def judge_part(task: PartTask) -> tuple[pl.Series, pl.DataFrame]:
    """The part's book of keys and its rows with day and reason. Raises DataRefused for a damaged file."""
    book, frame, per_day = _load(task)
    return book, _judge(frame, per_day, "amount" in task.columns)


def used_rows(rows: pl.DataFrame) -> pl.DataFrame:
    """The rows to count, their amounts as decimals."""
    amount = pl.col("amount") if "amount" in rows.columns else pl.lit(None)
    return rows.filter(pl.col("reason") == NOTHING).with_columns(amount.cast(AMOUNT).alias("amount"))


def count_rows(rows: pl.DataFrame) -> dict[tuple[int | None, str, str], int]:
    """(day, outcome, reason) -> rows."""
    counted = rows.group_by("day", "reason").len()
    return {(day, _outcome(reason), reason): number for day, reason, number in counted.iter_rows()}


def _outcome(reason: str) -> str:
    return {NOTHING: USED, SELF: FILTERED}.get(reason, REFUSED)


def _load(task: PartTask) -> tuple[pl.Series, pl.DataFrame, int]:
    """The book of keys, the part's rows under our names, and the ticks per day of `time`; row = place in the file."""
    part = task.part
    wanted = list(dict.fromkeys(task.columns.values()))
    with open_parquet(part.path, part.name) as parquet:
        try:
            table = parquet.read_row_groups(part.groups, columns=wanted)
        except (OSError, pa.ArrowException) as error:
            _unchanged(part)
            raise damaged(part.name, error) from None
    _unchanged(part)
    arrays = {ours: table.column(theirs) for ours, theirs in task.columns.items()}
    book, frame = code_columns({side: arrays[side] for side in SIDES})
    rest = [pl.Series(ours, _plain(array)) for ours, array in arrays.items() if ours not in SIDES]
    number = pl.int_range(part.first_row, part.first_row + pl.len())
    frame = frame.with_columns(*rest).with_columns(number.alias("row"), pl.col("time").cast(pl.Int64))
    return book, frame, _per_day(arrays["time"].type)


def _unchanged(part: Part) -> None:
    """Raise TryAgain when the file is no longer the one whose footer was read."""
    if state_of(part.path, part.name) != part.state:
        raise TryAgain(f"log file {part.name} was changed while it was being read; run again once the log is written")


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


def _judge(frame: pl.DataFrame, per_day: int, has_amount: bool) -> pl.DataFrame:
    """Turn `time` from ticks into UTC microseconds, null where not plausible, and add day and reason.

    A row gets the first reason that applies. Reasons are an Enum: a byte a row.
    """
    ticks, sender, receiver = pl.col("time"), pl.col("sender"), pl.col("receiver")
    lowest, highest = (day_number(day) * per_day for day in PLAUSIBLE)
    plausible = ticks.is_between(lowest, highest, closed="left")
    micro = ticks * (DAY // per_day) if per_day <= DAY else ticks // (per_day // DAY)
    faults = [
        *((pl.col(f"{side}_null"), f"{side} is null") for side in SIDES),
        *((pl.col(side).is_null(), f"{side} is empty") for side in SIDES),
        (ticks.is_null(), "time is null"),
        (~plausible, f"time is outside {PLAUSIBLE[0].year}..{PLAUSIBLE[1].year - 1}"),
    ]
    if has_amount:
        value = pl.col("amount").cast(pl.Float64)
        faults += [
            (value.is_null(), "amount is null"),
            (~value.is_finite(), "amount is not finite"),
            (value < 0, "amount is negative"),
            (value > LARGEST_AMOUNT, f"amount is above {LARGEST_AMOUNT:.0e}"),
        ]
    faults += [(sender == receiver, SELF)]
    told = pl.Enum([NOTHING, *(text for _, text in faults)])
    reason = pl.coalesce(*(pl.when(fault).then(pl.lit(text, told)) for fault, text in faults), pl.lit(NOTHING, told))
    return (
        frame.lazy()
        .with_columns(
            reason=reason,
            day=pl.when(plausible).then(ticks // per_day).cast(pl.Int32),
            time=pl.when(plausible).then(micro).cast(pl.Datetime("us", "UTC")),
        )
        .collect(engine="streaming")
    )
