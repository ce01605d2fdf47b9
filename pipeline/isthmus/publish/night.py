"""One night's tables and manifest, made whole and then put where readers look, `run.json` last."""

from __future__ import annotations

import json
from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

import polars as pl

from isthmus.betweenness import Estimate
from isthmus.store import File, Guard, Place, place
from isthmus.tables import PARTIES, REFUSED, RUNS, SCORES, TABLES, TIES, Table, conform

__all__ = ["Night", "publish", "publish_without"]


@dataclass(frozen=True)
class Night:
    """Where a night's files are: one folder per table, named so that any engine reads series and as_of from it.

    `str(warehouse)` is the folder or URL, as settings have it.
    """

    warehouse: Place
    series: str
    as_of: date

    @classmethod
    def of(cls, warehouse: str | Path, series: str, as_of: date) -> Night:
        """The night in the warehouse that a setting names. Raises SettingsError when its driver is missing."""
        return cls(place(warehouse), series, as_of)

    @property
    def name(self) -> str:
        return f"series={self.series}/as_of={self.as_of}"

    def path(self, table: str, name: str = "") -> str:
        """Below the warehouse. `name`: of the file, when it is not the table itself."""
        return f"{table}/{self.name}/{name or f'{table}.parquet'}"

    def fetch(self, table: str, name: str = "") -> bytes | None:
        """The bytes of a published file, None where there is none. Raises StoreError."""
        return self.warehouse.fetch(self.path(table, name))

    def table(self, table: str) -> str:
        return f"{self.warehouse}/{self.path(table)}"


def publish(
    night: Night,
    *,
    run: dict[str, Any],
    estimate: Estimate,
    parties: pl.DataFrame,
    ties: pl.DataFrame,
    known: pl.DataFrame,
    refused: pl.DataFrame,
    top: int,
    more: dict[str, Any],
    guard: Guard = nullcontext,
) -> pl.DataFrame:
    """Publish a night and return its scores.

    `parties` is what the graph tells of each party, `known` what the log does (party, kind, side, label).
    `run` holds the columns of the table `runs`; `more` is what run.json tells beyond them, to which the
    sizes of the tables are added; `guard` is the lease's.
    Raises StoreError, and TryAgain when the lease was lost. How a night switches is told in store/folder.py and
    store/bucket.py.
    """
    marked = pl.lit(run["run_id"]).alias("run_id")
    scores = conform(
        estimate.frame(top).join(parties, on="party", how="left", maintain_order="left").with_columns(marked), SCORES
    )
    plain_ties = ties.with_columns(pl.col("sender", "receiver").cast(pl.String), marked)
    frames: list[tuple[Table, pl.DataFrame]] = [
        (SCORES, scores),
        (TIES, conform(plain_ties, TIES)),
        (PARTIES, conform(_known(known, scores["party"]).with_columns(marked), PARTIES)),
        (REFUSED, conform(refused.with_columns(marked), REFUSED)),
        (RUNS, conform(pl.DataFrame([run], schema=RUNS.schema), RUNS)),
    ]
    more.setdefault("tables", {})
    told = run | more
    _put(night, frames, told, guard)
    return scores


def publish_without(night: Night, told: dict[str, Any], keys: Sequence[str], warning: str, guard: Guard) -> int:
    """Publish a night again without the rows that hold one of `keys`: one revision more, a warning more.

    All else stays as it is: other parties' scores, counts and ranks, and the run's id. `told`: the night's run.json.
    Returns how many rows went; where there are none nothing is published. Raises StoreError, and TryAgain when the
    lease was lost.
    """
    frames, gone = list[tuple[Table, pl.DataFrame]](), 0
    for table in TABLES.values():
        if (stored := night.fetch(table.name)) is not None:
            frame = pl.read_parquet(stored)
            sides = [name for name in ("party", "sender", "receiver") if name in frame.columns]
            left = frame.filter(~pl.any_horizontal(pl.lit(False), *(pl.col(name).is_in(keys) for name in sides)))
            gone += frame.height - left.height
            frames.append((table, left))
    if gone:
        news = {
            "revision": max(int(told.get("revision", 1)), 1) + 1,
            "warnings": "; ".join(filter(None, (told.get("warnings"), warning))),
        }
        marked = [pl.lit(value).cast(RUNS.schema[name]).alias(name) for name, value in news.items()]
        frames = [(table, frame.with_columns(marked) if table is RUNS else frame) for table, frame in frames]
        _put(night, frames, told | news | {"tables": {}}, guard)
    return gone


def _put(night: Night, frames: list[tuple[Table, pl.DataFrame]], told: dict[str, Any], guard: Guard) -> None:
    """Publish tables and run.json, to which the sizes of the tables are added while they are written."""
    files = [
        *(_table_file(night, table, frame, told["tables"]) for table, frame in frames),
        File(
            night.path("runs", "run.json"),
            lambda path: path.write_text(
                json.dumps(told, indent=2, default=str, ensure_ascii=False) + "\n", encoding="utf-8"
            ),
        ),
    ]
    night.warehouse.publish(night.name, files, guard)


def _known(parties: pl.DataFrame, keys: pl.Series) -> pl.DataFrame:
    """Those of `keys`, as the table says it."""
    side = pl.col("side").cast(pl.String)
    return parties.select(
        pl.col("party", "kind").cast(pl.String),
        side,
        "label",
        fully_observed=pl.when(side != "unknown").then(side == "internal"),
    ).filter(pl.col("party").is_in(keys.implode()))


def _table_file(night: Night, table: Table, frame: pl.DataFrame, sizes: dict[str, Any]) -> File:
    """The table's file. What was written is told in `sizes`, so that who comes later can tell whether it is whole."""

    def write(path: Path) -> None:
        frame.write_parquet(path)
        sizes[table.name] = {"rows": frame.height, "bytes": path.stat().st_size}

    return File(night.path(table.name), write, frame.clear().write_parquet)
