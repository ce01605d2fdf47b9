"""The command's frame: what `isthmus --help` says, the options that commands share, and how they speak."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from isthmus.console import Console
from isthmus.errors import IsthmusError, exit_code_of

if TYPE_CHECKING:
    from isthmus.settings import Settings

__all__ = ["Accept", "AsOf", "Config", "Json", "all_series", "app", "console_for", "machines_only", "named"]

YEARS = range(1970, 2200)  # a row outside them is refused, so no night can end there

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


def day_of(text: str) -> date:
    try:
        day = date.fromisoformat(text)
    except ValueError:
        raise typer.BadParameter(f"{text!r} is not a date like 2026-11-30") from None
    if day.year not in YEARS:
        raise typer.BadParameter(f"{text!r} is not in the years {YEARS.start} to {YEARS.stop - 1}")
    return day


def gate_of(name: str) -> str:
    from isthmus.gates import GATES

    if name not in GATES:
        raise typer.BadParameter(f"no gate {name!r}; there are {', '.join(GATES)}")
    return name


def table_of(name: str) -> str:
    from isthmus.tables import TABLES

    if name not in TABLES:
        raise typer.BadParameter(f"no table {name!r}; there are {', '.join(TABLES)}")
    return name


def kind_of(name: str) -> str:
    from isthmus.settings.kinds import KINDS

    if name not in KINDS:
        raise typer.BadParameter(f"no kind of log {name!r}; there are {', '.join(KINDS)}")
    return name


Config = Annotated[Path, typer.Argument(metavar="CONFIG", readable=False, help="the log's settings, a TOML file")]
AsOf = Annotated[
    date | None,
    typer.Option(
        "--as-of", metavar="DATE", parser=day_of, help="last day of the window, YYYY-MM-DD  [default: yesterday, UTC]"
    ),
]
Accept = Annotated[
    list[str] | None,
    typer.Option(
        "--accept", metavar="GATE", parser=gate_of, help="publish although this gate stops the night; may be repeated"
    ),
]
Json = Annotated[
    bool, typer.Option("--json", help="put JSON on stdout: one object, or a list where the file defines several series")
]


def named(error: IsthmusError, what: str) -> IsthmusError:
    """The error, saying what it is about."""
    error.args = (f"{what}: {error}",)
    return error


def all_series(config: Path) -> list[Settings]:
    """The settings of every series that the file defines, found to be possible."""
    from isthmus.settings import load_all
    from isthmus.signals import examine

    every = load_all(config)
    for settings in every:
        examine(settings)
    return every


def console_for(settings: Settings, *, as_json: bool = False) -> Console:
    """Where the JSON lines go to stderr nothing is said in words."""
    return Console(as_json=as_json, people=settings.signals.log != "-")


@contextmanager
def machines_only(settings: Settings) -> Iterator[None]:
    """Where the JSON lines go to stderr they have told an error already: only its exit code is left to give."""
    try:
        yield
    except Exception as error:
        if settings.signals.log != "-":
            raise
        raise typer.Exit(exit_code_of(error)) from error
