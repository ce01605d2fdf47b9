"""More than one night: catching up, and nights whose log has changed since they were published."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Any

from isthmus.cluster import open_door
from isthmus.deadline import Deadline
from isthmus.errors import DataRefused, IsthmusError, StoreError
from isthmus.ingest import holds, states_of, survey
from isthmus.nightly import Outcome, run_night
from isthmus.publish import Night, complete, published, record_of
from isthmus.settings import Settings
from isthmus.store import place
from isthmus.watch import Watch

__all__ = ["Result", "backfill", "changed_since", "score"]


@dataclass(frozen=True)
class Result:
    """What became of one night: published (`outcome`), skipped because it is complete, or failed."""

    as_of: date
    outcome: Outcome | None = None
    error: IsthmusError | None = None


def score(
    settings: Settings, as_of: date, watch: Watch, deadline: Deadline, accept: frozenset[str] = frozenset()
) -> list[Result]:
    """The night of `as_of`, then, as `run.late` says, those published nights whose log has changed since.

    The first result is that of `as_of`; its errors are raised. The others' errors are in their results. Nights that the
    deadline leaves no time for are told as a warning and found again the next time.
    """
    late, others = changed_since(settings, as_of)
    if others:
        watch.warning(
            f"the log of nights that other settings published has changed; they are left as they are: {_days(others)}; "
            "`isthmus backfill` computes them by these settings"
        )
    freeze = settings.run.late == "freeze"
    if late and freeze:
        watch.warning(f"the log of published nights has changed; they are left as they are: {_days(late)}")
    outcome = run_night(settings, as_of, watch, accept, frozen=late if freeze else [])
    results = [Result(as_of, outcome)]
    for at, day in enumerate([] if freeze else late):
        if deadline.left <= 0:
            watch.warning(f"no time was left to restate {_days(late[at:])}; run again, or `isthmus backfill`")
            break
        results.append(_one(_without_metrics(settings), day, watch.anew(), _accepted(settings, day), deadline))
    return results


def backfill(
    settings: Settings, first: date, last: date, watch: Watch, *, again: bool, accept: frozenset[str] = frozenset()
) -> Iterator[Result]:
    """The nights of first..last, oldest first. Complete ones are skipped unless `again`, or their log has changed and
    `run.late` is "restate".

    Ends after the first night that fails: the error is in its result.
    """
    changed = set(changed_since(settings, None)[0]) if settings.run.late == "restate" else set()
    for number in range((last - first).days + 1):
        day = first + timedelta(days=number)
        night = Night.of(settings.run.warehouse, settings.series, day)
        if not again and day not in changed and complete(night, settings.definition):
            yield Result(day)
            continue
        result = _one(_without_metrics(settings), day, watch.anew(), accept)
        yield result
        if result.error:
            return


def _one(
    settings: Settings, day: date, watch: Watch, accept: frozenset[str], deadline: Deadline | None = None
) -> Result:
    try:
        return Result(day, run_night(settings, day, watch, accept, deadline=deadline))
    except IsthmusError as error:
        return Result(day, error=error)


def _without_metrics(settings: Settings) -> Settings:
    """The metrics are of the night that was due: one computed after it, or of long ago, must not take their place."""
    return settings.model_copy(update={"signals": settings.signals.model_copy(update={"prometheus": ""})})


def _accepted(settings: Settings, day: date) -> frozenset[str]:
    """The gates that were accepted when the night was published: who looked at it then has decided."""
    told = record_of(Night.of(settings.run.warehouse, settings.series, day))
    return frozenset(gate["gate"] for gate in told.get("gates", []) if gate["state"] == "accepted")


def changed_since(settings: Settings, but: date | None) -> tuple[list[date], list[date]]:
    """Published nights whose files have changed since, oldest first, without `but`: of this definition, of others.

    A file counts as changed when its size or time is another; and a file that was not there counts when its name and
    footer say that it can hold a day of the window. A night of which a file is gone is left as it is: logs are kept for
    a shorter time than warehouses, and what is left of the window could only make it worse.
    """
    nights = published(place(settings.run.warehouse), settings.series)
    if not nights:
        return [], []
    try:
        now = states_of(settings.log)
    except (StoreError, DataRefused):
        return [], []  # the night itself will say what is wrong with the log
    mine, others = list[date](), list[date]()
    for night in nights:
        told = record_of(night)
        if night.as_of != but and told and _changed(settings, night, told, now):
            (mine if told["definition"] == settings.definition else others).append(night.as_of)
    return mine, others


def _changed(settings: Settings, night: Night, told: dict[str, Any], now: dict[str, tuple[int, int]]) -> bool:
    read = {each["file"]: (each["bytes"], each.get("changed_ns")) for each in told.get("inputs", [])}
    if any(name not in now for name in read):
        return False
    if any(now[name] != state for name, state in read.items()):
        return True
    window = date.fromisoformat(told["window_start"]), night.as_of
    if not any(name not in read and holds(name, *window) for name in now):
        return False
    with open_door(threads=settings.run.threads) as door:
        return {file.name for file in survey(settings.log, *window, door).files} != read.keys()


def _days(days: list[date]) -> str:
    return ", ".join(str(day) for day in days[:7]) + (f" and {len(days) - 7} more" if len(days) > 7 else "")
