"""What the warehouse tells of earlier runs: the nights of a series, and the runs that each night replaced."""

from __future__ import annotations

import json
from datetime import date, timedelta
from pathlib import Path
from typing import Any

from isthmus.publish.night import Night
from isthmus.store import story

__all__ = ["nights_of", "replaced"]

# Runs that a night remembers to have replaced; and what it remembers of each.
MOST_REPLACED = 20
REMEMBERED = (
    *("run_id", "definition", "version", "revision", "finished_at", "method", "half_width_widest"),
    *("rows_read", "rows_used", "rows_refused", "parties"),
)


def replaced(night: Night) -> list[dict[str, Any]]:
    """The runs that publishing this night now would replace, newest first, at most the last 20."""
    before = _manifest(night)
    if not before:
        return []
    told = {name: before[name] for name in REMEMBERED if name in before}
    return [told, *before.get("replaces", [])][:MOST_REPLACED]


def nights_of(warehouse: Path, series: str, last: int) -> list[dict[str, Any]]:
    """The `last` days up to the newest night of the series, oldest first, none before its first night.

    Each is {as_of, state} and, of a published night, `run`: its run.json. The state is published, incomplete (some of
    its files are there, and no readable run.json) or missing. Raises StoreError.
    """
    with story("read the warehouse"):
        found = {day for folder in warehouse.glob(f"*/series={series}/as_of=*") if (day := _day(folder.name))}
    if not found:
        return []
    newest = max(found)
    days = [newest - timedelta(days=back) for back in range(min(last, (newest - min(found)).days + 1))]
    nights: list[dict[str, Any]] = []
    for day in reversed(days):
        run = _manifest(Night(warehouse, series, day)) if day in found else None
        state = "published" if run else "incomplete" if day in found else "missing"
        nights.append({"as_of": day, "state": state} | ({"run": run} if run else {}))
    return nights


def _day(name: str) -> date | None:
    try:
        return date.fromisoformat(name.removeprefix("as_of="))
    except ValueError:
        return None


def _manifest(night: Night) -> dict[str, Any] | None:
    """What run.json tells, or None when there is none or it is not readable: then the night is not complete."""
    try:
        with story("read"):
            told = json.loads(night.manifest.read_text(encoding="utf-8")) if night.manifest.exists() else None
    except ValueError:
        return None
    return told if isinstance(told, dict) else None
