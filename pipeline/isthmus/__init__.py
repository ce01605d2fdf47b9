"""isthmus: who lies between the others, measured nightly, with an honest error bound beside every score."""

from __future__ import annotations

from importlib.metadata import version as _version
from typing import TYPE_CHECKING as _TYPE_CHECKING

from isthmus.betweenness import Estimate, betweenness
from isthmus.companions import companions
from isthmus.errors import IsthmusError
from isthmus.graph import Graph

if _TYPE_CHECKING:
    from datetime import date
    from pathlib import Path

    from isthmus.nightly import Outcome
    from isthmus.warehouse import Warehouse

__all__ = ["Estimate", "Graph", "IsthmusError", "__version__", "betweenness", "companions", "read", "score"]

__version__ = _version("isthmus")


def score(config: str | Path, as_of: str | date | None = None) -> Outcome:
    """Run one night and return its Outcome: `.scores` (a Polars frame), `.manifest`, `.night`.

    `config` is the path of a TOML file, `as_of` the last day of the window (yesterday, UTC, when None). Raises the
    errors of isthmus.errors.
    """
    from datetime import date

    from isthmus.nightly import run_night, yesterday
    from isthmus.settings import load
    from isthmus.watch import Watch

    day = date.fromisoformat(as_of) if isinstance(as_of, str) else as_of
    return run_night(load(config), day or yesterday(), Watch())


def read(warehouse: str | Path, *, series: str | None = None, as_of: date | str | None = None) -> Warehouse:
    """The tables of a warehouse as lazy Polars frames: `.scores`, `.ties`, `.parties`, `.refused`, `.runs`.

    `warehouse` is a folder, or the URL of an object store that the environment has credentials for. Of each series, or
    of the one that is named: its latest night, or that of `as_of`, or with "all" every night. Frames have the columns
    series and as_of first, and all frames of what is returned are of the same runs, whatever is published meanwhile.
    Raises StoreError when there is no warehouse, no such series or no such night; AttributeError for an unknown table.
    """
    from isthmus.warehouse import read as read_warehouse

    return read_warehouse(str(warehouse), series, as_of)
