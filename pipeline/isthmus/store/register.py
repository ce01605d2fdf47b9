"""What a place offers to leases and publishers: a small text that is replaced only by who has seen its last version."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Protocol

__all__ = ["Guard", "Moved", "Register", "Seen"]

# Entered around the instant at which a night is switched; raises TryAgain when the lease is no longer held.
Guard = Callable[[], AbstractContextManager[None]]


class Moved(Exception):
    """Somebody else replaced what was about to be replaced."""


@dataclass(frozen=True)
class Seen:
    """A register as it was read: its text (None: there is none yet) and the version that `swap` must find."""

    text: bytes | None
    version: str | None


class Register(Protocol):
    def read(self) -> Seen:
        """Raises StoreError."""

    def swap(self, seen: Seen, text: bytes) -> Seen:
        """Replace what was seen. Raises Moved when it is no longer there, and StoreError."""

    def age(self) -> float:
        """Seconds since the last swap by the store's own clock; negative when that clock was set back since."""

    def hold(self) -> AbstractContextManager[None]:
        """Where the store has locks, nobody can swap meanwhile; elsewhere this does nothing."""
