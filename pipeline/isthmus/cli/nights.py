"""Commands about nights: score, backfill, check, history."""

from __future__ import annotations

from datetime import date
from typing import Annotated

import typer

from isthmus import reports
from isthmus.cli.app import Accept, AsOf, Config, Json, all_series, app, console_for, day_of, machines_only, named
from isthmus.console import Console
from isthmus.errors import GateStopped, IsthmusError

__all__ = ["backfill", "check", "history", "score"]


@app.command()
def score(config: Config, as_of: AsOf = None, accept: Accept = None, as_json: Json = False) -> None:
    """One night: read the window, measure, publish.

    Safe to repeat: the same night replaces its own files and nothing else. A run that was killed or stopped goes on
    from the days that it had read and the blocks that it had measured. Published nights whose log has changed since
    are computed again afterwards, or left and told, as run.late says.

    \b
    Examples
      isthmus score configs/payments.toml
      isthmus score configs/payments.toml --as-of 2026-11-30 --json > run.json
      isthmus score configs/payments.toml --accept volume      (it was a public holiday)
    """
    from datetime import datetime

    from isthmus import nights
    from isthmus.deadline import Deadline
    from isthmus.nightly import yesterday

    every = all_series(config)
    console = console_for(every[0], as_json=as_json)
    manifests, failed = [], list[IsthmusError]()
    with machines_only(every[0]):
        for settings in every:
            deadline, day = Deadline.of(settings, datetime.now()), as_of or yesterday()
            try:
                with console.watch() as watch:
                    first, *others = nights.score(settings, day, watch, deadline, frozenset(accept or ()))
            except IsthmusError as error:
                failed.append(named(error, f"series {settings.series}") if every[1:] else error)
                continue
            assert first.outcome is not None
            reports.night(console, first.outcome)
            manifests.append(first.outcome.manifest)
            for result in others:
                reports.one_line(console, result, "restated")
                if result.error:
                    failed.append(named(result.error, f"night of {result.as_of}"))
        if manifests:
            console.answer(manifests if every[1:] else manifests[0])
        for other in failed[1:]:
            console.say(f"isthmus: {other}")
        if failed:
            raise failed[0]


@app.command()
def backfill(
    config: Config,
    first: Annotated[date, typer.Option("--from", metavar="DATE", parser=day_of, help="last day of the first window")],
    last: Annotated[date, typer.Option("--to", metavar="DATE", parser=day_of, help="last day of the last window")],
    again: Annotated[bool, typer.Option("--again", help="also nights that are complete")] = False,
    accept: Accept = None,
) -> None:
    """Several nights, oldest first: to catch up after an outage, or to fill a new warehouse.

    Nights that are published whole by these settings are skipped, unless their log has changed since. Ends at the first
    night that fails, with its exit code; the same command goes on from there. What is the latest night does not change:
    that is the one with the highest as_of.

    \b
    Example
      isthmus backfill configs/payments.toml --from 2026-11-01 --to 2026-11-30
    """
    from isthmus import nights

    if last < first:
        raise typer.BadParameter(f"--to {last} is before --from {first}")
    every = all_series(config)
    console = console_for(every[0])
    with machines_only(every[0]), console.watch() as watch:
        for settings in every:
            if every[1:]:
                console.say(f"Series {settings.series}")
            for result in nights.backfill(settings, first, last, watch, again=again, accept=frozenset(accept or ())):
                reports.one_line(console, result, "published")
                if result.error:
                    raise named(result.error, f"night of {result.as_of}")


@app.command()
def check(
    config: Config,
    as_of: AsOf = None,
    as_json: Json = False,
    show_settings: Annotated[
        bool, typer.Option("--settings", help="print every key with its unit, default and meaning, as TOML on stdout")
    ] = False,
) -> None:
    """Look at settings, log and cost; write nothing.

    Shows what a night would read, how many parties and ties to expect, the method, the time and the memory, and
    leaves with the exit code that the night would have.
    """
    from isthmus.settings import load, to_toml

    console = Console(as_json=as_json)
    if show_settings:
        settings = load(config)
        if as_json:
            console.answer(settings.model_dump(mode="json"))
        else:
            typer.echo(to_toml(settings), nl=False)
        return
    from isthmus.forecast import foresee
    from isthmus.nightly import window_of, yesterday

    told, stops = [], []
    every = all_series(config)
    for settings in every:
        forecast = foresee(settings, *window_of(settings, as_of or yesterday()))
        told.append(reports.forecast(console, settings, forecast))
        of = f"series {settings.series}: " if every[1:] else ""
        stops += [of + forecast.stopped] if forecast.stopped else []
    console.answer(told if told[1:] else told[0])
    if stops:
        raise GateStopped("\n".join(stops))


@app.command()
def history(
    config: Config,
    nights: Annotated[int, typer.Option("--nights", metavar="N", min=1, help="days to look back")] = 14,
    show_all: Annotated[bool, typer.Option("--all", help="the runs that were replaced, too")] = False,
    as_json: Json = False,
) -> None:
    """The recent nights, newest last: what each published, from what, and how sure.

    Reads no log. A night is `published`, `damaged` (a table is no longer what was published; run it again),
    `incomplete` (a run was killed while publishing; run it again), `stopped` (by a gate), `failed` or
    `interrupted`, as the work folder tells, or `missing` (no run came to an end).

    \b
    Examples
      isthmus history configs/payments.toml
      isthmus history configs/payments.toml --nights 60 --all
    """
    from isthmus.endings import endings
    from isthmus.publish import nights_of
    from isthmus.settings import load_all
    from isthmus.store import place

    console = Console(as_json=as_json)
    told = []
    for settings in load_all(config):
        found = nights_of(place(settings.run.warehouse), settings.series, nights, endings(settings.work))
        told.append(reports.history(console, settings, found, show_all=show_all))
    console.answer(told if told[1:] else told[0])
