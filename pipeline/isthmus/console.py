"""What people and programs read: one object, a human form on stderr, a JSON form on stdout."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from time import monotonic
from typing import Any

from rich.cells import cell_len
from rich.console import Console as RichConsole
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn, TimeRemainingColumn
from rich.text import Text

from isthmus.watch import Watch

__all__ = ["Console", "number", "printable"]

WIDEST_KEY = 40


class Console:
    """`say` and `table` go to stderr as plain text that pastes into a ticket; `answer` goes to stdout as JSON."""

    def __init__(self, *, as_json: bool = False, people: bool = True) -> None:
        """`people`: false where stderr belongs to the JSON log lines; then nothing is said in words."""
        self._json, self._people = as_json, people
        self._err = RichConsole(stderr=True, highlight=False, soft_wrap=True)

    def say(self, text: str = "") -> None:
        if self._people:
            self._err.print(Text(text))

    def table(self, title: str, headers: list[str], rows: list[list[str]], left: int = 1) -> None:
        """`left` columns are text, the others numbers. Never cut to the terminal's width: it must paste whole."""
        widths = [max(map(cell_len, column)) for column in zip(headers, *rows, strict=True)]
        self.say(title)
        for row in (headers, ["-" * width for width in widths], *rows):
            cells = [
                cell + " " * (width - cell_len(cell)) if at < left else " " * (width - cell_len(cell)) + cell
                for at, (cell, width) in enumerate(zip(row, widths, strict=True))
            ]
            self.say("  ".join(cells).rstrip())

    def answer(self, value: dict[str, Any] | list[dict[str, Any]]) -> None:
        """The one JSON object of `--json`."""
        if self._json:
            json.dump(value, sys.stdout, indent=2, default=str)
            sys.stdout.write("\n")

    @contextmanager
    def watch(self) -> Iterator[Watch]:
        """A Watch that draws progress bars on a terminal and writes one plain line per finished stage elsewhere."""
        if self._people and self._err.is_terminal:
            with Progress(
                TextColumn("{task.description:<9}"),
                BarColumn(),
                TextColumn("{task.percentage:>3.0f} %"),
                TimeElapsedColumn(),
                TextColumn("left"),
                TimeRemainingColumn(),
                console=self._err,
            ) as bars:
                known: dict[str, Any] = {}

                def draw(stage: str, share: float) -> None:
                    if stage not in known:
                        known[stage] = bars.add_task(stage, total=1.0)
                    bars.update(known[stage], completed=share)

                yield Watch(tell=draw, warn=lambda text: bars.console.print(Text(f"warning: {text}")))
        else:
            began: dict[str, float] = {}

            def write(stage: str, share: float) -> None:
                if share == 0.0:
                    began[stage] = monotonic()
                elif share == 1.0:
                    self.say(f"{stage:<9} {monotonic() - began[stage]:8.1f} s")

            yield Watch(tell=write, warn=lambda text: self.say(f"warning: {text}"))


def printable(key: str, widest: int = WIDEST_KEY) -> str:
    """A party key on one line: control characters escaped, the middle of a long one left out."""
    shown = "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in key)
    if len(shown) <= widest:
        return shown
    tail = widest // 4 + 1
    return f"{shown[: widest - tail - 1]}…{shown[-tail:]}"


def number(value: float) -> str:
    """A count with its thousands apart."""
    return f"{value:,.0f}"
