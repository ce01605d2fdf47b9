"""What a run tells while it works and remembers for its manifest: stages, their time, warnings, peak memory."""

from __future__ import annotations

import resource
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

__all__ = ["Watch"]


@dataclass
class Watch:
    """`tell` hears (stage, share done): 0 when a stage begins, 1 when it has ended."""

    tell: Callable[[str, float], None] = lambda stage, share: None
    warn: Callable[[str], None] = lambda text: None
    seconds: dict[str, float] = field(default_factory=dict)
    warnings: list[str] = field(default_factory=list)

    @contextmanager
    def stage(self, name: str) -> Iterator[Callable[[float], None]]:
        """Time a stage. Yields the function that takes the share done, 0..1."""
        began = time.perf_counter()
        self.tell(name, 0.0)
        yield lambda share: self.tell(name, min(share, 0.999))
        self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - began
        self.tell(name, 1.0)

    def anew(self) -> Watch:
        """One for another night, that is told and warned the same way."""
        return Watch(self.tell, self.warn)

    def warning(self, text: str) -> None:
        """Remember and say something a person should know; it does not stop the night."""
        self.warnings.append(text)
        self.warn(text)

    @staticmethod
    def peak_memory() -> int:
        """Largest resident memory of this process so far, in bytes."""
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        return peak if sys.platform == "darwin" else peak * 1024
