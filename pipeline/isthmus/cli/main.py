"""From a command's words to its exit code."""

from __future__ import annotations

import os
import signal
import sys

import typer

from isthmus.cli import nights, others, people, top  # noqa: F401  they name themselves to the app
from isthmus.cli.app import app
from isthmus.console import Console
from isthmus.errors import INTERNAL, INTERRUPTED, AskedToStop, IsthmusError, StoreError, exit_code_of, places_of

__all__ = ["exit_code", "main"]

USAGE = 64
# Typer carries a click of its own, or uses the installed one; either way this is the class of all usage errors.
UsageError: type[Exception] = typer.BadParameter.__mro__[1]


def main(arguments: list[str] | None = None) -> None:
    """Run the command and leave with its exit code."""
    signal.signal(signal.SIGTERM, _asked_to_stop)
    sys.exit(exit_code(arguments))


def _asked_to_stop(*_: object) -> None:
    raise AskedToStop


def exit_code(arguments: list[str] | None) -> int:
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
