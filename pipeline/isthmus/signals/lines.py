"""JSON log lines: one object per line and event, for whatever collects logs."""

from __future__ import annotations

import json
import logging
import sys
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from isthmus.settings import Settings
from isthmus.signals.run import Run

__all__ = ["note", "signal"]

LEVELS = {"warning": logging.WARNING, "stopped": logging.ERROR, "failed": logging.ERROR}
GATES = {"warn": logging.WARNING, "stop": logging.ERROR}
# of run.json, in the line that says `published`
SUMMARY = (
    *("method", "samples", "half_width_widest", "stopped_because", "parties", "ties"),
    *("rows_read", "rows_used", "rows_refused", "rows_filtered", "rows_duplicate"),
)


def signal(settings: Settings) -> _Lines:
    return _Lines(settings.signals.log)


def note(settings: Settings, event: str, **figures: Any) -> None:
    """One line of what is no run, if lines are asked for. Unlike a run's signals it raises what goes wrong."""
    if settings.signals.log:
        signal(settings).write(logging.INFO, event, {"series": settings.series} | figures)


class _Lines:
    def __init__(self, target: str) -> None:
        # not of the global tree of loggers: nobody else's settings change these lines, and they change nobody else's
        self._logger = logging.Logger("isthmus.signals")
        handler = _Stream(sys.stderr) if target == "-" else _File(target, encoding="utf-8", delay=True)
        handler.setFormatter(_AsJson())
        self._logger.addHandler(handler)
        self._handler = handler

    def hear(self, event: str, run: Run, figures: dict[str, Any]) -> None:
        level = GATES.get(figures["state"], logging.INFO) if event == "gate" else LEVELS.get(event, logging.INFO)
        self.write(level, event, run.key | figures | (_end(run) if event == run.state else {}))

    def write(self, level: int, event: str, told: dict[str, Any]) -> None:
        self._logger.log(level, event, extra={"told": told})
        self._handler.close()  # opened again by the next line, so that the file may be moved away in between


def _end(run: Run) -> dict[str, Any]:
    told: dict[str, Any] = {"exit_code": run.exit_code, "seconds": run.seconds}
    told["peak_memory_bytes"] = run.watch.peak_memory()
    if run.message:
        return told | ({"stage": run.watch.stage_now} if run.watch.stage_now else {}) | {"message": run.message}
    return told | {name: run.manifest[name] for name in SUMMARY if name in run.manifest}


class _AsJson(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        time = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
        line = {"time": time, "level": record.levelname.lower(), "event": record.getMessage()}
        return json.dumps(line | record.__dict__["told"], default=str)


class _Raising(logging.Handler):
    """The library prints a traceback with what was being logged; here the fault is raised and becomes a warning."""

    def handleError(self, record: logging.LogRecord) -> None:
        raise


class _File(_Raising, logging.FileHandler):
    def emit(self, record: logging.LogRecord) -> None:
        Path(self.baseFilename).parent.mkdir(parents=True, exist_ok=True)
        super().emit(record)


class _Stream(_Raising, logging.StreamHandler):  # type: ignore[type-arg]
    pass
