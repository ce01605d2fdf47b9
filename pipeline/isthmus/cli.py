"""Words in, words out: the command `isthmus`."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from isthmus import reports
from isthmus.console import Console
from isthmus.errors import (
    INTERNAL,
    INTERRUPTED,
    AskedToStop,
    GateStopped,
    IsthmusError,
    StoreError,
    exit_code_of,
    places_of,
)

if TYPE_CHECKING:
    from isthmus.settings import Settings

__all__ = ["app", "main"]

USAGE = 64
YEARS = range(1970, 2200)  # a row outside them is refused, so no night can end there

# Typer carries a click of its own, or uses the installed one; either way this is the class of all usage errors.
UsageError: type[Exception] = typer.BadParameter.__mro__[1]

app = typer.Typer(
    name="isthmus",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    help="""Who lies between the others? Reads Parquet logs of who contacted or paid whom, measures how much of the
    traffic between everyone else has to pass through each party (betweenness centrality), says how sure it is of
    every number, and publishes tables that a warehouse reads.

    Start with `isthmus demo`: it makes an invented log and runs the whole job on it.

    \b
    Exit codes
      0   published (or: the check found nothing wrong)
      64  the command line is wrong
      65  the log was refused or a gate stopped the night; what was published before stays
      70  a fault of isthmus itself
      74  a folder or file cannot be read or written
      75  not now; the same command works later
      78  the settings are wrong
      130 interrupted from the keyboard""",
)


def _day(text: str) -> date:
    try:
        day = date.fromisoformat(text)
    except ValueError:
        raise typer.BadParameter(f"{text!r} is not a date like 2026-11-30") from None
    if day.year not in YEARS:
        raise typer.BadParameter(f"{text!r} is not in the years {YEARS.start} to {YEARS.stop - 1}")
    return day


def _gate(name: str) -> str:
    from isthmus.gates import GATES

    if name not in GATES:
        raise typer.BadParameter(f"no gate {name!r}; there are {', '.join(GATES)}")
    return name


def _table(name: str) -> str:
    from isthmus.tables import TABLES

    if name not in TABLES:
        raise typer.BadParameter(f"no table {name!r}; there are {', '.join(TABLES)}")
    return name


def _kind(name: str) -> str:
    from isthmus.settings.kinds import KINDS

    if name not in KINDS:
        raise typer.BadParameter(f"no kind of log {name!r}; there are {', '.join(KINDS)}")
    return name


Config = Annotated[Path, typer.Argument(metavar="CONFIG", readable=False, help="the log's settings, a TOML file")]
AsOf = Annotated[
    date | None,
    typer.Option(
        "--as-of", metavar="DATE", parser=_day, help="last day of the window, YYYY-MM-DD  [default: yesterday, UTC]"
    ),
]
Accept = Annotated[
    list[str] | None,
    typer.Option(
        "--accept", metavar="GATE", parser=_gate, help="publish although this gate stops the night; may be repeated"
    ),
]
Json = Annotated[bool, typer.Option("--json", help="put one JSON object on stdout")]


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

    every = _all_series(config)
    console = _console(every[0], as_json=as_json)
    manifests, failed = [], list[IsthmusError]()
    with _machines_only(every[0]):
        for settings in every:
            deadline, day = Deadline.of(settings, datetime.now()), as_of or yesterday()
            try:
                with console.watch() as watch:
                    first, *others = nights.score(settings, day, watch, deadline, frozenset(accept or ()))
            except IsthmusError as error:
                failed.append(_named(error, f"series {settings.series}") if every[1:] else error)
                continue
            assert first.outcome is not None
            reports.night(console, first.outcome)
            manifests.append(first.outcome.manifest)
            for result in others:
                reports.one_line(console, result, "restated")
                if result.error:
                    failed.append(_named(result.error, f"night of {result.as_of}"))
        if manifests:
            console.answer(manifests if every[1:] else manifests[0])
        for other in failed[1:]:
            console.say(f"isthmus: {other}")
        if failed:
            raise failed[0]


@app.command()
def backfill(
    config: Config,
    first: Annotated[date, typer.Option("--from", metavar="DATE", parser=_day, help="last day of the first window")],
    last: Annotated[date, typer.Option("--to", metavar="DATE", parser=_day, help="last day of the last window")],
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
    every = _all_series(config)
    console = _console(every[0])
    with _machines_only(every[0]), console.watch() as watch:
        for settings in every:
            if every[1:]:
                console.say(f"Series {settings.series}")
            for result in nights.backfill(settings, first, last, watch, again=again, accept=frozenset(accept or ())):
                reports.one_line(console, result, "published")
                if result.error:
                    raise _named(result.error, f"night of {result.as_of}")


def _named(error: IsthmusError, what: str) -> IsthmusError:
    """The error, saying what it is about."""
    error.args = (f"{what}: {error}",)
    return error


def _all_series(config: Path) -> list[Settings]:
    """The settings of every series that the file defines, found to be possible."""
    from isthmus.settings import load_all
    from isthmus.signals import examine

    every = load_all(config)
    for settings in every:
        examine(settings)
    return every


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
    for settings in _all_series(config):
        forecast = foresee(settings, *window_of(settings, as_of or yesterday()))
        told.append(reports.forecast(console, settings, forecast))
        stops += [forecast.stopped] if forecast.stopped else []
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


@app.command()
def columns(
    table: Annotated[
        str | None, typer.Argument(metavar="TABLE", parser=_table, help="one table; all when left out")
    ] = None,
    as_json: Json = False,
) -> None:
    """The data dictionary: every column of every published table, its type, unit and meaning."""
    from isthmus.tables import TABLES

    reports.dictionary([TABLES[table]] if table else list(TABLES.values()), as_json=as_json)


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="where to make it")] = Path("isthmus-demo"),
    kind: Annotated[
        str, typer.Option("--kind", metavar="KIND", parser=_kind, help="plain, email, calls or payments")
    ] = "plain",
    as_json: Json = False,
) -> None:
    """Make an invented log of four weeks and run the whole job on it.

    Everything is written below FOLDER: the log, its settings (KIND.toml), the warehouse. Running it again replaces
    them. Each kind has a log, settings and a series of its own, so that several may share a folder. "plain" is a log of
    payments that is taken at its word, "payments" one with returns, currencies, owners and hubs.

    \b
    Examples
      isthmus demo
      isthmus demo --kind email
    """
    from isthmus.inventions import LAST_DAY, invention
    from isthmus.nightly import run_night
    from isthmus.settings import load
    from isthmus.store import story

    console = Console(as_json=as_json)
    log, config = invention(kind), folder / f"{kind}.toml"
    with story("write the demo"):
        folder.mkdir(parents=True, exist_ok=True)
        config.write_text(log.CONFIG, encoding="utf-8")
    with console.watch() as watch:
        with watch.stage("invent"), story("write the demo"):
            truth = log.make_log(folder / kind, LAST_DAY)
        outcome = run_night(load(config), LAST_DAY, watch)
    reports.night(console, outcome)
    reports.planted(console, outcome, truth.brokers)
    reports.how_to_go_on(console, outcome, config)
    console.answer(outcome.manifest)


def _console(settings: Settings, *, as_json: bool = False) -> Console:
    """Where the JSON lines go to stderr nothing is said in words."""
    return Console(as_json=as_json, people=settings.signals.log != "-")


@contextmanager
def _machines_only(settings: Settings) -> Iterator[None]:
    """Where the JSON lines go to stderr they have told an error already: only its exit code is left to give."""
    try:
        yield
    except Exception as error:
        if settings.signals.log != "-":
            raise
        raise typer.Exit(exit_code_of(error)) from error


def main(arguments: list[str] | None = None) -> None:
    """Run the command and leave with its exit code."""
    signal.signal(signal.SIGTERM, _asked_to_stop)
    sys.exit(_exit_code(arguments))


def _asked_to_stop(*_: object) -> None:
    raise AskedToStop


def _exit_code(arguments: list[str] | None) -> int:
    say = Console().say
    try:
        # our commands return nothing; what Typer ends by itself (help, an interrupt) comes back as an exit code
        code: int = app(arguments, prog_name="isthmus", standalone_mode=False) or 0
        if code == INTERRUPTED:
            raise KeyboardInterrupt
    except UsageError as error:
        error.show()  # type: ignore[attr-defined]
        return USAGE
    except IsthmusError as error:
        say(f"isthmus: {error}")
        return error.exit_code
    except AskedToStop as stop:
        say(f"isthmus: {stop}")
        return exit_code_of(stop)
    except (KeyboardInterrupt, typer.Abort):
        say("isthmus: interrupted; the night is published whole or not at all, run the same command again")
        return INTERRUPTED
    except OSError as error:
        say(f"isthmus: {error}; check that files and folders are there and may be used, and that the disk has room")
        return StoreError.exit_code
    except Exception as error:
        say(_internal(error))
        return INTERNAL
    return code


def _internal(error: Exception) -> str:
    """Where it happened; the message only on request, because a library's message may quote the log."""
    if os.environ.get("ISTHMUS_SHOW_INTERNAL"):
        what = f"{type(error).__name__}: {error}"
    else:
        what = f"{type(error).__name__} (set ISTHMUS_SHOW_INTERNAL=1 to see its message, which may quote party keys)"
    return "\n".join(
        (
            "isthmus: internal error; the night is published whole or not at all. Please report these lines:",
            *(f"  {place}" for place in places_of(error)),
            f"  {what}",
        )
    )


if __name__ == "__main__":
    main()
