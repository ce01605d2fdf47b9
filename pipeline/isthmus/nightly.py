"""One night, from log to published tables: the order of the stages, and nothing else."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl

from isthmus import store
from isthmus.betweenness import measure
from isthmus.cluster import open_door
from isthmus.gates import pass_gates
from isthmus.graph import Graph, describe
from isthmus.ingest import read_window, survey
from isthmus.publish import Night, input_id_of, manifest, plan_once, publish, remember, run_id_of, run_row
from isthmus.settings import Settings
from isthmus.tables import LAYOUT
from isthmus.watch import Watch

__all__ = ["Outcome", "run_night", "window_of", "yesterday"]


@dataclass(frozen=True)
class Outcome:
    """A published night: where it is, its scores, its row of `runs`, and what run.json tells."""

    night: Night
    scores: pl.DataFrame
    manifest: dict[str, Any]


def yesterday() -> date:
    """The last whole day in UTC: what a job that starts after midnight is about."""
    return datetime.now(UTC).date() - timedelta(days=1)


def window_of(settings: Settings, as_of: date) -> tuple[date, date]:
    return as_of - timedelta(days=settings.window.days - 1), as_of


def run_night(settings: Settings, as_of: date, watch: Watch) -> Outcome:
    """Read, measure, publish. Raises the errors of errors.py; whatever was published before stays until the end."""
    started_at = datetime.now(UTC)
    first_day, last_day = window_of(settings, as_of)
    warehouse, work = Path(settings.run.warehouse), Path(settings.run.work) / f"series={settings.series}"
    store.claim(warehouse, LAYOUT, "run.warehouse")
    store.claim(work, LAYOUT, "run.work")
    store.sweep(warehouse, f"*/series={settings.series}/*")
    store.sweep(work)
    run = settings.run
    with open_door(workers=run.workers, threads=run.threads, scheduler=run.scheduler, scratch=str(work)) as door:
        with watch.stage("survey"):
            found = survey(settings.log, first_day, last_day, door)
        reading = read_window(found, settings.log, first_day, last_day, work, door, watch)
        pass_gates(
            settings.gates,
            rows=reading.rows_in_window,
            refused=reading.outcomes["refused"],
            missing_days=reading.missing_days,
            warn=watch.warning,
        )
        with watch.stage("graph"):
            built = Graph.from_ties(reading.ties, directed=settings.graph.directed, distance=settings.graph.distance)
            built.save(store.fresh(work / "snapshot"))
            graph = Graph.open(work / "snapshot")
            parties = describe(graph, reading.ties)
        input_id = input_id_of(settings, as_of, reading)
        with watch.stage("plan"):
            plan = plan_once(work / "plan.json", input_id, graph, settings)
        with watch.stage("score") as tick:
            estimate = measure(graph, plan, settings.score, run.threads, tick, door if run.elsewhere else None)
        remember(work / "plan.json", input_id, plan, estimate)
    run_id = run_id_of(settings.series, as_of, input_id, estimate)
    if graph.n < 3:
        watch.warning(f"{graph.n} parties: with fewer than three nobody can stand between others, so all scores are 0")
    night = Night(warehouse, settings.series, as_of)
    row = run_row(settings, run_id, first_day, plan, estimate, graph, reading, watch, started_at)
    more = manifest(settings, as_of, found, reading, plan, watch)
    with watch.stage("publish"):
        scores = publish(
            night,
            run=row,
            estimate=estimate,
            parties=parties,
            ties=reading.ties,
            refused=reading.refused,
            top=settings.score.top,
            more=more,
        )
    return Outcome(night, scores, row | more)
