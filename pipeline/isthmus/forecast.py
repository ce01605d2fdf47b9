"""What a night would read and do, found out without writing a byte to the warehouse or the work folder."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date
from math import log

from isthmus import store
from isthmus.betweenness import Plan, make_plan
from isthmus.cluster import open_door
from isthmus.errors import GateStopped
from isthmus.gates import Gatekeeper
from isthmus.graph import Graph
from isthmus.ingest import Sample, Survey, Window, drift, in_window, sample_window, survey
from isthmus.privacy import open_pseudonyms
from isthmus.publish import Night, counted_before, reference, volume_of
from isthmus.settings import Settings, mapped
from isthmus.tables import LAYOUT

__all__ = ["Forecast", "foresee"]

# As many rows as are read in a few seconds; a window no larger than this is looked at whole.
SAMPLE_ROWS = 2_000_000


@dataclass(frozen=True)
class Forecast:
    """`sampled_rows` of `found.rows` were read; where that is less than all, parties and ties are extrapolated.

    `warnings` are the night's own, `stopped` is why a gate would stop it, empty when none would.
    """

    first_day: date
    last_day: date
    found: Survey
    sampled_rows: int
    window: Window
    parties: int
    ties: int
    plan: Plan
    warnings: tuple[str, ...]
    stopped: str

    @property
    def whole(self) -> bool:
        return self.sampled_rows >= self.found.rows


def foresee(settings: Settings, first_day: date, last_day: date) -> Forecast:
    """Survey the log, read a sample of the window, and plan. Raises what a night would raise for the same faults."""
    store.place(settings.run.warehouse).examine(LAYOUT, "run.warehouse")
    store.examine(settings.work, LAYOUT, "run.work")
    open_pseudonyms(settings.privacy, settings.log.kind)  # what is looked at stays in memory, so without any
    with open_door(threads=settings.run.threads) as door:
        found = survey(settings.log, first_day, last_day, door)
    sample = sample_window(found, settings.ties, SAMPLE_ROWS)
    window = sample.window
    graph = Graph.from_ties(window.ties, directed=settings.graph.directed, distance=settings.graph.distance)
    plan = make_plan(graph, settings.score, settings.run.threads, settings.run.memory_bytes)
    parties, ties = graph.n, graph.ties
    if sample.rows < found.rows:
        half = Graph.from_ties(sample.half, directed=settings.graph.directed)
        growth = found.rows / sample.rows
        parties, ties = _grown(half.n, graph.n, growth), _grown(half.ties, graph.ties, growth)
        plan = _scaled(plan, (parties * ties) / (graph.n * graph.ties), ties / graph.ties)
    warnings, stopped = _gates(settings, first_day, last_day, found, sample)
    return Forecast(first_day, last_day, found, sample.rows, window, parties, ties, plan, warnings, stopped)


def _gates(
    settings: Settings, first_day: date, last_day: date, found: Survey, sample: Sample
) -> tuple[tuple[str, ...], str]:
    """What the gates say of the rows looked at. Days can only be missed, and counted, where all rows were."""
    whole = sample.rows >= found.rows
    night = Night.of(settings.run.warehouse, settings.series, last_day)
    before = reference(night)
    used = list(mapped(settings.log.columns).values())
    warnings: list[str] = []
    try:
        Gatekeeper(settings.gates, warnings.append).after_reading(
            rows=in_window(sample.window.outcomes),
            refused=sample.window.outcomes["refused"],
            missing_days=sample.window.missing_days if whole else (),
            volume=volume_of(night) | sample.window.volume if whole else {},
            volume_before=(before.volume if before else {}) | counted_before(night) if whole else {},
            last_day=last_day,
            drift=drift(before.columns, found.schema, used) if before and before.columns else {},
            before=before,
        )
    except GateStopped as stop:
        return tuple(warnings), str(stop)
    return tuple(warnings), ""


def _grown(half: int, whole: int, growth: float) -> int:
    """Extrapolate a number of distinct things: they grow as a power of the rows (Heaps' law), fitted to two points."""
    power = min(1.0, max(0.0, log(whole / half, 2))) if half else 1.0
    return int(whole * growth**power)


def _scaled(plan: Plan, time: float, memory: float) -> Plan:
    """The plan of the sample for the whole window. Exact grows as parties × ties, a fixed sample only as ties."""
    slower = time if plan.method == "exact" else memory
    return replace(
        plan,
        predicted_seconds=plan.predicted_seconds * slower,
        predicted_bytes=int(plan.predicted_bytes * memory),
        reason=f"on the rows looked at: {plan.reason}",
    )
