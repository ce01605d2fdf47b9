"""A Prometheus text file for the node exporter's textfile collector, written when a run has ended, however it ended.

Units are base units; the labels are `series` and a few fixed words, never anything of the log.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from prometheus_client import CollectorRegistry, Gauge, write_to_textfile
from prometheus_client.parser import text_string_to_metric_families

from isthmus.errors import SettingsError
from isthmus.settings import Settings
from isthmus.signals.run import Run

__all__ = ["signal"]

SUCCESS_AT = "isthmus_last_success_timestamp_seconds"
# column of `runs` -> metric, help
FIGURES = {
    "parties": ("isthmus_parties", "Parties in the graph."),
    "ties": ("isthmus_ties", "Ties in the graph."),
    "half_width_widest": ("isthmus_half_width_widest", "Half the length of the widest interval, as a share."),
}
OUTCOMES = ("used", "refused", "filtered", "duplicate")
STATES = ("ok", "warn", "stop", "off", "accepted", "nothing to compare with")


def signal(settings: Settings) -> _Metrics:
    """Raises SettingsError when the file holds another series' figures."""
    path = settings.signals.prometheus
    others = {series for _, series, _ in _samples(path)} - {settings.series}
    if others:
        raise SettingsError(
            f'signals.prometheus = "{path}" holds the figures of series "{min(others)}"; name a file for each series'
        )
    return _Metrics(path)


class _Metrics:
    def __init__(self, path: str) -> None:
        self._path = path

    def hear(self, event: str, run: Run, figures: dict[str, Any]) -> None:
        if event == run.state:
            Path(self._path).parent.mkdir(parents=True, exist_ok=True)
            # the library writes beside it under a name that the collector does not read, and renames
            write_to_textfile(self._path, _registry(run, self._earlier_success()))

    def _earlier_success(self) -> float | None:
        return next((value for name, _, value in _samples(self._path) if name == SUCCESS_AT), None)


def _samples(path: str) -> list[tuple[str, str, float]]:
    """(metric, series, value) of the file as it stands; none when it is not there or not readable as metrics."""
    try:
        families = list(text_string_to_metric_families(Path(path).read_text(encoding="utf-8")))
    except Exception:  # not there, or whatever the parser trips over in a file that is not ours
        return []
    return [(s.name, s.labels.get("series", ""), s.value) for family in families for s in family.samples]


def _registry(run: Run, earlier_success: float | None) -> CollectorRegistry:
    registry = CollectorRegistry()

    def gauge(name: str, meaning: str, values: Mapping[Any, float], *labels: str) -> None:
        """`values`: words of the labels after `series` -> value."""
        if not values:
            return
        metric = Gauge(name, meaning, ["series", *labels], registry=registry)
        for words, value in values.items():
            metric.labels(run.settings.series, *words).set(value)

    assert run.ended_at is not None
    published, now, watch = run.state == "published", run.ended_at.timestamp(), run.watch
    success = now if published else earlier_success
    gauge("isthmus_last_run_success", "Whether the last run published: 1 yes, 0 no.", {(): published})
    gauge("isthmus_last_run_exit_code", "Exit code of the last run.", {(): run.exit_code})
    gauge("isthmus_last_run_timestamp_seconds", "When the last run ended.", {(): now})
    gauge(SUCCESS_AT, "When a run last published.", {} if success is None else {(): success})
    gauge("isthmus_run_duration_seconds", "How long the last run took.", {(): run.seconds})
    gauge("isthmus_peak_memory_bytes", "Largest resident memory of the last run.", {(): watch.peak_memory()})
    stages = {(stage,): seconds for stage, seconds in watch.seconds.items()}
    gauge("isthmus_stage_duration_seconds", "How long each stage of the last run took.", stages, "stage")
    rows = {(name,): run.figures[f"rows_{name}"] for name in OUTCOMES if f"rows_{name}" in run.figures}
    gauge("isthmus_rows", "Log rows of the last run by what became of them.", rows, "outcome")
    gates = {(gate["gate"], state): float(gate["state"] == state) for gate in watch.gates for state in STATES}
    gauge("isthmus_gate", "How each gate judged the last run: 1 for its state.", gates, "gate", "state")
    for column, (name, meaning) in FIGURES.items():
        gauge(name, meaning, {(): run.figures[column]} if column in run.figures else {})
    return registry
