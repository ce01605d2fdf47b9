"""What a run tells while it works and remembers for its manifest: stages, time, memory, gates, figures, warnings."""

from __future__ import annotations

import resource
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

__all__ = ["Watch"]

PAUSE = 0.05  # seconds between two looks at the memory


@dataclass
class Watch:
    """People hear through `tell` and `warn`, machines through `listeners`.

    `tell` hears (stage, share done): 0 when a stage begins, 1 when it has ended. A listener hears (event, figures) of
    stage_started, stage_ended, warning and gate. `seconds` and `peaks` (bytes) are per stage, `known` holds figures of
    the night as soon as they are known, `stage_now` is the stage at work: where it was when the night failed.
    """

    tell: Callable[[str, float], None] = lambda stage, share: None
    warn: Callable[[str], None] = lambda text: None
    listeners: list[Callable[[str, dict[str, Any]], None]] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)
    peaks: dict[str, int] = field(default_factory=dict)
    gates: list[dict[str, Any]] = field(default_factory=list)
    known: dict[str, Any] = field(default_factory=dict)
    warnings: list[str] = field(default_factory=list)
    stage_now: str = ""

    @contextmanager
    def stage(self, name: str) -> Iterator[Callable[[float], None]]:
        """Time a stage and measure its memory. Yields the function that takes the share done, 0..1."""
        began = time.perf_counter()
        self.stage_now = name
        self._note("stage_started", stage=name)
        self.tell(name, 0.0)
        with _Peak() as peak:
            yield lambda share: self.tell(name, min(share, 0.999))
        self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - began
        self.peaks[name] = max(self.peaks.get(name, 0), peak.bytes)
        self.stage_now = ""
        self.tell(name, 1.0)
        self._note("stage_ended", stage=name, seconds=self.seconds[name], peak_memory_bytes=self.peaks[name])

    def anew(self) -> Watch:
        """One for another night, that is told and warned the same way."""
        return Watch(self.tell, self.warn)

    def warning(self, text: str) -> None:
        """Remember and say something a person should know; it does not stop the night."""
        self.warnings.append(text)
        self.warn(text)
        self._note("warning", message=text)

    def gate(self, name: str, figure: float | None, limit: float, state: str) -> None:
        """Remember how a gate judged. `state`: see gates.State; `figure`: None where there was nothing to judge."""
        told = {"gate": name, "figure": figure, "limit": limit, "state": state}
        self.gates.append(told)
        self._note("gate", **told)

    def know(self, **figures: Any) -> None:
        """Figures of the night, from now on. Names and numbers only, never a party's key."""
        self.known.update(figures)

    def _note(self, event: str, **figures: Any) -> None:
        for listener in self.listeners:
            listener(event, figures)

    @staticmethod
    def peak_memory() -> int:
        """Largest resident memory of this process so far, in bytes."""
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        return peak if sys.platform == "darwin" else peak * 1024


class _Peak:
    """The largest resident memory of this process within a block.

    The system keeps one high-water mark for the whole life. Where the block raised it, that is exact; elsewhere the
    largest of the looks taken by a thread counts. (Resetting the mark would mislead whoever measures from outside.)
    """

    def __enter__(self) -> _Peak:
        self._before = Watch.peak_memory()
        self._seen = _resident()
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._look, name="isthmus-memory", daemon=True)
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._ended.set()
        self._thread.join()
        after = Watch.peak_memory()
        self.bytes = after if after > self._before else min(max(self._seen, _resident()) or after, after)

    def _look(self) -> None:
        while not self._ended.wait(PAUSE):
            self._seen = max(self._seen, _resident())


def _resident() -> int:
    """Resident memory of this process now, in bytes; 0 where the system does not tell."""
    try:
        return int(Path("/proc/self/statm").read_bytes().split()[1]) * resource.getpagesize()
    except OSError:
        return 0
