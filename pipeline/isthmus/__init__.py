"""isthmus: who lies between the others, measured nightly, with an honest error bound beside every score."""

from __future__ import annotations

from importlib.metadata import version as _version
from typing import TYPE_CHECKING as _TYPE_CHECKING

from isthmus.betweenness import Estimate, betweenness
from isthmus.errors import IsthmusError
from isthmus.graph import Graph

if _TYPE_CHECKING:
    from datetime import date
    from pathlib import Path

    from isthmus.nightly import Outcome

__all__ = ["Estimate", "Graph", "IsthmusError", "__version__", "betweenness", "score"]

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
