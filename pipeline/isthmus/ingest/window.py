"""Parts -> days -> window: duplicates found across files, counts reconciled, daily ties kept."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path

import polars as pl

from isthmus.cluster import Door
from isthmus.errors import DataRefused
from isthmus.ingest.files import Survey
from isthmus.ingest.rows import (
    DUPLICATE,
    FILTERED,
    REFUSED,
    USED,
    PartResult,
    PartTask,
    add_up_rows,
    count_rows,
    day_number,
    day_of,
    judge_part,
    read_part,
    used_rows,
)
from isthmus.ingest.ties import Merge, Source, add_up, merge_day, one_book
from isthmus.settings import Log
from isthmus.store import fresh
from isthmus.watch import Watch

__all__ = ["Reading", "Sample", "read_window", "sample_ties"]

OUTSIDE = "outside the window"


@dataclass(frozen=True)
class Reading:
    """The window as read.

    `ties`: one row per ordered pair (sender, receiver, contacts, amount, days, first_seen, last_seen), sorted by
    both keys, which are of the type Enum over the sorted keys. `refused`: file, row, reason. `outcomes`: outcome ->
    reason -> rows; the rows add up to `rows_read`.
    """

    ties: pl.DataFrame
    refused: pl.DataFrame
    outcomes: dict[str, dict[str, int]]
    missing_days: tuple[date, ...]

    @property
    def parties(self) -> pl.Series:
        """The sorted keys; some may have no tie in the window."""
        kind = self.ties.schema["sender"]
        assert isinstance(kind, pl.Enum)
        return kind.categories

    def rows(self, outcome: str) -> int:
        return sum(self.outcomes.get(outcome, {}).values())

    @property
    def rows_in_window(self) -> int:
        return in_window(self.outcomes)

    @property
    def rows_read(self) -> int:
        return sum(self.rows(outcome) for outcome in self.outcomes)


def in_window(outcomes: dict[str, dict[str, int]]) -> int:
    """Rows of the window, whatever became of them: all but those of other days."""
    return sum(sum(reasons.values()) for reasons in outcomes.values()) - outcomes[FILTERED].get(OUTSIDE, 0)


def read_window(
    found: Survey, log: Log, first_day: date, last_day: date, work: Path, door: Door, watch: Watch
) -> Reading:
    """Read the surveyed parts, keep one table of ties per day below `work`, and add the window up.

    Raises DataRefused when no row of the window can be used, or a file turns out damaged.
    """
    if not found.parts:
        raise DataRefused(
            f"no row group of the log can hold {first_day}..{last_day}, by the times in the files' footers; check "
            "--as-of, window.days and log.columns.time"
        )
    columns = _mapped(log)
    window = range(day_number(first_day), day_number(last_day) + 1)
    scratch = fresh(work / "parts")
    with watch.stage("read") as tick:
        tasks = [PartTask(part, str(scratch / f"{at:06d}"), columns) for at, part in enumerate(found.parts)]
        results = door.run(read_part, tasks, tick)
        if log.columns.id:
            marks = _mark_duplicates(results, window)
            results = door.run(add_up_rows, list(zip(results, marks, strict=True)))
    outcomes = _count(results, window)
    if not outcomes.get(USED):
        raise DataRefused(_nothing_used(outcomes, first_day, last_day))
    with watch.stage("combine") as tick:
        days = fresh(work / "days")
        used = [result for result in results if any(day in window for day in result.days)]
        book = one_book([Path(result.folder) for result in used], days / "parties.arrow")
        present = [day for day in window if any(day in result.days for result in used)]
        merges = [_day(day, used, days) for day in present]
        door.run(merge_day, merges, tick)
        ties = add_up(book, [merge.target for merge in merges], with_amounts=bool(log.columns.amount))
    missing = tuple(day_of(day) for day in window if day not in present)
    refused = _refused(found, results, window)
    fresh(scratch)
    return Reading(ties, refused, outcomes, missing)


def _mapped(log: Log) -> dict[str, str]:
    return {ours: theirs for ours, theirs in log.columns.model_dump().items() if theirs}


def _mark_duplicates(results: Sequence[PartResult], window: range) -> list[str]:
    """Of the window's rows with one id the first counts (by file name, then row).

    For each part a file with the positions of the others in its rows.arrow, or "" where there are none.
    """
    in_window = pl.col("day").is_between(window.start, window.stop - 1)
    rows = [pl.scan_ipc(f"{result.folder}/rows.arrow").with_row_index("at") for result in results]
    # first by one half of the hash: sorting plain numbers is the cheapest way to find the few that repeat
    half = pl.concat([part.filter(in_window).select("a") for part in rows]).collect()["a"].drop_nulls().sort()
    repeated = half.filter(half == half.shift(1)).unique()
    if repeated.is_empty():
        return [""] * len(results)
    suspects = [part.filter(in_window, pl.col("a").is_in(repeated.implode())).select("at", "a", "b") for part in rows]
    found = pl.concat([part.with_columns(part=pl.lit(at)) for at, part in enumerate(suspects)]).collect()
    later = found.filter(~pl.struct("a", "b").is_first_distinct())
    marks = [""] * len(results)
    for (part,), positions in later.partition_by("part", as_dict=True).items():
        marks[part] = f"{results[part].folder}/duplicates.arrow"
        positions.select("at").write_ipc(marks[part])
    return marks


def _count(results: Sequence[PartResult], window: range) -> dict[str, dict[str, int]]:
    """Add the parts' counts up. A row of another day was left out on purpose, whatever else is wrong with it."""
    outcomes: dict[str, Counter[str]] = {outcome: Counter() for outcome in (USED, REFUSED, FILTERED, DUPLICATE)}
    for result in results:
        for (day, outcome, reason), rows in result.counts.items():
            if day is not None and day not in window:
                outcomes[FILTERED][OUTSIDE] += rows
            else:
                outcomes[outcome][reason or outcome] += rows
    return {outcome: dict(sorted(reasons.items())) for outcome, reasons in outcomes.items()}


def _nothing_used(outcomes: dict[str, dict[str, int]], first_day: date, last_day: date) -> str:
    told = [f"{rows} {reason}" for kind in (REFUSED, FILTERED) for reason, rows in outcomes[kind].items()]
    return (
        f"no usable row in {first_day}..{last_day}: {', '.join(told) or 'the files are empty'}; check --as-of, "
        "window.days and log.columns"
    )


def _day(day: int, results: Sequence[PartResult], days: Path) -> Merge:
    sources = tuple(
        Source(f"{result.folder}/ties-{day}.arrow", f"{result.folder}/places.arrow")
        for result in results
        if day in result.days
    )
    return Merge(str(days / f"{day_of(day)}.arrow"), sources)


def _refused(found: Survey, results: Sequence[PartResult], window: range) -> pl.DataFrame:
    parts = [
        pl.scan_ipc(f"{result.folder}/refused.arrow").select(
            file=pl.lit(part.name), row="row", reason="reason", day="day"
        )
        for part, result in zip(found.parts, results, strict=True)
    ]
    in_window = pl.col("day").is_null() | pl.col("day").is_between(window.start, window.stop - 1)
    return pl.concat(parts).filter(in_window).drop("day").sort("file", "row").collect()


@dataclass(frozen=True)
class Sample:
    """Ties of some of the window's rows, and of the first half of those."""

    rows: int
    ties: pl.DataFrame
    half: pl.DataFrame
    outcomes: dict[str, dict[str, int]]
    days: tuple[date, ...]


def sample_ties(found: Survey, log: Log, first_day: date, last_day: date, most_rows: int) -> Sample:
    """Read parts spread over the window, about `most_rows` rows, into memory. Duplicates are not looked for."""
    columns = _mapped(log)
    window = range(day_number(first_day), day_number(last_day) + 1)
    step = max(1, round(found.rows / most_rows))
    frames, counts, rows = [], [], 0
    for part in found.parts[::step]:
        book, judged = judge_part(PartTask(part, "", columns))
        counts.append(PartResult("", count_rows(judged)))
        rows += part.rows
        used = used_rows(judged).filter(pl.col("day").is_between(window.start, window.stop - 1))
        keys = pl.Enum(book)
        frames.append(
            used.select(
                pl.col("sender", "receiver").cat.to(keys).cast(pl.String),
                "day",
                contacts=pl.lit(1, pl.Int64),
                amount=pl.col("amount").cast(pl.Float64).fill_null(0.0),
            )
        )
    used = pl.concat(frames) if frames else pl.DataFrame(schema=["sender", "receiver", "day"])
    days = tuple(day_of(day) for day in used["day"].unique().sort())
    return Sample(rows, used, used.head(used.height // 2), _count(counts, window), days)
