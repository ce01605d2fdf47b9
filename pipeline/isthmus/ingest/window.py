"""Parts -> days -> window: duplicates found across files, counts reconciled, daily ties kept."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from datetime import date
from pathlib import Path
from typing import TypeVar

import polars as pl

from isthmus.cluster import Door, Tick
from isthmus.errors import DataRefused
from isthmus.ingest.files import Survey
from isthmus.ingest.kept import is_sound, name_for, prune, recall
from isthmus.ingest.rows import (
    DUPLICATE,
    FILTERED,
    REFUSED,
    USED,
    AddTask,
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
from isthmus.ingest.ties import DayTask, Source, add_up, add_up_day, recode, window_book
from isthmus.settings import Log
from isthmus.store import fresh
from isthmus.watch import Watch

__all__ = ["Reading", "Sample", "read_window", "sample_ties"]

OUTSIDE = "outside the window"
_READING = 1  # to be raised whenever rows are read or judged otherwise, so that nothing kept before is used
AnyTask = TypeVar("AnyTask", PartTask, AddTask)


@dataclass(frozen=True)
class Reading:
    """The window as read.

    `ties`: one row per ordered pair (sender, receiver, contacts, amount, days, first_seen, last_seen), sorted by
    both keys, which are of the type Enum over the sorted keys. `refused`: file, row, reason. `outcomes`: outcome ->
    reason -> rows; the rows add up to `rows_read`. `volume`: day of the window -> its rows, whatever became of them.
    """

    ties: pl.DataFrame
    refused: pl.DataFrame
    outcomes: dict[str, dict[str, int]]
    missing_days: tuple[date, ...]
    volume: dict[date, int]

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
    found: Survey,
    log: Log,
    first_day: date,
    last_day: date,
    work: Path,
    door: Door,
    watch: Watch,
    pacing: Callable[[Tick], Tick] = lambda tick: tick,
) -> Reading:
    """Read the surveyed parts, keep one table of ties per day below `work`, and add the window up.

    What a former run kept, and nothing has changed since, is used again: parts and days alike. `pacing` may watch the
    progress of the reading, and end it by raising.

    Raises DataRefused when no row of the window can be used, or a file turns out damaged.
    """
    if not found.parts:
        raise DataRefused(
            f"no row group of the log can hold {first_day}..{last_day}, by the times in the files' footers; check "
            "--as-of, window.days and log.columns.time"
        )
    window = range(day_number(first_day), day_number(last_day) + 1)
    scratch = fresh(work / "scratch")
    with watch.stage("read") as plain_tick:
        tick = pacing(plain_tick)
        results = _read_parts(found, _mapped(log), window, work, scratch, door, tick)
        days = _day_tasks(results, window, work / "days", scratch)
        missing = _not_kept(list(days.values()), door)
        if not all(door.run(is_sound, _feeding(missing))):  # damaged since: what went is made anew
            results = _read_parts(found, _mapped(log), window, work, scratch, door, tick)
    outcomes = _count(results, window)
    if not outcomes.get(USED):
        raise DataRefused(_nothing_used(outcomes, first_day, last_day))
    with watch.stage("combine") as tick:
        door.run(add_up_day, missing, tick)
        book, recodes = window_book([task.folder for task in days.values()], scratch)
        ties = add_up(book, door.run(recode, recodes), with_amounts=bool(log.columns.amount))
    refused = _refused(found, results, window)
    fresh(scratch)
    prune(work / "parts", work / "added", work / "days")
    missing_days = tuple(day_of(day) for day in window if day not in days)
    return Reading(ties, refused, outcomes, missing_days, _volume(results, window))


def _read_parts(
    found: Survey, columns: dict[str, str], window: range, work: Path, scratch: Path, door: Door, tick: Tick
) -> list[PartResult]:
    """What is known of each part: kept from a former run when neither its file nor its reading has changed."""
    tasks = [
        PartTask(part, str(work / "parts" / name_for(_READING, asdict(part), columns)), str(scratch), columns)
        for part in found.parts
    ]
    if "id" not in columns:
        return _kept_or_made(tasks, read_part, door, tick, ("refused.arrow",))
    results = _kept_or_made(tasks, read_part, door, tick, ("refused.arrow", "rows.arrow"))
    marks = _mark_duplicates(results, window, scratch)
    adds = [
        AddTask(result, marked, str(work / "added" / name_for(Path(result.folder).name, digest)), str(scratch))
        for result, (marked, digest) in zip(results, marks, strict=True)
    ]
    return _kept_or_made(adds, add_up_rows, door)


def _kept_or_made(
    tasks: Sequence[AnyTask],
    make: Callable[[AnyTask], PartResult],
    door: Door,
    tick: Tick | None = None,
    needed: tuple[str, ...] = (),
) -> list[PartResult]:
    """The result of each task, made only where it is not kept, or a `needed` file of it is damaged."""
    kept = {task.folder: facts for task in tasks if (facts := recall(Path(task.folder))) is not None}
    if needed:
        looks = [(folder, needed) for folder in kept]
        kept = {
            folder: kept[folder] for (folder, _), good in zip(looks, door.run(is_sound, looks), strict=True) if good
        }
    missing = [task for task in tasks if task.folder not in kept]
    made = {task.folder: result for task, result in zip(missing, door.run(make, missing, tick), strict=True)}
    return [made[task.folder] if task.folder in made else task.recalled(kept[task.folder]) for task in tasks]


def _day_tasks(results: Sequence[PartResult], window: range, days: Path, scratch: Path) -> dict[int, DayTask]:
    """Day -> how its ties come about, in a folder that is named by the parts that have rows of the day."""
    tasks = {}
    for day in window:
        having = [result for result in results if day in result.days]
        if having:
            sources = tuple(Source(result.ties, result.folder, day) for result in having)
            name = f"{day_of(day)}-{name_for(*(Path(result.ties).name for result in having))}"
            tasks[day] = DayTask(str(days / name), str(scratch), sources)
    return tasks


def _not_kept(tasks: Sequence[DayTask], door: Door) -> list[DayTask]:
    looks = [(task.folder, ()) for task in tasks if recall(Path(task.folder)) is not None]
    sound = {folder for (folder, _), good in zip(looks, door.run(is_sound, looks), strict=True) if good}
    return [task for task in tasks if task.folder not in sound]


def _feeding(tasks: Sequence[DayTask]) -> list[tuple[str, tuple[str, ...]]]:
    """The kept folders that the tasks will read."""
    return [(folder, ()) for folder in sorted({folder for task in tasks for folder in task.reads})]


def _mapped(log: Log) -> dict[str, str]:
    return {ours: theirs for ours, theirs in log.columns.model_dump().items() if theirs}


def _mark_duplicates(results: Sequence[PartResult], window: range, scratch: Path) -> list[tuple[str, str]]:
    """Of the window's rows with one id the first counts (by file name, then row).

    For each part a file with the positions of the others in its rows.arrow, and a digest of them; "" where there are
    none.
    """
    in_window = pl.col("day").is_between(window.start, window.stop - 1)
    rows = [pl.scan_ipc(f"{result.folder}/rows.arrow").with_row_index("at") for result in results]
    # first by one half of the hash: sorting plain numbers is the cheapest way to find the few that repeat
    half = pl.concat([part.filter(in_window).select("a") for part in rows]).collect()["a"].drop_nulls().sort()
    repeated = half.filter(half == half.shift(1)).unique()
    if repeated.is_empty():
        return [("", "")] * len(results)
    suspects = [part.filter(in_window, pl.col("a").is_in(repeated.implode())).select("at", "a", "b") for part in rows]
    found = pl.concat([part.with_columns(part=pl.lit(at)) for at, part in enumerate(suspects)]).collect()
    later = found.filter(~pl.struct("a", "b").is_first_distinct())
    marks = [("", "")] * len(results)
    for (part,), positions in later.partition_by("part", as_dict=True).items():
        target = str(scratch / f"duplicates-{part}.arrow")
        places = positions.select("at")
        places.write_ipc(target)
        marks[part] = target, name_for(places["at"].to_list())
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


def _volume(results: Sequence[PartResult], window: range) -> dict[date, int]:
    volume: Counter[date] = Counter()
    for result in results:
        for (day, _, _), rows in result.counts.items():
            if day is not None and day in window:
                volume[day_of(day)] += rows
    return dict(sorted(volume.items()))


def _nothing_used(outcomes: dict[str, dict[str, int]], first_day: date, last_day: date) -> str:
    told = [f"{rows} {reason}" for kind in (REFUSED, FILTERED) for reason, rows in outcomes[kind].items()]
    return (
        f"no usable row in {first_day}..{last_day}: {', '.join(told) or 'the files are empty'}; check --as-of, "
        "window.days and log.columns"
    )


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
    volume: dict[date, int]


def sample_ties(found: Survey, log: Log, first_day: date, last_day: date, most_rows: int) -> Sample:
    """Read parts spread over the window, about `most_rows` rows, into memory. Duplicates are not looked for."""
    columns = _mapped(log)
    window = range(day_number(first_day), day_number(last_day) + 1)
    step = max(1, round(found.rows / most_rows))
    frames, counts, rows = [], [], 0
    for part in found.parts[::step]:
        book, judged = judge_part(PartTask(part, "", "", columns))
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
    return Sample(rows, used, used.head(used.height // 2), _count(counts, window), days, _volume(counts, window))
