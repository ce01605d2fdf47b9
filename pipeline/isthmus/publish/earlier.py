"""What earlier nights of a series tell a new one."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import suppress
from datetime import date, timedelta
from typing import Any

import polars as pl

from isthmus.gates import FIRST_PARTIES, WEEKS, Reference
from isthmus.publish.night import Night

__all__ = ["complete", "published", "record_of", "reference", "volume_of"]


def published(night: Night) -> list[Night]:
    """All nights of the same series that are published whole, oldest first."""
    found = []
    for folder in (night.warehouse / "runs" / f"series={night.series}").glob("as_of=*"):
        with suppress(ValueError):
            other = Night(night.warehouse, night.series, date.fromisoformat(folder.name.removeprefix("as_of=")))
            if other.manifest.exists():
                found.append(other)
    return sorted(found, key=lambda other: other.as_of)


def record_of(night: Night) -> dict[str, Any]:
    """What run.json tells of a night; empty when it is not published or cannot be read."""
    with suppress(OSError, ValueError):
        told = json.loads(night.manifest.read_text(encoding="utf-8"))
        if isinstance(told, dict):
            return told
    return {}


def complete(night: Night, definition: str) -> bool:
    """Whether the night is published whole, by this definition."""
    return record_of(night).get("definition") == definition


def reference(night: Night) -> Reference | None:
    """The last night before this one, for the gates."""
    for other in reversed([each for each in published(night) if each.as_of < night.as_of]):
        told = record_of(other)
        with suppress(OSError, pl.exceptions.PolarsError):
            first = pl.scan_parquet(other.table("scores")).filter(pl.col("rank") <= FIRST_PARTIES).select("party")
            return Reference(
                other.as_of, told.get("schema", {}), told.get("component_share"), frozenset(first.collect()["party"])
            )
    return None


def volume_of(night: Night) -> dict[date, int]:
    """Rows of earlier same weekdays, as the nights that ended on them counted them."""
    return dict(_volumes(night))


def _volumes(night: Night) -> Iterator[tuple[date, int]]:
    for week in range(1, WEEKS + 1):
        day = night.as_of - timedelta(weeks=week)
        rows = record_of(Night(night.warehouse, night.series, day)).get("volume", {}).get(str(day))
        if rows is not None:
            yield day, int(rows)
