"""What the warehouse tells of earlier runs: to the gates, to people, and to a run that replaces one."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import suppress
from dataclasses import replace
from datetime import date, timedelta
from typing import Any

import polars as pl

from isthmus.gates import FIRST_PARTIES, WEEKS, Reference
from isthmus.publish.night import Night
from isthmus.store import Place

__all__ = [
    "complete",
    "counted_before",
    "damaged",
    "kept_nights",
    "nights_of",
    "published",
    "record_of",
    "reference",
    "replaced",
    "volume_of",
]

# Runs that a night remembers to have replaced; and what it remembers of each.
MOST_REPLACED = 20
REMEMBERED = (
    *("run_id", "definition", "version", "revision", "finished_at", "method", "half_width_widest"),
    *("rows_read", "rows_used", "rows_refused", "parties"),
)


def record_of(night: Night) -> dict[str, Any]:
    """What run.json tells of a night; empty when there is none or it is not readable: then the night is not complete.

    Raises StoreError.
    """
    with suppress(ValueError):
        told = json.loads(night.fetch("runs", "run.json") or b"null")
        if isinstance(told, dict):
            return told
    return {}


def published(warehouse: Place, series: str) -> list[Night]:
    """All nights of a series that have a run.json, oldest first. Raises StoreError."""
    nights = (Night(warehouse, series, day) for day in _days(warehouse, series, "runs"))
    return [night for night in nights if "run.json" in warehouse.below(f"runs/{night.name}")]


def kept_nights(warehouse: Place, series: str) -> list[Night]:
    """All nights of a series of which anything is there, oldest first. Raises StoreError."""
    days = {day for table in warehouse.below("") for day in _days(warehouse, series, table)}
    return [Night(warehouse, series, day) for day in sorted(days)]


def complete(night: Night, definition: str) -> bool:
    """Whether the night is published whole, by this definition."""
    told = record_of(night)
    return told.get("definition") == definition and not damaged(night, told)


def damaged(night: Night, told: dict[str, Any]) -> list[str]:
    """The tables that are gone, or not of the size that the night's run.json (`told`) says. Raises StoreError."""
    sizes = told.get("tables", {})
    return [table for table, size in sizes.items() if night.warehouse.size(night.path(table)) != size["bytes"]]


def reference(night: Night) -> Reference | None:
    """The last published night before this one, for the gates."""
    for day in reversed(_days(night.warehouse, night.series, "runs")):
        other = replace(night, as_of=day)
        if day < night.as_of and (told := record_of(other)):
            return Reference(
                day, told.get("schema", {}), told.get("component_share"), _first_parties(other), counted_before(other)
            )
    return None


def counted_before(night: Night) -> dict[date, int]:
    """Day -> rows, as the night was published last; empty when it is not."""
    return {date.fromisoformat(day): int(rows) for day, rows in record_of(night).get("volume", {}).items()}


def _first_parties(night: Night) -> frozenset[str]:
    """Empty when the night's scores cannot be read: that is for the night's own readers to find, not for this one."""
    with suppress(pl.exceptions.PolarsError):
        scores = pl.read_parquet(night.fetch("scores") or b"", columns=["party", "rank"])
        return frozenset(scores.filter(pl.col("rank") <= FIRST_PARTIES)["party"])
    return frozenset()


def volume_of(night: Night) -> dict[date, int]:
    """Rows of earlier same weekdays, as the nights that ended on them counted them."""
    return dict(_volumes(night))


def _volumes(night: Night) -> Iterator[tuple[date, int]]:
    for week in range(1, WEEKS + 1):
        day = night.as_of - timedelta(weeks=week)
        rows = record_of(replace(night, as_of=day)).get("volume", {}).get(str(day))
        if rows is not None:
            yield day, int(rows)


def replaced(night: Night) -> list[dict[str, Any]]:
    """The runs that publishing this night now would replace, newest first, at most the last 20."""
    before = record_of(night)
    if not before:
        return []
    told = {name: before[name] for name in REMEMBERED if name in before}
    return [told, *before.get("replaces", [])][:MOST_REPLACED]


def nights_of(warehouse: Place, series: str, last: int, endings: Mapping[date, dict[str, Any]]) -> list[dict[str, Any]]:
    """The `last` days up to the newest night of the series, oldest first, none before its first night.

    `endings`: of runs that published nothing, by night. Each night is {as_of, state} and, of a published one, `run`:
    its run.json, and `damaged`: the tables that are no longer what it tells. The state is published, damaged,
    incomplete (some of its files are there, and no readable run.json), missing, or what `endings` tell of it; those are
    under `ending`. Raises StoreError.
    """
    tables = [table for table in warehouse.below("") if not table.startswith(".")]
    found = {day for table in tables for day in _days(warehouse, series, table)}
    known = found | endings.keys()
    if not known:
        return []
    newest = max(known)
    days = [newest - timedelta(days=back) for back in range(min(last, (newest - min(known)).days + 1))]
    return [
        _state_of(Night(warehouse, series, day), tables if day in found else [], endings.get(day, {}))
        for day in reversed(days)
    ]


def _state_of(night: Night, tables: list[str], ending: dict[str, Any]) -> dict[str, Any]:
    """`tables`: those that may have a folder of the night; an empty one is what a killed run left."""
    run = record_of(night) if tables else {}
    there = not run and any(night.warehouse.below(f"{table}/{night.name}") for table in tables)
    told: dict[str, Any] = {"as_of": night.as_of, "state": "incomplete" if there else ending.get("state", "missing")}
    if run:
        lost = damaged(night, run)
        told |= {"state": "damaged" if lost else "published", "run": run, "damaged": lost}
    return told | ({"ending": ending} if ending else {})


def _days(warehouse: Place, series: str, table: str) -> list[date]:
    """Days that have a folder in a table."""
    days = []
    for name in warehouse.below(f"{table}/series={series}"):
        with suppress(ValueError):
            days.append(date.fromisoformat(name.removeprefix("as_of=")))
    return sorted(days)
