"""When to stop sampling, without spoiling the intervals.

An interval made for a fixed number of samples fails more often than promised if one looks again and again and
stops when pleased. So there are planned looks: the numbers of samples at which intervals are computed at all,
each with its share of delta, the shares adding to at most 1. The plan depends on the settings alone; the
clock only chooses at which look to stop. Statistics that hold at all times at once (`sequences`) may be
looked at after every block at full delta.
"""

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from itertools import count
from time import monotonic
from typing import Protocol

import numpy as np

from isthmus.betweenness.engine_numba.intervals import Bounds

# Looks grow by this factor: at a deadline at most a fifth of the samples are lost, a tenth of the width.
GROWTH = 1.25
# Look j of an endless plan spends PATIENCE / ((j + PATIENCE) (j + PATIENCE + 1)) of delta, which adds to 1;
# the larger, the more evenly spread over the first looks.
PATIENCE = 8
# What the last look gets when `samples` says which one it will be.
LAST = 0.5


@dataclass(frozen=True)
class Rules:
    """Stop at the first that holds. 0 switches a rule off.

    samples: as many as this; half_width: no interval is wider than twice this (Freeman's scale); top: the
    first K parties are settled; minutes: the time is up. repeat: where the clock stopped a former run of the
    same rules; this one stops there whatever the clock says, and so gives the same numbers.
    """

    samples: int = 0
    half_width: float = 0.0
    top: int = 0
    minutes: float = 0.0
    repeat: int = 0

    def __post_init__(self) -> None:
        if min(self.samples, self.half_width, self.top, self.minutes) < 0:
            raise ValueError("stopping rules cannot be negative")
        if self.samples == 0 and self.half_width == 0 and self.minutes == 0:
            raise ValueError("give samples, half_width or minutes: settling the top may take for ever")


@dataclass(frozen=True)
class Look:
    """Intervals are computed at `samples` samples with `share` of delta."""

    samples: int
    share: float
    last: bool = False


def planned_looks(rules: Rules, block: int) -> Iterator[Look]:
    """The looks for statistics that pay for each: one for `samples` alone, else a growing series."""
    if rules.samples and not (rules.half_width or rules.top or rules.minutes):
        yield Look(rules.samples, 1.0, last=True)
        return
    budget = 1.0 - LAST if rules.samples else 1.0
    blocks = 1
    for j in count():
        if rules.samples and blocks * block * GROWTH >= rules.samples:
            yield Look(rules.samples, LAST, last=True)
            return
        yield Look(blocks * block, budget * PATIENCE / ((j + PATIENCE) * (j + PATIENCE + 1)))
        blocks = max(blocks + 1, int(blocks * GROWTH))


def every_block(blocks: Iterable[tuple[int, int]], samples: int) -> Iterator[Look]:
    """The looks for statistics that hold at all times: after each block (start, size), at full delta."""
    for start, size in blocks:
        yield Look(start + size, 1.0, last=start + size == samples)


def top_settled(bounds: Bounds, top: int) -> bool:
    """Are `top` parties surely above all others? Ties count against."""
    n = bounds.lower.size
    if n <= top:
        return True
    order = np.argpartition(bounds.lower, n - top)
    return bool(bounds.lower[order[n - top :]].min() > bounds.upper[order[: n - top]].max())


class Evidence(Protocol):
    """Statistics that grow block by block."""

    @property
    def taken(self) -> int:
        """Samples so far."""

    def bounds(self, share: float) -> Bounds:
        """Intervals now, spending this share of delta."""


@dataclass(frozen=True)
class Verdict:
    """stopped_because: samples, half_width, top, minutes, or settled (nothing was left to sample)."""

    bounds: Bounds
    samples: int
    looks: int
    stopped_because: str


Progress = Callable[[int, Bounds | None], None]


def watch(
    evidence: Evidence,
    advance: Iterator[None],
    looks: Iterator[Look],
    rules: Rules,
    progress: Progress | None = None,
    clock: Callable[[], float] = monotonic,
    spent: float = 0.0,
) -> Verdict:
    """Take blocks (`next(advance)` adds one to `evidence`) until a rule holds at a look.

    The first look is always reached. Later ones are not waited for once the time is up, or when the pace so
    far says that the next look would come after it; the verdict is then the last look's. Looks that
    `evidence` is already past, in a resumed run, did not stop it then and are passed over. spent: seconds
    used before the resume.
    """
    start = clock() - spent
    deadline = start + 60 * rules.minutes if rules.minutes and not rules.repeat else float("inf")
    reached: Bounds | None = None
    at = 0
    number = 0
    for number, look in enumerate(looks):
        if look.samples < evidence.taken:
            continue
        while evidence.taken < look.samples:
            now = clock()
            pace = (now - start) / evidence.taken if evidence.taken else 0.0
            if reached is not None and (now >= deadline or start + pace * look.samples > deadline):
                return Verdict(reached, at, number, "minutes")
            next(advance)
            if progress is not None:
                progress(evidence.taken, reached)
        reached, at = evidence.bounds(look.share), evidence.taken
        if progress is not None:
            progress(evidence.taken, reached)
        reason = _holds(reached, look, rules)
        if not reason and at == rules.repeat:
            reason = "minutes"
        if reason:
            return Verdict(reached, at, number + 1, reason)
    raise AssertionError("the last look always stops")


def _holds(bounds: Bounds, look: Look, rules: Rules) -> str:
    if not bounds.half_width.any():
        return "settled"
    if rules.half_width and bounds.half_width.max() <= rules.half_width:
        return "half_width"
    if rules.top and top_settled(bounds, rules.top):
        return "top"
    return "samples" if look.last else ""
