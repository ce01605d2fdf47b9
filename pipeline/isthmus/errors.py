"""Everything isthmus raises on purpose.

    IsthmusError                 exit
    ├── SettingsError              78   the configuration is wrong, or cannot be honoured on this machine
    ├── DataRefused                65   the log is not what the settings say; what was published before stays
    │   └── GateStopped            65   the log was read, and a gate found its figures too odd to publish
    ├── StoreError                 74   a folder or file cannot be read or written
    └── TryAgain                   75   nothing is wrong, but not now

A message says what failed, which value, and what to do next. No message carries a party key or a secret:
it names files, columns, rows and counts. The numbers follow sysexits.h; 64 (usage) is the command line's own
and 70 (internal error) is everything that is not in this tree.
"""

from __future__ import annotations

import traceback
from pathlib import Path

__all__ = [
    "INTERNAL",
    "INTERRUPTED",
    "AskedToStop",
    "DataRefused",
    "GateStopped",
    "IsthmusError",
    "SettingsError",
    "StoreError",
    "TryAgain",
    "exit_code_of",
    "places_of",
]

INTERNAL, INTERRUPTED = 70, 130


class IsthmusError(Exception):
    """Base of all errors raised on purpose. One text, so that it survives pickling between processes."""

    exit_code = 70

    def __init__(self, message: str) -> None:
        super().__init__(message)


class SettingsError(IsthmusError):
    """A key is unknown, of the wrong type or impossible; or nothing that was asked for fits the machine."""

    exit_code = 78


class DataRefused(IsthmusError):
    """The log cannot be read as the settings say: a missing column, a damaged file, an empty window."""

    exit_code = 65


class GateStopped(DataRefused):
    """The log was read whole, but its figures are outside a gate's limit, so nothing is published."""


class StoreError(IsthmusError):
    """A folder or file is missing, unreadable or unwritable."""

    exit_code = 74


class TryAgain(IsthmusError):
    """Another run holds the lease, or the run was asked to stop; the same command works later."""

    exit_code = 75


class AskedToStop(BaseException):
    """SIGTERM. Like KeyboardInterrupt no Exception, so that nothing that deals with faults takes it for one."""

    def __init__(self) -> None:
        super().__init__(
            "asked to stop by SIGTERM; nothing is half-published, what was read and measured is kept: the same command "
            "goes on from there"
        )


def exit_code_of(error: BaseException) -> int:
    """The exit code that this error ends a command with."""
    if isinstance(error, IsthmusError):
        return error.exit_code
    if isinstance(error, AskedToStop):
        return TryAgain.exit_code
    if isinstance(error, KeyboardInterrupt):
        return INTERRUPTED
    return StoreError.exit_code if isinstance(error, OSError) else INTERNAL


def places_of(error: BaseException) -> list[str]:
    """Where it happened, innermost last: file, line and function, and nothing of what was worked on."""
    frames = traceback.extract_tb(error.__traceback__)[-8:]
    return [f"{Path(frame.filename).name}:{frame.lineno} in {frame.name}" for frame in frames]
