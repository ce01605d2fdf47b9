"""Logs written by the tests, and one call that reads them."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from isthmus.cluster import open_door
from isthmus.ingest import Survey, Window, read_window, survey
from isthmus.settings import PlainColumns, PlainLog, Ties
from isthmus.watch import Watch

FIRST, LAST = date(2026, 3, 1), date(2026, 3, 3)
NOON = datetime(2026, 3, 2, 12, tzinfo=UTC)
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
TIME = pa.timestamp("us", "UTC")


def at(minutes: float = 0, days: int = 0) -> datetime:
    """A moment counted from noon of the middle day of the window."""
    return NOON + timedelta(days=days, minutes=minutes)


def table(
    senders: Sequence[Any], receivers: Sequence[Any], times: Sequence[Any] | None = None, **more: Sequence[Any]
) -> pa.Table:
    """Columns sender, receiver, time and more; a minute apart from noon on where no times are given."""
    times = [at(minute) for minute in range(len(senders))] if times is None else times
    arrays = {"sender": pa.array(senders), "receiver": pa.array(receivers), "time": pa.array(times, TIME)}
    return pa.table(arrays | {name: pa.array(values) for name, values in more.items()})


def column(values: Sequence[Any], type_: pa.DataType) -> pa.Array:
    """The values as that type, which may be a dictionary of any index type."""
    if not pa.types.is_dictionary(type_):
        return pa.array(values, type_)
    coded = pa.array(values, type_.value_type).dictionary_encode()
    return pa.DictionaryArray.from_arrays(coded.indices.cast(type_.index_type), coded.dictionary)


def write(path: Path, rows: pa.Table, **options: Any) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    pq.write_table(rows, path, **options)
    return path


def log_of(path: Path | str, *, amount: bool = False, id: bool = False) -> PlainLog:
    return PlainLog(path=str(path), columns=PlainColumns(amount="amount" if amount else "", id="id" if id else ""))


def look(log: PlainLog, first: date = FIRST, last: date = LAST) -> Survey:
    with open_door(threads=1) as door:
        return survey(log, first, last, door)


def read(
    path: Path | str,
    work: Path,
    *,
    amount: bool = False,
    id: bool = False,
    first: date = FIRST,
    last: date = LAST,
    threads: int = 1,
) -> Window:
    """Survey and read the window."""
    log = log_of(path, amount=amount, id=id)
    with open_door(threads=threads) as door:
        found = survey(log, first, last, door)
        reading = read_window(found, Ties(), work, work, door, Watch())
    assert reading.rows_read == found.rows  # the counts reconcile, whatever the log
    assert reading.rows("used") == reading.ties["contacts"].sum()
    return reading


def ties_of(reading: Window) -> dict[tuple[str, str], tuple[Any, ...]]:
    """(sender, receiver) -> (contacts, amount, days, first_seen, last_seen)."""
    return {(row[0], row[1]): row[2:] for row in reading.ties.iter_rows()}


def pairs_of(reading: Window) -> dict[tuple[str, str], int]:
    return {pair: more[0] for pair, more in ties_of(reading).items()}


def refused_of(reading: Window) -> list[tuple[str, int, str]]:
    return list(reading.refused.iter_rows())
