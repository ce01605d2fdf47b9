"""By when a night must be published, and what that leaves for each of its stages."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, timedelta

from isthmus.errors import TryAgain
from isthmus.settings import Settings

__all__ = ["Deadline"]

# Publishing is kept free of the time for sampling: so much at least, and so much for each party or tie.
RESERVE_SECONDS, RESERVE_EACH = 1.0, 2e-6
LEAST_MINUTES = 0.01  # for sampling, when reading has used the time up: the first look is always reached
TELLING_SHARE = 0.1  # read so much before its pace says when reading will end


@dataclass
class Deadline:
    """`score.minutes` from the start of the night, or `run.finish_by`, whichever comes first.

    Counted on the clock that only goes forward: the wall clock is looked at once, so that it may jump afterwards.
    """

    ends: float
    by: str
    clock: Callable[[], float] = time.monotonic

    @classmethod
    def of(cls, settings: Settings, now: datetime, clock: Callable[[], float] = time.monotonic) -> Deadline:
        """`now`: local time, as `run.finish_by` is."""
        left, by = settings.score.minutes * 60, f"score.minutes = {settings.score.minutes:g}"
        if settings.run.finish_by:
            hour, minute = (int(part) for part in settings.run.finish_by.split(":"))
            then = now.replace(hour=hour, minute=minute, second=0, microsecond=0)
            until = (then if then > now else then + timedelta(days=1)) - now
            if until.total_seconds() < left:
                left, by = until.total_seconds(), f'run.finish_by = "{settings.run.finish_by}"'
        return cls(clock() + left, by, clock)

    @property
    def left(self) -> float:
        """Seconds; below 0 once it is over."""
        return self.ends - self.clock()

    def reading(self, tick: Callable[[float], None]) -> Callable[[float], None]:
        """A tick of the reading stage that raises TryAgain as soon as its pace says that it would not end in time."""
        start = self.clock()

        def watched(share: float) -> None:
            tick(share)
            taken = self.clock() - start
            if TELLING_SHARE <= share < 1 and taken * (1 - share) / share > self.left:
                raise TryAgain(
                    f"reading alone would take about {taken / share:.0f} s, and {self.by} leaves less; {share:.0%} is "
                    "read and kept: run again, with more time, more workers or a shorter window.days"
                )

        return watched

    def minutes_for_scoring(self, parties: int, ties: int) -> float:
        """What may be spent on planning and sampling so that there is time to publish."""
        reserve = RESERVE_SECONDS + RESERVE_EACH * (parties + ties)
        return max((self.left - reserve) / 60, LEAST_MINUTES)
