"""One attempt at a night, as the signals see it."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import UTC, date, datetime
from typing import Any, Protocol

from isthmus.errors import AskedToStop, GateStopped, IsthmusError, TryAgain, exit_code_of, places_of
from isthmus.settings import Settings
from isthmus.watch import Watch

__all__ = ["Run", "Signal"]


@dataclass
class Run:
    """`state`: running, published, stopped (on purpose, nothing was published) or failed.

    `manifest`: what run.json tells, once published. `ended_at`, `exit_code` and `message` are set at the end; the
    message names files, columns and counts, and of an internal error its kind and place alone.
    """

    settings: Settings
    first_day: date
    as_of: date
    watch: Watch
    started_at: datetime = field(default_factory=lambda: datetime.now(UTC))
    ended_at: datetime | None = None
    state: str = "running"
    exit_code: int = 0
    message: str = ""
    from_outside: bool = False
    manifest: dict[str, Any] = field(default_factory=dict)

    @property
    def key(self) -> dict[str, Any]:
        """What names the run: series, as_of, and run_id once it is known."""
        known = self.manifest.get("run_id") or self.watch.known.get("run_id")
        return {"series": self.settings.series, "as_of": str(self.as_of)} | ({"run_id": known} if known else {})

    @property
    def figures(self) -> dict[str, Any]:
        """What is known of the night's columns of `runs` so far."""
        return self.watch.known | self.manifest

    @property
    def seconds(self) -> float:
        return ((self.ended_at or datetime.now(UTC)) - self.started_at).total_seconds()

    def published(self, manifest: dict[str, Any]) -> None:
        self.manifest, self.state, self.ended_at = manifest, "published", datetime.now(UTC)

    def ended_in(self, error: BaseException) -> None:
        """Remember what ended it. `from_outside`: it was asked to stop or had to wait; its own work found no fault."""
        self.ended_at = datetime.now(UTC)
        self.exit_code = exit_code_of(error)
        self.from_outside = isinstance(error, TryAgain | AskedToStop | KeyboardInterrupt)
        self.state = "stopped" if self.from_outside or isinstance(error, GateStopped) else "failed"
        self.message = _message(error)


class Signal(Protocol):
    """One way of telling. `hear` gets every event, in order; the first is run_started, the last the run's end state."""

    def hear(self, event: str, run: Run, figures: dict[str, Any]) -> None: ...


def _message(error: BaseException) -> str:
    """What may be told to anyone. A library's message may quote the log, so only our own are passed on."""
    if isinstance(error, IsthmusError | AskedToStop):
        return str(error)
    if isinstance(error, KeyboardInterrupt):
        return "interrupted from the keyboard"
    if isinstance(error, OSError) and error.strerror:
        return error.strerror + (f": {error.filename}" if error.filename else "")
    return "; ".join((f"internal error: {type(error).__name__}", *places_of(error)))
