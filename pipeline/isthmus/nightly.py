"""One night, from log to published tables: the order of the stages, and nothing else."""

from __future__ import annotations

import shutil
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl

from isthmus import store
from isthmus.betweenness import Checkpoint, measure
from isthmus.cluster import open_door
from isthmus.deadline import Deadline
from isthmus.endings import told
from isthmus.gates import FIRST_PARTIES, Gatekeeper
from isthmus.graph import Graph, describe
from isthmus.ingest import drift, read_window, survey
from isthmus.publish import (
    Night,
    checkpoint_key,
    counted_before,
    input_id_of,
    manifest,
    plan_once,
    publish,
    record_of,
    reference,
    refresh_views,
    remember,
    revision_of,
    run_id_of,
    run_row,
    volume_of,
)
from isthmus.settings import Settings, mapped
from isthmus.signals import follow
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


def run_night(
    settings: Settings,
    as_of: date,
    watch: Watch,
    accept: frozenset[str] = frozenset(),
    frozen: Sequence[date] = (),
    deadline: Deadline | None = None,
) -> Outcome:
    """Read, measure, publish. Raises the errors of errors.py; whatever was published before stays until the end.

    accept: gates whose stop is published knowingly. frozen: published nights that late rows have changed and that are
    left as they are, for the record. deadline: one that several nights share, else the night's own.
    """
    deadline = deadline or Deadline.of(settings, datetime.now())
    with follow(settings, *window_of(settings, as_of), watch) as tell:
        outcome = _leased(settings, as_of, watch, accept, frozen, deadline)
        tell(outcome.manifest)
    return outcome


def _leased(
    settings: Settings,
    as_of: date,
    watch: Watch,
    accept: frozenset[str],
    frozen: Sequence[date],
    deadline: Deadline,
) -> Outcome:
    """The night, with both folders to itself: the work folder, and the series in the warehouse."""
    work, leased = settings.work, f"series={settings.series}"
    warehouse = store.place(settings.run.warehouse, scratch=work / "outgoing")
    warehouse.claim(LAYOUT, "run.warehouse")
    store.claim(work, LAYOUT, "run.work")
    with store.lease(store.Folder(work), leased), store.lease(warehouse, leased) as held:
        with held.guard():
            warehouse.sweep(settings.series)
        store.sweep(work)
        with told(work, as_of, watch):
            return _measured_and_published(
                settings, Night(warehouse, settings.series, as_of), work, watch, accept, frozen, deadline, held
            )


def _measured_and_published(
    settings: Settings,
    night: Night,
    work: Path,
    watch: Watch,
    accept: frozenset[str],
    frozen: Sequence[date],
    deadline: Deadline,
    held: store.Lease,
) -> Outcome:
    started_at = datetime.now(UTC)
    as_of = night.as_of
    first_day, last_day = window_of(settings, as_of)
    before = reference(night)
    gatekeeper = Gatekeeper(settings.gates, watch.warning, accept, watch.gate)
    run = settings.run
    with open_door(
        workers=run.workers,
        threads=run.threads,
        scheduler=run.scheduler,
        scratch=str(work),
        memory=run.memory_bytes,
    ) as door:
        with watch.stage("survey"):
            found = survey(settings.log, first_day, last_day, door)
        reading = read_window(
            found, settings.ties, settings.reading, work, door, watch, deadline.reading, settings.privacy
        )
        watch.know(rows_read=reading.rows_read, **{f"rows_{name}": reading.rows(name) for name in reading.outcomes})
        gatekeeper.after_reading(
            rows=reading.rows_in_window,
            refused=reading.outcomes["refused"],
            missing_days=reading.missing_days,
            volume=volume_of(night) | reading.volume,
            volume_before=(before.volume if before else {}) | counted_before(night),
            last_day=last_day,
            drift=drift(before.columns, found.schema, mapped(settings.log.columns).values())
            if before and before.columns
            else {},
            before=before,
        )
        with watch.stage("graph"):
            held.check()
            built = Graph.from_ties(reading.ties, directed=settings.graph.directed, distance=settings.graph.distance)
            built.save(store.fresh(work / "snapshot"))
            graph = Graph.open(work / "snapshot")
            parties = describe(graph, reading.ties)
        watch.know(parties=graph.n, ties=graph.ties)
        input_id = input_id_of(settings, as_of, reading)
        score = settings.score.model_copy(update={"minutes": deadline.minutes_for_scoring(graph.n, graph.ties)})
        with watch.stage("plan"):
            plan = plan_once(work / "plan.json", input_id, graph, score, run)
        checkpoint = Checkpoint(work / "checkpoint", checkpoint_key(input_id, plan))
        with watch.stage("score") as tick:
            estimate = measure(graph, plan, score, run.threads, tick, door if run.elsewhere else None, checkpoint)
        remember(work / "plan.json", input_id, plan, estimate)
    run_id = run_id_of(settings.series, as_of, input_id, estimate)
    watch.know(run_id=run_id)
    if graph.n < 3:
        watch.warning(f"{graph.n} parties: with fewer than three nobody can stand between others, so all scores are 0")
    component_share = int((parties["component"] == 0).sum()) / max(graph.n, 1)
    gatekeeper.after_scoring(
        component_share=component_share,
        first_parties=frozenset(estimate.frame(settings.score.top).head(FIRST_PARTIES)["party"]),
        before=before,
    )
    row = run_row(
        settings, run_id, first_day, plan, estimate, graph, reading, watch, started_at,
        revision=revision_of(record_of(night), run_id), gates=watch.gates,
    )  # fmt: skip
    more = manifest(settings, night, found, reading, plan, watch, component_share, frozen)
    with watch.stage("publish"):
        scores = publish(
            night,
            run=row,
            estimate=estimate,
            parties=parties,
            ties=reading.ties,
            known=reading.parties,
            refused=reading.refused,
            top=settings.score.top,
            more=more,
            guard=held.guard,
        )
        if trouble := refresh_views(night.warehouse):
            watch.warning(trouble)
    checkpoint.clear()
    if settings.privacy.pseudonyms:  # nothing in clear stays of the nights before the pseudonyms
        shutil.rmtree(settings.clear_reading, ignore_errors=True)
        night.warehouse.remove_earlier(night.name, held.guard)
    return Outcome(night, scores, row | more)
