"""Which files can hold the window, what their footers say, and how the work is cut into parts."""

from __future__ import annotations

import difflib
import glob
import json
import os
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from fractions import Fraction
from math import ceil, floor
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from isthmus.cluster import Door
from isthmus.errors import DataRefused, SettingsError, StoreError
from isthmus.ingest.columns import DAY, Kind, kind_of
from isthmus.settings import Log, mapped, spare, types_of

__all__ = ["LogFile", "Part", "Survey", "holds", "open_parquet", "states_of", "survey"]

SUFFIXES = (".parquet", ".parq", ".pq")
# A partition's date may be local while the window is in UTC: local days begin up to 14 hours before or 12 after.
SLACK = timedelta(days=1)
ROWS_PER_PART = 2_000_000
FILES_PER_TASK = 32


@dataclass(frozen=True)
class RowGroup:
    """Rows of one row group, and its first and last time in microseconds since 1970 where the footer tells."""

    rows: int
    first: int | None
    last: int | None


@dataclass(frozen=True)
class LogFile:
    """One log file as its footer describes it. `state`: see `state_of`. `kinds`: our column name -> its type.

    `schema`: every column of the file -> Arrow's name of its type.
    """

    path: str
    name: str
    state: tuple[int, int]
    kinds: dict[str, Kind]
    groups: tuple[RowGroup, ...]
    schema: dict[str, str]

    @property
    def size(self) -> int:
        return self.state[0]

    @property
    def changed(self) -> int:
        """When it was last changed, in nanoseconds since 1970."""
        return self.state[1]

    @property
    def rows(self) -> int:
        return sum(group.rows for group in self.groups)


@dataclass(frozen=True)
class Part:
    """One task's share of a file: consecutive row groups. `first_row` counts from the file's first row."""

    path: str
    name: str
    state: tuple[int, int]
    groups: tuple[int, ...]
    first_row: int
    rows: int


@dataclass(frozen=True)
class Survey:
    """What would be read for a window of a log, known from names and footers alone."""

    log: Log
    first_day: date
    last_day: date
    files: tuple[LogFile, ...]
    parts: tuple[Part, ...]
    skipped_files: int

    @property
    def rows(self) -> int:
        return sum(part.rows for part in self.parts)

    @property
    def bytes(self) -> int:
        return sum(file.size for file in self.files)

    @property
    def schema(self) -> dict[str, str]:
        """Column -> type, as the last file has it."""
        return self.files[-1].schema if self.files else {}


@dataclass(frozen=True)
class _Look:
    """A task: read the footers of some files."""

    root: str
    paths: tuple[str, ...]
    columns: dict[str, str]
    types: dict[str, tuple[str, ...]]
    spared: frozenset[str]


def survey(log: Log, first_day: date, last_day: date, door: Door) -> Survey:
    """Find the log's files, read the footers of those that can hold the days, and cut them into parts.

    Raises StoreError (no such folder), DataRefused (no file for the window, not Parquet, truncated, a column
    missing or of a wrong type, files that disagree).
    """
    root, paths = _list(log.path)
    near = [path for path in paths if holds(os.path.relpath(path, root), first_day, last_day)]
    if not near:
        raise DataRefused(
            f"{log.path} has {len(paths)} Parquet files, but no partition for {first_day}..{last_day}; "
            "check --as-of, window.days, and that the log has arrived"
        )
    columns, types = mapped(log.columns), types_of(log.columns)
    spared = frozenset(name for name in columns if spare(log, name))
    looks = [
        _Look(root, tuple(near[at : at + FILES_PER_TASK]), columns, types, spared)
        for at in range(0, len(near), FILES_PER_TASK)
    ]
    files = [file for found in door.run(_look, looks) for file in found]
    _agree(files)
    lowest, highest = _microseconds(first_day), _microseconds(last_day + timedelta(days=1))
    parts = tuple(part for file in files for part in _cut(file, lowest, highest))
    used = {part.path for part in parts}
    read = tuple(file for file in files if file.path in used)
    return Survey(log, first_day, last_day, read, parts, len(paths) - len(read))


def states_of(log: Log) -> dict[str, tuple[int, int]]:
    """Every file of the log: name -> size and time of change. Raises StoreError or DataRefused as `survey` does."""
    root, paths = _list(log.path)
    return {name: state_of(path, name) for path in paths for name in [os.path.relpath(path, root)]}


def holds(name: str, first_day: date, last_day: date) -> bool:
    """False only when a partition folder's date is too far from the window."""
    day = _partition_day(name)
    return day is None or first_day - SLACK <= day <= last_day + SLACK


def _microseconds(day: date) -> int:
    return (day - date(1970, 1, 1)).days * DAY


def _list(path: str) -> tuple[str, list[str]]:
    """The folder that names are relative to, and all Parquet files, sorted by name."""
    if "://" in path:
        raise SettingsError(f"log.path = {path!r}: only local paths are read; mount the bucket or copy the files")
    if glob.has_magic(path):
        fixed = Path(path).parts
        stop = next(index for index, step in enumerate(fixed) if glob.has_magic(step))
        root = str(Path(*fixed[:stop]))
        matches = glob.glob(path, recursive=True)
        paths = [name for name in matches if os.path.isfile(name) and not _hidden(Path(name), root)]
        if not paths:
            raise StoreError(f"log.path = {path!r} matches no file; check the pattern and that the log has arrived")
    elif os.path.isfile(path):
        root, paths = str(Path(path).parent), [path]
    elif os.path.isdir(path):
        root = path
        every = [str(found) for found in _walk(path) if not _hidden(found, path)]
        paths = [name for name in every if name.lower().endswith(SUFFIXES)]
        if not paths:
            raise DataRefused(
                f"log.path = {path!r} holds no Parquet file ({len(every)} other files); files must end in "
                f"{', '.join(SUFFIXES)}"
            )
    else:
        raise StoreError(f"log.path = {path!r} does not exist; check the path, and that the disk is mounted")
    return root, sorted(paths)


def _walk(root: str) -> Iterator[Path]:
    """Every file below the folder, through links too. Raises StoreError rather than pass over what cannot be read."""

    def refuse(error: OSError) -> None:
        raise StoreError(
            f"cannot read the log folder {error.filename}: {error.strerror}; let this user read it, or move it away"
        )

    for folder, _, names in os.walk(root, onerror=refuse, followlinks=True):
        for name in names:
            found = Path(folder, name)
            if name.lower().endswith(SUFFIXES) and not found.exists():
                raise StoreError(f"log file {found.relative_to(root)} is a link to nothing; mend or remove it")
            yield found


def _hidden(path: Path, root: str) -> bool:
    """Writers keep their own marks under names that begin with a dot or an underscore."""
    return any(step.startswith((".", "_")) and "=" not in step for step in path.relative_to(root).parts)


def _partition_day(name: str) -> date | None:
    """The date in a hive path: `anything=2026-11-30`, or year=2026/month=11/day=30. None when there is none."""
    keys = dict(step.split("=", 1) for step in Path(name).parts[:-1] if "=" in step)
    text = next((value for value in keys.values() if re.fullmatch(r"\d{4}-\d{2}-\d{2}", value)), None)
    if text is None and {"year", "month", "day"} <= keys.keys():
        text = f"{keys['year']}-{keys['month']:0>2}-{keys['day']:0>2}"
    try:
        return date.fromisoformat(text) if text else None
    except ValueError:
        return None


def open_parquet(path: str, name: str) -> pq.ParquetFile:
    """Open a log file. Raises DataRefused when it is not whole Parquet, StoreError when it cannot be read."""
    try:
        # Old writers store times as INT96; read as nanoseconds the years before 1678 and after 2262 would wrap round.
        return pq.ParquetFile(path, coerce_int96_timestamp_unit="us")
    except pa.ArrowInvalid as error:
        raise damaged(name, error) from None
    except OSError as error:
        if "Parquet" in str(error) or "footer" in str(error) or "thrift" in str(error).lower():
            raise damaged(name, error) from None
        raise StoreError(f"cannot read log file {name}: {error.strerror or error}; check that it is readable") from None


def damaged(name: str, error: Exception) -> DataRefused:
    """The refusal of a file that is cut short or is something else."""
    what = str(error).split("\n")[0].split(" Either ")[0].rstrip(".")
    return DataRefused(f"log file {name} is not whole Parquet ({what}); deliver it again or move it out of log.path")


def state_of(path: str, name: str) -> tuple[int, int]:
    """Size in bytes and time of change in nanoseconds: what tells that a file was replaced. Raises StoreError."""
    try:
        told = os.stat(path)
    except OSError as error:
        raise StoreError(f"cannot read log file {name}: {error.strerror}; check that it is readable") from None
    return told.st_size, told.st_mtime_ns


def _look(look: _Look) -> list[LogFile]:
    return [_footer(path, os.path.relpath(path, look.root), look) for path in look.paths]


def _footer(path: str, name: str, look: _Look) -> LogFile:
    state = state_of(path, name)
    with open_parquet(path, name) as parquet:
        schema = parquet.schema_arrow
        kinds: dict[str, Kind] = {}
        for ours, theirs in look.columns.items():
            if schema.names.count(theirs) > 1:
                raise DataRefused(
                    f"log file {name} has {schema.names.count(theirs)} columns named {theirs!r} (log.columns.{ours}); "
                    "write it with one"
                )
            if theirs not in schema.names:
                near = difflib.get_close_matches(theirs, schema.names, n=1)
                lacking = f'. If the log has none, set log.columns.{ours} = ""'
                hint = f"did you mean {near[0]}?" if near else f"it has {', '.join(schema.names)}."
                raise DataRefused(
                    f"log file {name} has no column {theirs!r} (log.columns.{ours}); {hint} If the log has changed, "
                    f"correct log.columns{lacking if ours in look.spared else ''}"
                )
            kinds[ours] = kind_of(schema.field(theirs).type, ours, theirs, name, look.types[ours])
        times = _time_bounds(parquet.metadata, look.columns["time"])
        return LogFile(path, name, state, kinds, tuple(times), {field.name: str(field.type) for field in schema})


def _time_bounds(footer: Any, column: str) -> list[RowGroup]:
    """Each row group's first and last time, where its statistics tell.

    The units are those of the file (Parquet has no seconds, so Arrow's unit can differ from the stored one).
    """
    index = next(i for i in range(footer.num_columns) if footer.schema.column(i).path == column)
    stored = json.loads(footer.schema.column(index).logical_type.to_json())
    microseconds = Fraction(DAY) if stored.get("Type") == "Date" else _UNITS.get(stored.get("timeUnit", ""))
    groups = []
    for number in range(footer.num_row_groups):
        group = footer.row_group(number)
        stats = group.column(index).statistics if microseconds else None
        if microseconds and stats is not None and stats.has_min_max:
            first, last = floor(stats.min_raw * microseconds), ceil(stats.max_raw * microseconds)
            groups.append(RowGroup(group.num_rows, first, last))
        else:
            groups.append(RowGroup(group.num_rows, None, None))
    return groups


_UNITS = {"milliseconds": Fraction(1000), "microseconds": Fraction(1), "nanoseconds": Fraction(1, 1000)}


def _agree(files: Sequence[LogFile]) -> None:
    """All files must mean the same by a column; narrower and wider types of one family do."""
    told: dict[str, tuple[str, Kind]] = {}  # by the first file whose column is not empty
    for file in files:
        for ours, kind in file.kinds.items():
            if kind.family == "empty":
                continue
            name, before = told.setdefault(ours, (file.name, kind))
            if not before.agrees(kind):
                raise DataRefused(
                    f"files of this log disagree on log.columns.{ours}: {name} holds {before.text}, "
                    f"{file.name} holds {kind.text}; write the column with one type"
                )


def _cut(file: LogFile, lowest: int, highest: int) -> list[Part]:
    """Runs of consecutive row groups that can hold [lowest, highest), each up to ROWS_PER_PART rows."""
    parts: list[Part] = []
    run: list[int] = []
    rows = first_row = at = 0

    def close() -> None:
        nonlocal run, rows
        if run:
            parts.append(Part(file.path, file.name, file.state, tuple(run), first_row, rows))
        run, rows = [], 0

    for number, group in enumerate(file.groups):
        holds = group.rows > 0 and (
            group.first is None or group.last is None or (group.first < highest and group.last >= lowest)
        )
        if not holds or rows + group.rows > ROWS_PER_PART:
            close()
        if holds:
            if not run:
                first_row = at
            run.append(number)
            rows += group.rows
        at += group.rows
    close()
    return parts
