"""Which method, how many samples, and what that will cost: settled before the first draw.

An engine X is a package `engine_X` with `planner(graph, score, threads, memory_bytes) -> Planner` and
`run(graph, plan, score, threads, progress) -> Estimate`. The choice between the methods is made here and is
the same for all engines.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, replace
from importlib import import_module
from typing import Protocol

from isthmus.errors import SettingsError
from isthmus.graph import Graph
from isthmus.settings import Score

__all__ = ["Plan", "Planner", "make_plan", "spell_bytes", "spell_seconds"]


@dataclass(frozen=True)
class Plan:
    """What `measure` will do. Plain values only, so that it can be recorded and reused by a re-run of the night.

    `samples`: sources or pairs to draw (for exact, the number of parties). `half_width`: promised to every party at
    once (networkit) or expected of the widest (numba), on Freeman's scale, before clipping to 0..1; 0 when exact.
    `limit` says what set `samples`: exact, samples, half_width or minutes. `blocks`: parts that the draws are made in,
    where that is fixed beforehand. `lanes`: sources, or pairs, worked on at once by a thread. `reached`: where the
    clock stopped a former run of this plan; a re-run stops there again, and gives the same numbers. `reason`: one
    sentence for people.
    """

    engine: str
    method: str
    samples: int
    half_width: float
    limit: str
    reason: str
    predicted_seconds: float
    predicted_bytes: int
    threads: int
    blocks: int
    lanes: int = 0
    reached: int = 0


class Planner(Protocol):
    """What each engine can offer for one graph. A method raises SettingsError when it cannot be offered."""

    def exact(self) -> Plan: ...
    def pivots(self) -> Plan: ...
    def paths(self) -> Plan: ...


def make_plan(graph: Graph, score: Score, threads: int, memory_bytes: int) -> Plan:
    """Choose the method and the number of samples.

    `auto` takes exact if its predicted time fits `score.minutes` and its memory `memory_bytes`, else the sampling
    method that promises the narrower intervals within them. `threads` = 0 means all cores. Large graphs are probed
    for a second or so. Raises SettingsError when nothing fits the memory or the method cannot take the graph.
    """
    # by name, so that importing isthmus imports no engine
    home = import_module(f"isthmus.betweenness.engine_{score.engine}")
    planner: Planner = home.planner(graph, score, threads or os.cpu_count() or 1, memory_bytes)
    if score.method != "auto":
        offer = {"exact": planner.exact, "pivots": planner.pivots, "paths": planner.paths}[score.method]()
        return replace(offer, reason=f'asked for method = "{score.method}": {offer.reason}')
    try:
        exact = planner.exact()
    except SettingsError as error:
        why = f"exact is out ({error})"
    else:
        if exact.predicted_seconds <= score.minutes * 60:
            return exact
        why = f"exact would take {spell_seconds(exact.predicted_seconds)} of the {score.minutes:.3g} min allowed"
    offers, refusals = [], [why]
    for method in (planner.paths, planner.pivots):
        try:
            offers.append(method())
        except SettingsError as error:
            refusals.append(str(error))
    if not offers:
        raise SettingsError("no method fits: " + "; ".join(refusals))
    # narrower than asked is worth nothing, so among offers that reach the width asked for the quicker one wins
    best = min(offers, key=lambda o: (max(o.half_width, score.half_width), o.predicted_seconds))
    others = "".join(f"; {o.method} would reach about ±{o.half_width:.2g}" for o in offers if o is not best)
    return replace(best, reason=f"{why}; {best.reason}{others}")


def spell_bytes(count: float) -> str:
    """Bytes in the unit that a person would use."""
    return f"{count / 2**30:.1f} GiB" if count >= 2**30 else f"{count / 2**20:.1f} MiB"


def spell_seconds(seconds: float) -> str:
    """Seconds in the unit that a person would use."""
    for size, unit in ((86_400.0, "days"), (3600.0, "hours"), (60.0, "min")):
        if seconds >= 2 * size:
            return f"{seconds / size:.1f} {unit}"
    return f"{seconds:.1f} s" if seconds >= 0.1 else "under 0.1 s"
