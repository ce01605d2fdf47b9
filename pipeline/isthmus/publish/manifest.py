"""What a night tells of itself: its id, its row of `runs`, and the rest of run.json."""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import platform
from collections.abc import Sequence
from dataclasses import asdict
from datetime import UTC, date, datetime
from typing import Any

import numpy as np
import polars as pl

from isthmus.betweenness import Estimate, Plan
from isthmus.graph import Graph
from isthmus.ingest import Survey, Window
from isthmus.publish.earlier import replaced
from isthmus.publish.night import Night
from isthmus.settings import Settings
from isthmus.tables import LAYOUT
from isthmus.watch import Watch

__all__ = ["input_id_of", "manifest", "revision_of", "run_id_of", "run_row"]


def run_id_of(series: str, as_of: date, input_id: str, estimate: Estimate) -> str:
    """The same night, settings, version and input, measured to the same number of samples, give the same id.

    So a re-run gives the same bytes, and two runs that the clock stopped at different places have different ids.
    """
    told = f"{input_id} {estimate.method} {estimate.samples}"
    return f"{series}-{as_of}-{hashlib.blake2b(told.encode(), digest_size=8).hexdigest()}"


def revision_of(before: dict[str, Any], run_id: str) -> int:
    """1 for a night's first content, one more for other content. `before`: what run.json tells now, if anything."""
    known = int(before.get("revision", 0))
    return max(known, 1) if before.get("run_id") == run_id else known + 1


def input_id_of(settings: Settings, as_of: date, reading: Window) -> str:
    """A hash of all that goes into a night's measurement."""
    digest = hashlib.blake2b(digest_size=8)
    told = [settings.series, str(as_of), settings.definition, _version(), reading.outcomes, settings.score.top]
    told += [reading.key_id] if reading.key_id else []
    digest.update(json.dumps(told, sort_keys=True).encode())
    for column in reading.parties.iter_columns():
        digest.update("\0".join(column.cast(pl.String).fill_null("")).encode())
    for column in reading.ties.iter_columns():
        if column.null_count() < len(column):
            digest.update(np.ascontiguousarray(column.to_physical().to_numpy()).data)
    return digest.hexdigest()


def run_row(
    settings: Settings,
    run_id: str,
    first_day: date,
    plan: Plan,
    estimate: Estimate,
    graph: Graph,
    reading: Window,
    watch: Watch,
    started_at: datetime,
    revision: int,
    gates: list[dict[str, Any]],
) -> dict[str, Any]:
    """The columns of `runs`."""
    widths = estimate.half_widths
    return {
        "run_id": run_id,
        "window_start": first_day,
        "definition": settings.definition,
        "key_id": reading.key_id,
        "revision": revision,
        "version": _version(),
        "method": estimate.method,
        "engine": estimate.engine,
        "reason": plan.reason,
        "samples": estimate.samples,
        "seed": estimate.seed,
        "confidence": estimate.confidence,
        "half_width_widest": float(widths.max()),
        "half_width_median": float(np.median(widths)),
        "stopped_because": estimate.stopped_because,
        "parties": graph.n,
        "ties": graph.ties,
        "rows_read": reading.rows_read,
        **{f"rows_{outcome}": reading.rows(outcome) for outcome in ("used", "refused", "filtered", "duplicate")},
        "outcomes": [
            {"outcome": outcome, "reason": reason, "rows": rows}
            for outcome, reasons in reading.outcomes.items()
            for reason, rows in reasons.items()
        ],
        "warnings": "; ".join(watch.warnings),
        "gates": [{key: gate[key] for key in ("gate", "state", "figure", "limit")} for gate in gates],
        "predicted_seconds": plan.predicted_seconds,
        "predicted_bytes": float(plan.predicted_bytes),
        "seconds": [{"stage": stage, "seconds": seconds} for stage, seconds in watch.seconds.items()],
        "peak_memory_bytes": watch.peak_memory(),
        "started_at": started_at,
        "finished_at": datetime.now(UTC),
    }


def manifest(
    settings: Settings,
    night: Night,
    found: Survey,
    reading: Window,
    plan: Plan,
    watch: Watch,
    component_share: float,
    frozen: Sequence[date],
) -> dict[str, Any]:
    """What run.json tells beyond `runs`. Called before the night is published, while the run it replaces is there."""
    return {
        "series": settings.series,
        "as_of": night.as_of,
        "layout": LAYOUT,
        "versions": _versions(plan.engine),
        "seconds": watch.seconds,
        "stages": [
            {"stage": stage, "seconds": seconds, "peak_memory_bytes": watch.peaks[stage]}
            for stage, seconds in watch.seconds.items()
        ],
        "gates": watch.gates,
        "outcomes": reading.outcomes,
        "missing_days": reading.missing_days,
        "plan": asdict(plan),
        "predictions": {
            "score_seconds": {"predicted": plan.predicted_seconds, "measured": watch.seconds["score"]},
            "score_bytes": {"predicted": plan.predicted_bytes, "measured": watch.peaks["score"]},
        },
        "inputs": [
            {
                "file": file.name,
                "bytes": file.size,
                "changed": _moment(file.changed),
                "changed_ns": file.state[1],
                "rows": file.rows,
            }
            for file in found.files
        ],
        "schema": found.schema,
        "volume": {str(day): rows for day, rows in reading.volume.items()},
        "component_share": component_share,
        "late": {"policy": settings.run.late, "not_restated": list(frozen)},
        "settings": settings.model_dump(mode="json"),
        "replaces": replaced(night),
    }


def _versions(engine: str) -> dict[str, str]:
    """Of everything that results could depend on."""
    libraries = ("isthmus", "numpy", "polars", "pyarrow", "dask", engine)
    return {"python": platform.python_version()} | {name: importlib.metadata.version(name) for name in libraries}


def _moment(nanoseconds: int) -> datetime:
    return datetime.fromtimestamp(nanoseconds // 10**9, UTC)


def _version() -> str:
    return importlib.metadata.version("isthmus")
