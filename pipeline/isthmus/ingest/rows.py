"""One part of a log file -> its ties per day, its refused rows, its counts. Runs as a task, anywhere."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import polars as pl
import pyarrow as pa

from isthmus.errors import SettingsError, TryAgain
from isthmus.ingest.columns import DAY, PER_SECOND
from isthmus.ingest.files import Part, damaged, open_parquet, state_of
from isthmus.ingest.kept import Facts, keep
from isthmus.ingest.keys import SIDES, code_sides
from isthmus.ingest.ties import ties_of_rows
from isthmus.privacy import Pseudonyms, open_pseudonyms
from isthmus.readings import FILTERED, REFUSED, Reading, Verdict, open_reading
from isthmus.settings import Log, Privacy, mapped, types_of

__all__ = [
    "NOTHING",
    "USED",
    "AddTask",
    "Counts",
    "Judgement",
    "PartResult",
    "PartTask",
    "add_up_rows",
    "count_rows",
    "day_number",
    "day_of",
    "judge_part",
    "read_part",
    "settled",
]

USED = "used"
NOTHING, SELF = "", "self-contact"

EPOCH = date(1970, 1, 1)
# Outside these days a time is a typing error or a placeholder, not a moment in anyone's log.
PLAUSIBLE = (date(1970, 1, 1), date(2200, 1, 1))

Counts = dict[tuple[int | None, str, str], int]


@dataclass(frozen=True)
class PartTask:
    """Read one part into the kept folder `folder`, made below `scratch`.

    `privacy` says where this process finds the secret; `check` is of the pseudonyms that must come of it.
    """

    part: Part
    folder: str
    scratch: str
    log: Log
    privacy: Privacy
    check: str

    def recalled(self, facts: Facts) -> PartResult:
        """The result, from what was kept of it."""
        return PartResult.recalled(self.folder, self.folder, facts)


@dataclass(frozen=True)
class AddTask:
    """Add up what `read_part` left for `result`, into `folder`. `changes`: file with what `settle` changed, or ""."""

    result: PartResult
    changes: str
    folder: str
    scratch: str

    def recalled(self, facts: Facts) -> PartResult:
        """The result, from what was kept of it."""
        return PartResult.recalled(self.result.folder, self.folder, facts)


@dataclass(frozen=True)
class PartResult:
    """What is known of a part. `counts`: (day since 1970 or None, outcome, reason) -> rows.

    `folder` holds its book of parties and its refused rows, `ties` a file of ties for each of `days` (see ties.py).
    """

    folder: str
    counts: Counts
    days: tuple[int, ...] = ()
    ties: str = ""

    @classmethod
    def recalled(cls, folder: str, ties: str, facts: Facts) -> PartResult:
        counts = {(day, outcome, reason): rows for day, outcome, reason, rows in facts["counts"]}
        return cls(folder, counts, tuple(facts["days"]), ties)


@dataclass(frozen=True)
class Judgement:
    """A part's book of parties (see keys.py), and its contacts with `day`, `time` (UTC) and `reason` (an Enum; empty:
    used). `outcomes`: reason -> outcome."""

    book: pl.DataFrame
    contacts: pl.DataFrame
    outcomes: Mapping[str, str]

    @property
    def used(self) -> pl.DataFrame:
        return self.contacts.filter(pl.col("reason") == NOTHING)


def day_number(day: date) -> int:
    return (day - EPOCH).days


def day_of(number: int) -> date:
    return EPOCH + timedelta(days=number)


def read_part(task: PartTask) -> PartResult:
    """Read, judge and add up one part.

    Keeps `refused.arrow` (row, day, reason), `parties.arrow`, and per day `ties-<day>.arrow` with codes into it (see
    ties.py). Where the log's reading settles contacts over several parts they are not added up yet: they lie in
    `rows.arrow` until `add_up_rows`.
    """
    reading = open_reading(task.log)
    judged = judge_part(task.part, task.log, reading, _pseudonyms(task))

    def fill(folder: Path) -> Facts:
        refused = [reason for reason, outcome in judged.outcomes.items() if outcome == REFUSED]
        told = judged.contacts.filter(pl.col("reason").is_in(refused))
        told.select("row", "day", pl.col("reason").cast(pl.String)).write_ipc(folder / "refused.arrow")
        judged.book.write_ipc(folder / "parties.arrow")
        days = list[int]()
        if reading.settles:
            judged.used.drop("row", "reason").write_ipc(folder / "rows.arrow")
        else:
            days = _write_ties(judged.used, folder)
        return _facts(count_rows(judged), days)

    return task.recalled(keep(Path(task.folder), Path(task.scratch), fill))


def _pseudonyms(task: PartTask) -> Pseudonyms | None:
    """Of this process's own secret, once it is known to be that of the run."""
    found = open_pseudonyms(task.privacy, task.log.kind)
    if found and found.check != task.check:
        raise SettingsError("privacy: a worker finds another secret than the run; give all processes the same")
    return found


def add_up_rows(task: AddTask) -> PartResult:
    """Add up the rows that `read_part` left, as they are once settled."""

    def fill(folder: Path) -> Facts:
        rows = pl.read_ipc(Path(task.result.folder) / "rows.arrow")
        counts = Counter(task.result.counts)
        if task.changes:
            rows = settled(rows, pl.read_ipc(task.changes), counts)
        return _facts(counts, _write_ties(rows, folder))

    return task.recalled(keep(Path(task.folder), Path(task.scratch), fill))


def settled(rows: pl.DataFrame, changes: pl.DataFrame, counts: Counter[tuple[int | None, str, str]]) -> pl.DataFrame:
    """The rows that are still used after `changes` (at, outcome, reason, amount; see Reading.settle), with the amounts
    that they now have. What became of the others is told in `counts`."""
    told = rows.with_row_index("at").join(
        changes.rename({"amount": "settled"}), on="at", how="left", maintain_order="left"
    )
    gone = pl.col("outcome") != NOTHING
    for day, outcome, reason, number in told.filter(gone).group_by("day", "outcome", "reason").len().iter_rows():
        counts[day, USED, NOTHING] -= number
        counts[day, outcome, reason] += number
    amount = pl.when(pl.col("outcome").is_null()).then("amount").otherwise("settled")
    return told.filter(gone.fill_null(False).not_()).with_columns(amount=amount).select(rows.columns)


def _facts(counts: Mapping[tuple[int | None, str, str], int], days: list[int]) -> Facts:
    return {"counts": [[*key, rows] for key, rows in counts.items() if rows], "days": days}


def _write_ties(rows: pl.DataFrame, folder: Path) -> list[int]:
    days = ties_of_rows(rows).partition_by("day", as_dict=True, include_key=False)
    for (day,), ties in days.items():
        ties.write_ipc(folder / f"ties-{day}.arrow")
    return sorted(day for (day,) in days)


def judge_part(part: Part, log: Log, reading: Reading, pseudonyms: Pseudonyms | None = None) -> Judgement:
    """Read a part and tell what becomes of each contact; its parties have `pseudonyms`, where there are any.

    Raises DataRefused for a damaged file.
    """
    contacts = reading.contacts(_load(part, log))
    book, contacts, faults = code_sides(contacts, reading)
    judged = reading.judge(contacts, book)
    verdicts = [
        *(Verdict(pl.col(f"_{side}_null"), f"{side} is null", REFUSED) for side in SIDES),
        *(
            Verdict(
                pl.col(f"_{side}_fault") == at, f"{side} {fault}", FILTERED if fault in reading.left_out else REFUSED
            )
            for at, fault in enumerate(faults)
            for side in SIDES
        ),
        Verdict(pl.col("_time_null"), "time is null", REFUSED),
        Verdict(pl.col("time").is_null(), f"time is outside {PLAUSIBLE[0].year}..{PLAUSIBLE[1].year - 1}", REFUSED),
        *judged.verdicts,
        Verdict(pl.col("sender") == pl.col("receiver"), SELF, FILTERED),
    ]
    outcomes = {NOTHING: USED} | {verdict.reason: verdict.outcome for verdict in verdicts}
    told = pl.Enum(list(outcomes))
    reason = pl.coalesce(
        *(pl.when(each.when).then(pl.lit(each.reason, told)) for each in verdicts), pl.lit(NOTHING, told)
    )
    marks = ("a", "b", *reading.extras) if reading.settles else ()
    frame = (
        judged.contacts.lazy()
        .with_columns(
            reason=reason,
            day=pl.col("time").dt.epoch("d").cast(pl.Int32),
            time=pl.col("time").dt.replace_time_zone("UTC"),
        )
        .select("row", "day", "reason", *SIDES, "amount", "time", *marks)
        .collect(engine="streaming")
    )
    book = judged.book
    if pseudonyms:  # keys, and the hashes made of them
        book = book.with_columns(pseudonyms.of(book["party"]))
        frame = frame.with_columns(pseudonyms.marked(frame[name]) for name in marks if frame.schema[name] == pl.UInt64)
    return Judgement(book, frame, outcomes)


def count_rows(judged: Judgement) -> Counts:
    """(day, outcome, reason) -> rows."""
    counted = judged.contacts.group_by("day", "reason").len()
    return {(day, judged.outcomes[reason], reason): number for day, reason, number in counted.iter_rows()}


def _load(part: Part, log: Log) -> pl.DataFrame:
    """The part's rows under our names, as `Reading.contacts` wants them, and `_time_null`: whether the log has none."""
    columns, types = mapped(log.columns), types_of(log.columns)
    with open_parquet(part.path, part.name) as parquet:
        try:
            table = parquet.read_row_groups(part.groups, columns=list(dict.fromkeys(columns.values())))
        except (OSError, pa.ArrowException) as error:
            _unchanged(part)
            raise damaged(part.name, error) from None
    _unchanged(part)
    arrays = {ours: table.column(theirs) for ours, theirs in columns.items()}
    rows = pl.DataFrame([pl.Series(ours, _plain(array)) for ours, array in arrays.items()])
    texts = [
        ours
        for ours in columns
        if "string" in types[ours] and (rows.schema[ours].is_integer() or rows.schema[ours] == pl.Null)
    ]
    times = [ours for ours in columns if "timestamp" in types[ours]]
    number = pl.int_range(part.first_row, part.first_row + pl.len())
    return rows.with_columns(
        pl.col(texts).cast(pl.String),
        *(_moment(ours, _per_day(arrays[ours].type)) for ours in times),
        number.alias("row"),
        pl.col("time").is_null().alias("_time_null"),
    )


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


def _moment(name: str, per_day: int) -> pl.Expr:
    """Ticks as a moment, null where that is not plausible."""
    ticks = pl.col(name).cast(pl.Int64)
    lowest, highest = (day_number(day) * per_day for day in PLAUSIBLE)
    micro = ticks * (DAY // per_day) if per_day <= DAY else ticks // (per_day // DAY)
    return pl.when(ticks.is_between(lowest, highest, closed="left")).then(micro).cast(pl.Datetime("us")).alias(name)
