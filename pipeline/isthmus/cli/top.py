"""The command top: the first screen of a published night, for people on a server."""

from __future__ import annotations

import shutil
import textwrap
from typing import TYPE_CHECKING, Annotated, Any

import typer

from isthmus.cli.app import AsOf, Config, Json, app
from isthmus.console import Console, number, printable
from isthmus.errors import StoreError
from isthmus.tables import CAUTION

if TYPE_CHECKING:
    from isthmus.settings import Settings

__all__ = ["top"]

KEY, NARROW, WIDE = 20, 8, 60  # columns of a key; of the whiskers, at least and at most
HEADS = ["party", "kind", "rank", "rank range", "degree", "betweenness"]
SHOWN = ("rank", "party", "kind", "betweenness", "lower", "upper", "rank_best", "rank_worst", "top", "degree")


@app.command()
def top(
    config: Config,
    first: Annotated[int, typer.Option("--first", metavar="N", min=1, help="parties to show")] = 10,
    as_of: AsOf = None,
    as_json: Json = False,
) -> None:
    """The top brokers of the latest published night, with their intervals drawn; reads no log, writes nothing.

    A line from `|` to `|` is the interval that surely holds the party's betweenness, `o` the score itself, all on one
    scale from 0 to the highest upper end. Whose lines do not overlap differ surely.

    \b
    Examples
      isthmus top configs/payments.toml
      isthmus top configs/payments.toml --first 50 --as-of 2026-11-30
    """
    from isthmus.settings import load_all

    console, told, failed = Console(as_json=as_json), list[dict[str, Any]](), list[StoreError]()
    every = load_all(config)
    for settings in every:
        try:
            told.append(_night(settings, first, str(as_of) if as_of else None))
        except StoreError as error:
            failed.append(error)
        else:
            _screen(console, told[-1], shutil.get_terminal_size().columns)
    if told:
        console.answer(told if every[1:] else told[0])
    for other in failed[1:]:
        console.say(f"isthmus: {other}")
    if failed:
        raise failed[0]


def _night(settings: Settings, first: int, as_of: str | None) -> dict[str, Any]:
    """What the night's tables tell: of the run, and `brokers`, one object each. Raises StoreError."""
    import polars as pl

    from isthmus.warehouse import read

    warehouse = read(settings.run.warehouse, settings.series, as_of)
    kinds = warehouse.parties.select("party", "kind")
    brokers = warehouse.scores.filter(pl.col("rank") <= first).join(kinds, on="party", how="left").sort("rank")
    run = warehouse.runs.collect().row(0, named=True)
    about = ("window_start", "run_id", "parties", "method", "samples", "confidence", "half_width_widest", "warnings")
    return {
        "series": settings.series,
        "as_of": warehouse.nights[0].as_of,
        **{name: run[name] for name in (*about, "stopped_because")},
        "brokers": brokers.select(SHOWN).collect().to_dicts(),
    }


def _screen(console: Console, night: dict[str, Any], width: int) -> None:
    """In `width` columns where that is possible at all; only the whiskers give way."""
    brokers = night["brokers"]
    lines = [
        [
            printable(each["party"], KEY),
            each["kind"] or "",
            str(each["rank"]),
            f"{each['rank_best']} .. {each['rank_worst']}",
            number(each["degree"]),
            f"{each['betweenness']:.6f}",
        ]
        for each in brokers
    ]
    widths = [max(map(len, column)) for column in zip(HEADS, *lines, strict=True)]
    room = min(max(width - sum(widths) - 2 * len(widths), NARROW), WIDE)
    scale = max((each["upper"] for each in brokers), default=0.0)
    drawn = [_whiskers(each["lower"], each["betweenness"], each["upper"], scale, room) for each in brokers]
    console.table(
        f"Series {night['series']}, {night['window_start']} .. {night['as_of']}: the first {len(brokers)} of "
        f"{number(night['parties'])} parties",
        ["party", "kind", f"0 .. {scale:.2g}".ljust(room), *HEADS[2:]],
        [[*line[:2], whiskers, *line[2:]] for line, whiskers in zip(lines, drawn, strict=True)],
        left=3,
    )
    console.say()
    for text in (_method(night), night["warnings"] and f"Warnings: {night['warnings']}", CAUTION):
        if text:
            console.say(textwrap.fill(text, max(width - 1, 40), break_on_hyphens=False))


def _method(night: dict[str, Any]) -> str:
    if night["method"] == "exact":
        return "Method: exact, so each interval is the score itself."
    return (
        f"Method: {night['method']}, {number(night['samples'])} samples, stopped because of "
        f"{night['stopped_because']}. All intervals hold at once with probability {night['confidence']:g}; the "
        f"widest of all parties is ±{night['half_width_widest']:.2g}."
    )


def _whiskers(lower: float, value: float, upper: float, scale: float, room: int) -> str:
    """The interval as text, `room` characters for 0 .. scale. Plain ASCII: any terminal shows it."""
    low, at, high = (round(each / scale * (room - 1)) if scale > 0 else 0 for each in (lower, value, upper))
    line = [" "] * room
    line[low : high + 1] = "-" * (high + 1 - low)
    line[low] = line[high] = "|"
    line[at] = "o"
    return "".join(line).rstrip()
