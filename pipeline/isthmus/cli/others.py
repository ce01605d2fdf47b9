"""Commands beside the nights: the data dictionary and the demo."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from isthmus import reports
from isthmus.cli.app import Json, app, kind_of, table_of
from isthmus.console import Console

__all__ = ["columns", "demo"]


@app.command()
def columns(
    table: Annotated[
        str | None, typer.Argument(metavar="TABLE", parser=table_of, help="one table; all when left out")
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
        str, typer.Option("--kind", metavar="KIND", parser=kind_of, help="plain, email, calls or payments")
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
