"""Invented logs of each kind, with the dirt of its trade and the truth about it: one module a kind."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date
from importlib import import_module
from typing import Protocol, cast

__all__ = ["LAST_DAY", "Invention", "Planted", "invention"]

LAST_DAY = date(2026, 11, 30)  # of a demo


class Planted(Protocol):
    """What every log's truth tells. `counts`: outcome -> reason -> contacts, as the log's settings read them."""

    @property
    def rows(self) -> int: ...
    @property
    def counts(self) -> dict[str, dict[str, int]]: ...
    @property
    def brokers(self) -> tuple[str, ...]: ...


class Invention(Protocol):
    """`make_log(folder, last_day)` writes the log; with CONFIG beside the folder, which is named after the kind, it can
    be read."""

    CONFIG: str
    make_log: Callable[..., Planted]


def invention(kind: str) -> Invention:
    return cast(Invention, import_module(f"isthmus.inventions.{kind}"))
