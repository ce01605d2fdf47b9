"""One night's tables and manifest, written beside their places and renamed, `run.json` last."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

import polars as pl

from isthmus.betweenness import Estimate
from isthmus.store import Batch
from isthmus.tables import REFUSED, RUNS, SCORES, TIES, Table, conform

__all__ = ["Night", "publish"]


@dataclass(frozen=True)
class Night:
    """Where a night's files are: one folder per table, named so that any engine reads series and as_of from it."""

    warehouse: Path
    series: str
    as_of: date

    def file(self, table: str, name: str) -> Path:
        return self.warehouse / table / f"series={self.series}" / f"as_of={self.as_of}" / name

    def table(self, table: str) -> Path:
        return self.file(table, f"{table}.parquet")

    @property
    def manifest(self) -> Path:
        return self.file("runs", "run.json")


def publish(
    night: Night,
    *,
    run: dict[str, Any],
    estimate: Estimate,
    parties: pl.DataFrame,
    ties: pl.DataFrame,
    refused: pl.DataFrame,
    top: int,
    more: dict[str, Any],
) -> pl.DataFrame:
    """Publish a night and return its scores.

    `run` holds the columns of the table `runs`; `more` is what run.json tells beyond them. Raises StoreError; until
    the last rename the night has no run.json, so a reader can tell an incomplete night.
    """
    marked = pl.lit(run["run_id"]).alias("run_id")
    scores = conform(
        estimate.frame(top).join(parties, on="party", how="left", maintain_order="left").with_columns(marked), SCORES
    )
    plain_ties = ties.with_columns(pl.col("sender", "receiver").cast(pl.String), marked)
    frames: list[tuple[Table, pl.DataFrame]] = [
        (SCORES, scores),
        (TIES, conform(plain_ties, TIES)),
        (REFUSED, conform(refused.with_columns(marked), REFUSED)),
        (RUNS, conform(pl.DataFrame([run], schema=RUNS.schema), RUNS)),
    ]
    manifest = json.dumps(run | more, indent=2, default=str, ensure_ascii=False) + "\n"
    with Batch() as batch:
        for table, frame in frames:
            batch.add(night.table(table.name), lambda path, frame=frame: frame.write_parquet(path))  # type: ignore[misc]
        batch.add(night.manifest, lambda path: path.write_text(manifest, encoding="utf-8"))
        batch.commit()
    return scores
