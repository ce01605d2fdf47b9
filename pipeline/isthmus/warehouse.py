"""A published warehouse as lazy Polars frames: what `isthmus.read` gives.

Which files make up each night is settled once, when the warehouse is read: all frames of one Warehouse are of the same
runs, also when a night is replaced meanwhile: its files stay readable until it is replaced a second time.
"""

from __future__ import annotations

import io
import json
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from datetime import date
from html import escape
from typing import Any

import polars as pl

from isthmus.errors import StoreError
from isthmus.store import LAYOUT_FILE, Folder, Place, layout_in, place
from isthmus.tables import CAUTION, LAYOUT, PARTITION, TABLES

__all__ = ["Warehouse", "WholeNight", "read"]

MOST_SHOWN = 20  # nights, where a warehouse shows itself


@dataclass(frozen=True)
class WholeNight:
    """A night as it was published when it was found; `files`: the name of each -> its path below the warehouse."""

    warehouse: Place
    series: str
    as_of: date
    files: dict[str, str]

    def run(self) -> dict[str, Any]:
        """What run.json tells of it. Raises StoreError."""
        return dict(json.loads(_bytes(self.warehouse, self.files["run"])))


@dataclass(frozen=True)
class Warehouse:
    """One attribute per published table, such as `.scores`: a LazyFrame over `nights`, columns series and as_of first.

    In a folder a frame is scanned as any Parquet is; of an object store the attribute fetches the table, whole.
    """

    place: Place
    nights: Sequence[WholeNight]
    _runs: list[dict[str, Any]] = field(default_factory=list, repr=False, compare=False)

    def __getattr__(self, table: str) -> pl.LazyFrame:
        if table not in TABLES:
            raise AttributeError(f"no table {table!r}; there are {', '.join(TABLES)}")
        return _frame(self.place, table, [night for night in self.nights if table in night.files])

    def __dir__(self) -> list[str]:
        return ["nights", "place", *TABLES]

    def __repr__(self) -> str:
        lines = [f"{self.place}: {', '.join(TABLES)}", *("  ".join(line) for line in self._told()), *self._more()]
        return "\n".join([*lines, CAUTION])

    def _repr_html_(self) -> str:
        """What a notebook shows."""
        heads, *rows = self._told()
        tables = ", ".join(f"<code>.{table}</code>" for table in TABLES)
        cells = [f"<tr>{''.join(f'<td>{escape(cell)}</td>' for cell in row)}</tr>" for row in rows]
        return (
            f"<p><b>{escape(str(self.place))}</b>: lazy frames {tables}</p>"
            f"<table><thead><tr>{''.join(f'<th>{head}</th>' for head in heads)}</tr></thead>"
            f"<tbody>{''.join(cells)}</tbody></table>"
            f"{''.join(f'<p>{line}</p>' for line in self._more())}<p><small>{CAUTION}</small></p>"
        )

    def _told(self) -> Iterator[list[str]]:
        """A line of the table per night, the newest ones, after its heads."""
        yield ["series", "night", "parties", "ties", "rows used", "method", "widest ±", "warnings"]
        if not self._runs:
            self._runs.extend(night.run() for night in self.nights[-MOST_SHOWN:])
        for night, run in zip(self.nights[-MOST_SHOWN:], self._runs, strict=True):
            counts = [f"{run[name]:,}" for name in ("parties", "ties", "rows_used")]
            width = f"{run['half_width_widest']:.2g}"
            yield [night.series, str(night.as_of), *counts, run["method"], width, run["warnings"]]

    def _more(self) -> list[str]:
        older = len(self.nights) - MOST_SHOWN
        return [f"and {older} nights before"] if older > 0 else []


def read(warehouse: str, series: str | None, as_of: date | str | None) -> Warehouse:
    """What `isthmus.read` gives. Raises StoreError, SettingsError."""
    from_ = place(warehouse)
    if not layout_in((from_.fetch(LAYOUT_FILE) or b"").decode(errors="replace"), str(from_), LAYOUT, "warehouse"):
        raise StoreError(
            f"{from_} is no warehouse: it has no {LAYOUT_FILE}; name the folder or URL of run.warehouse, or publish a "
            "first night there with isthmus score"
        )
    known = [name.removeprefix("series=") for name in from_.below("runs") if name.startswith("series=")]
    if series is not None and series not in known:
        raise StoreError(f"{from_} has no series {series!r}; it has {', '.join(known) or 'none'}")
    found = [night for name in ([series] if series is not None else known) for night in _nights(from_, name, as_of)]
    if not found:
        which = "night" if as_of in (None, "all") else f"night of {as_of}"
        raise StoreError(f"{from_} has no {which}{f' of the series {series}' if series else ''}; see isthmus history")
    return Warehouse(from_, found)


def _nights(from_: Place, series: str, as_of: date | str | None) -> list[WholeNight]:
    """Oldest first: the last one, that of a day, or all."""
    days = []
    for name in from_.below(f"runs/series={series}"):
        with suppress(ValueError):
            days.append(date.fromisoformat(name.removeprefix("as_of=")))
    if as_of not in (None, "all"):
        days = [day for day in days if str(day) == str(as_of)]
    found: list[WholeNight] = []
    for day in sorted(days, reverse=True):
        if files := from_.whole(f"series={series}/as_of={day}"):
            found.append(WholeNight(from_, series, day, files))
            if as_of is None:
                break
    return found[::-1]


def _frame(from_: Place, table: str, nights: list[WholeNight]) -> pl.LazyFrame:
    """A table of some nights. A column that an older isthmus did not write is null there."""
    schema = TABLES[table].schema
    partition = {column.name: column.type for column in PARTITION}

    def scan(night: WholeNight) -> pl.LazyFrame:
        path = night.files[table]
        return pl.scan_parquet(
            from_.path / path if isinstance(from_, Folder) else io.BytesIO(_bytes(from_, path)),
            schema=schema,
            missing_columns="insert",
            extra_columns="ignore",
            glob=False,
            hive_partitioning=False,
        ).select(pl.lit(night.series).alias("series"), pl.lit(night.as_of).alias("as_of"), pl.all())

    if not nights:
        return pl.LazyFrame(schema=partition | schema)
    return pl.concat([scan(night) for night in nights])


def _bytes(from_: Place, path: str) -> bytes:
    told = from_.fetch(path)
    if told is None:
        raise StoreError(f"{from_}/{path} is gone: the night was published again since; read the warehouse again")
    return told
