"""Parts -> days -> window: duplicates found across files, counts reconciled, daily ties kept."""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass
from datetime import date
from pathlib import Path
from typing import TypeVar

import polars as pl

from isthmus.cluster import Door, Tick
from isthmus.errors import DataRefused
from isthmus.ingest.chosen import choose
from isthmus.ingest.files import Survey
from isthmus.ingest.kept import is_sound, name_for, prune, recall
from isthmus.ingest.keys import SIDES, shared_book
from isthmus.ingest.rows import (
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
    settled,
)
from isthmus.ingest.ties import DayTask, Source, add_up, add_up_day, recode, ties_of_rows, window_book
from isthmus.privacy import Pseudonyms, open_pseudonyms
from isthmus.readings import DUPLICATE, FILTERED, REFUSED, Reading, open_reading
from isthmus.settings import Log, Privacy, Ties
from isthmus.store import fresh
from isthmus.watch import Watch

__all__ = ["Sample", "Window", "in_window", "parties_of", "read_window", "sample_window"]

OUTSIDE = "outside the window"
_READING = 3  # to be raised whenever rows are read or judged otherwise, so that nothing kept before is used
# Columns that every reading settles by, beside its extras.
_SETTLED = ("part", "at", "day", "time", "amount", "a", "b")
AnyTask = TypeVar("AnyTask", PartTask, AddTask)


@dataclass(frozen=True)
class Window:
    """The window as read.

    `ties`: one row per ordered pair (sender, receiver, contacts, amount, days, first_seen, last_seen), sorted by
    both keys, which are of the type Enum over the sorted keys. `parties`: party, kind, side, label, in the order of the
    keys; some may have no tie. `refused`: file, row, reason. `outcomes`: outcome -> reason -> rows; the rows add up to
    `rows_read`. A row that names several receivers counts as so many. `volume`: day of the window -> its rows, whatever
    became of them. `key_id`: of the secret that the pseudonyms are made with; None: the keys are the log's own.
    """

    ties: pl.DataFrame
    parties: pl.DataFrame
    refused: pl.DataFrame
    outcomes: dict[str, dict[str, int]]
    missing_days: tuple[date, ...]
    volume: dict[date, int]
    key_id: str | None = None

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
    ties: Ties,
    kept: Path,
    work: Path,
    door: Door,
    watch: Watch,
    pacing: Callable[[Tick], Tick] = lambda tick: tick,
    privacy: Privacy = Privacy(),  # noqa: B008 (frozen)
) -> Window:
    """Read the surveyed parts, keep one table of ties per day below `kept`, and add up those that count.

    What a former run kept, and nothing has changed since, is used again: parts and days alike. `pacing` may watch the
    progress of the reading, and end it by raising.

    Raises DataRefused when no row of the window can be used, or a file turns out damaged.
    """
    log, window = found.log, _window(found)
    scratch = fresh(work / "scratch")
    reading, pseudonyms = open_reading(log), open_pseudonyms(privacy, log.kind)

    def read(tick: Tick) -> list[PartResult]:
        return _read_parts(found, reading, (privacy, pseudonyms), window, kept, scratch, door, tick)

    with watch.stage("read") as plain_tick:
        tick = pacing(plain_tick)
        results = read(tick)
        days = _day_tasks(results, window, kept / "days", scratch)
        missing = _not_kept(list(days.values()), door)
        if not all(door.run(is_sound, _feeding(missing))):  # damaged since: what went is made anew
            results = read(tick)
    outcomes = _count(results, window)
    if not outcomes.get(USED):
        raise DataRefused(_nothing_used(outcomes, found))
    with watch.stage("combine") as tick:
        door.run(add_up_day, missing, tick)
        book, recodes = window_book([task.folder for task in days.values()], scratch)
        every = add_up(book["party"], pl.scan_ipc(door.run(recode, recodes)), with_amounts=log.has_amounts)
        counted, parties = _that_count(every, book, reading, ties, outcomes)
    refused = _refused(found, results, window)
    fresh(scratch)
    prune(kept / "parts", kept / "added", kept / "days")
    missing_days = tuple(day_of(day) for day in window if day not in days)
    volume, key_id = _volume(results, window), pseudonyms.key_id if pseudonyms else None
    return Window(counted, parties.drop("named"), refused, outcomes, missing_days, volume, key_id)


def _read_parts(
    found: Survey,
    reading: Reading,
    private: tuple[Privacy, Pseudonyms | None],
    window: range,
    kept: Path,
    scratch: Path,
    door: Door,
    tick: Tick,
) -> list[PartResult]:
    """What is known of each part: kept from a former run when neither its file nor its reading has changed, nor whose
    pseudonyms its parties have."""
    log, (privacy, pseudonyms) = found.log, private
    check = pseudonyms.check if pseudonyms else ""
    told = log.columns.model_dump(), reading.fingerprint, check
    tasks = [
        PartTask(part, str(kept / "parts" / name_for(_READING, asdict(part), told)), str(scratch), log, privacy, check)
        for part in found.parts
    ]
    if not reading.settles:
        return _kept_or_made(tasks, read_part, door, tick, ("refused.arrow",))
    results = _kept_or_made(tasks, read_part, door, tick, ("refused.arrow", "rows.arrow"))
    changes = _settle(reading, results, window, scratch)
    adds = [
        AddTask(result, changed, str(kept / "added" / name_for(Path(result.folder).name, digest)), str(scratch))
        for result, (changed, digest) in zip(results, changes, strict=True)
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


def _settle(reading: Reading, results: Sequence[PartResult], window: range, scratch: Path) -> list[tuple[str, str]]:
    """What the window's contacts tell only together: for each part a file with those of its rows.arrow that change, and
    a digest of it; "" where there are none."""
    rows = _numbered([pl.scan_ipc(f"{result.folder}/rows.arrow") for result in results])
    in_window = pl.col("day").is_between(window.start, window.stop - 1)
    changed = reading.settle(rows.filter(in_window).select(*_SETTLED, *reading.extras))
    changes = [("", "")] * len(results)
    for (part,), frame in changed.sort("part", "at").partition_by("part", as_dict=True, include_key=False).items():
        target = scratch / f"changes-{part}.arrow"
        frame.write_ipc(target)
        changes[part] = str(target), hashlib.blake2b(target.read_bytes(), digest_size=12).hexdigest()
    return changes


def _numbered(parts: Sequence[pl.LazyFrame]) -> pl.LazyFrame:
    """All parts' rows, with `part` and `at`: which part, which place in it."""
    return pl.concat(
        [rows.with_row_index("at").with_columns(part=pl.lit(at, pl.UInt32)) for at, rows in enumerate(parts)]
    )


def _window(found: Survey) -> range:
    """The days as numbers. Raises DataRefused when nothing that was found can hold them."""
    if not found.parts:
        raise DataRefused(
            f"no row group of the log can hold {found.first_day}..{found.last_day}, by the times in files' footers; "
            "check --as-of, window.days and log.columns.time"
        )
    return range(day_number(found.first_day), day_number(found.last_day) + 1)


def _that_count(
    every: pl.DataFrame, book: pl.DataFrame, reading: Reading, rules: Ties, outcomes: dict[str, dict[str, int]]
) -> tuple[pl.DataFrame, pl.DataFrame]:
    """The ties that the log's reading and `rules` leave, and the parties as they are then known."""
    ties, parties, left_out = reading.weigh(every, book.with_columns(pl.col("party").cast(every.schema["sender"])))
    _leave_out(outcomes, left_out)
    ties, also_left_out = choose(ties, rules)
    _leave_out(outcomes, also_left_out)
    if ties.is_empty():
        told = ", ".join(f"{rows} {reason}" for reason, rows in (left_out | also_left_out).items())
        raise DataRefused(f"no tie of the window counts, of so many contacts: {told}; check [ties] and log.rules")
    return ties, parties


def _leave_out(outcomes: dict[str, dict[str, int]], left_out: dict[str, int]) -> None:
    """Count contacts that were used in ties as filtered after all, because a party or a tie was left out."""
    for reason, rows in left_out.items():
        if rows:
            outcomes[USED][USED] -= rows
            outcomes[FILTERED][reason] = outcomes[FILTERED].get(reason, 0) + rows


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


def _nothing_used(outcomes: dict[str, dict[str, int]], found: Survey) -> str:
    told = [f"{rows} {reason}" for kind in (REFUSED, FILTERED) for reason, rows in outcomes[kind].items()]
    return (
        f"no usable row in {found.first_day}..{found.last_day}: {', '.join(told) or 'the files are empty'}; check "
        "--as-of, window.days and log.columns"
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


def parties_of(found: Survey, log: Log, reading: Reading) -> Iterator[pl.Series]:
    """The distinct parties (String, clear) of each surveyed part, as a night would know them; in memory only."""
    for part in found.parts:
        yield judge_part(part, log, reading).book["party"]


@dataclass(frozen=True)
class Sample:
    """Some of the window's rows, and the ties of the first half of those. `window.refused` is empty."""

    rows: int
    window: Window
    half: pl.DataFrame


def sample_window(found: Survey, rules: Ties, most_rows: int) -> Sample:
    """Read parts spread over the window, about `most_rows` rows, into memory, and judge them as a night would.

    What several parts tell only together, such as duplicates, is found among the parts that are read. Raises
    DataRefused when nothing can hold the window, or a file turns out damaged.
    """
    log, window = found.log, _window(found)
    reading = open_reading(log)
    read = found.parts[:: max(1, round(found.rows / most_rows))]
    judged = [judge_part(part, log, reading) for part in read]
    counts = [Counter(count_rows(each)) for each in judged]
    book, places = shared_book([each.book for each in judged])
    rows = []
    for each, to in zip(judged, places, strict=True):
        used = each.used.drop("row", "reason").filter(pl.col("day").is_between(window.start, window.stop - 1))
        rows.append(used.with_columns(to.gather(used[side]).alias(side) for side in SIDES))
    if reading.settles:
        changes = reading.settle(_numbered([each.lazy() for each in rows]).select(*_SETTLED, *reading.extras))
        rows = [
            settled(part, changes.filter(pl.col("part") == at).drop("part"), counted)
            for at, (part, counted) in enumerate(zip(rows, counts, strict=True))
        ]
    results = [PartResult("", counted) for counted in counts]
    outcomes, used = _count(results, window), pl.concat(rows)
    if used.is_empty():
        raise DataRefused(_nothing_used(outcomes, found))
    ties, parties = _that_count(_add_up(book, used, log), book, reading, rules, outcomes)
    half, _ = choose(_add_up(book, used.head(used.height // 2), log), rules)
    days = set(used["day"])
    missing_days = tuple(day_of(day) for day in window if day not in days)
    volume = _volume(results, window)
    whole = Window(ties, parties.drop("named"), pl.DataFrame(), outcomes, missing_days, volume)
    return Sample(sum(part.rows for part in read), whole, half)


def _add_up(book: pl.DataFrame, rows: pl.DataFrame, log: Log) -> pl.DataFrame:
    return add_up(book["party"], ties_of_rows(rows).lazy(), with_amounts=log.has_amounts)
