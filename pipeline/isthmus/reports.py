"""The texts that commands end in."""

from __future__ import annotations

import json
import shlex
import shutil
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import polars as pl

from isthmus.console import Console, number, printable
from isthmus.forecast import Forecast
from isthmus.nightly import Outcome, yesterday
from isthmus.nights import Result
from isthmus.publish.queries import top_brokers
from isthmus.settings import Settings
from isthmus.tables import CAUTION, PARTITION, Table

__all__ = ["dictionary", "forecast", "history", "how_to_go_on", "night", "planted"]


def night(console: Console, outcome: Outcome, first: int = 10) -> None:
    """The night in one screen: the first parties with their intervals, the counts, where the tables are."""
    run = outcome.manifest
    console.say()
    top = outcome.scores.head(first)
    rows = [
        [
            printable(row["party"]),
            str(row["rank"]),
            f"{row['betweenness']:.6f}",
            f"{row['lower']:.6f} .. {row['upper']:.6f}",
            f"{row['rank_best']} .. {row['rank_worst']}",
            number(row["degree"]),
        ]
        for row in top.iter_rows(named=True)
    ]
    console.table(
        f"Series {outcome.night.series}, {run['window_start']} .. {outcome.night.as_of}: the first {top.height} of "
        f"{number(run['parties'])} parties by betweenness",
        ["party", "rank", "betweenness", "interval", "rank range", "degree"],
        rows,
    )
    console.say()
    if run["method"] == "exact":
        console.say(f"Method: exact, so each interval is the score itself. {_sentence(run['reason'])}")
    else:
        console.say(
            f"Method: {run['method']}, {number(run['samples'])} samples, stopped because of {run['stopped_because']}. "
            f"All intervals hold at once with probability {run['confidence']:g}; the widest is "
            f"±{run['half_width_widest']:.2g}. {_sentence(run['reason'])}"
        )
    console.say(
        f"Rows: {number(run['rows_read'])} read = {number(run['rows_used'])} used + "
        f"{number(run['rows_refused'])} refused + {number(run['rows_filtered'])} filtered + "
        f"{number(run['rows_duplicate'])} duplicate"
    )
    _reasons(console, run["outcomes"])
    for text in filter(None, [run["warnings"]]):
        console.say(f"Warnings: {text}")
    console.say(f"Tables: {outcome.night.warehouse}  (run {run['run_id']})")
    console.say(CAUTION)


def one_line(console: Console, result: Result, done: str) -> None:
    """One night of several: what became of it."""
    if result.error:
        console.say(f"{result.as_of}  failed (exit {result.error.exit_code}): {str(result.error).splitlines()[0]}")
    elif result.outcome is None:
        console.say(f"{result.as_of}  complete, skipped")
    else:
        run = result.outcome.manifest
        console.say(
            f"{result.as_of}  {done}, revision {run['revision']}: {run['method']}, widest "
            f"±{run['half_width_widest']:.2g}, {number(run['rows_used'])} rows used, {number(run['parties'])} parties"
        )


def _sentence(text: str) -> str:
    """With a capital and a full stop. (str.capitalize would make small letters of the rest: GiB, names of keys.)"""
    return f"{text[:1].upper()}{text[1:]}."


def _reasons(console: Console, outcomes: dict[str, dict[str, int]]) -> None:
    """Every row that is not used, by name; a duplicate whose reason is that it is one says it once."""
    for outcome in ("refused", "filtered", "duplicate"):
        for reason, rows in outcomes.get(outcome, {}).items():
            console.say(f"  {outcome:<9} {number(rows):>11}  {reason if reason != outcome else ''}".rstrip())


def planted(console: Console, outcome: Outcome, brokers: Sequence[str], first: int = 10) -> None:
    """How many of an invented log's brokers the table of the first parties shows."""
    found = outcome.scores.head(first).filter(pl.col("party").is_in(brokers)).height
    console.say(f"Planted: {len(brokers)} parties that join the others; {found} of them are among the first {first}.")


def how_to_go_on(console: Console, outcome: Outcome, config: Path) -> None:
    """One query that works when pasted, and the command that runs the night again."""
    python = shlex.quote(sys.executable)
    console.say("\nAsk the tables (paste this; the SQL works in any DuckDB):\n")
    console.say(
        f'{python} - <<\'END\'\nimport duckdb\nduckdb.sql("""\n{top_brokers(outcome.night)}\n""").show()\nEND\n'
    )
    command = "isthmus" if shutil.which("isthmus") else shlex.quote(str(Path(sys.executable).with_name("isthmus")))
    console.say(f"Run the night again: {command} score {shlex.quote(str(config))} --as-of {outcome.night.as_of}")


def forecast(console: Console, settings: Settings, seen: Forecast) -> dict[str, Any]:
    """What a night would do, in one screen; returned: the same for machines."""
    found, plan = seen.found, seen.plan
    days = (seen.last_day - seen.first_day).days + 1
    about = "" if seen.whole else "about "
    console.say(f"Series {settings.series}, window {seen.first_day} .. {seen.last_day} ({days} days)")
    console.say(f"Log: {settings.log.path}")
    console.say(
        f"  would read {number(found.rows)} rows of {len(found.files)} files ({found.bytes / 2**20:,.1f} MiB), "
        f"in {len(found.parts)} parts; {found.skipped_files} files cannot hold the window"
    )
    if seen.whole:
        console.say(
            f"  all rows were looked at; {days - len(seen.window.missing_days)} of {days} days have usable rows"
        )
    else:
        console.say(f"  {number(seen.sampled_rows)} rows were looked at; the rest is extrapolated")
    told = {outcome: sum(reasons.values()) for outcome, reasons in seen.window.outcomes.items()}
    parts = " + ".join(f"{number(rows)} {outcome}" for outcome, rows in told.items())
    console.say(f"  contacts: {number(sum(told.values()))} = {parts}")
    _reasons(console, seen.window.outcomes)
    console.say(f"Graph: {about}{number(seen.parties)} parties, {about}{number(seen.ties)} ties")
    console.say(f"Method: {plan.method} (engine {plan.engine}). {_sentence(plan.reason)}")
    console.say(
        f"Scoring: about {plan.predicted_seconds:,.1f} s and {plan.predicted_bytes / 2**20:,.0f} MiB, "
        f"of {settings.score.minutes:g} min and {settings.run.memory} allowed"
    )
    for text in seen.warnings:
        console.say(f"Warning: {text}")
    console.say("Nothing was written.")
    return {
        "series": settings.series,
        "definition": settings.definition,
        "window_start": seen.first_day,
        "as_of": seen.last_day,
        "files": len(found.files),
        "bytes": found.bytes,
        "rows": found.rows,
        "rows_looked_at": seen.sampled_rows,
        "days_with_rows": days - len(seen.window.missing_days) if seen.whole else None,
        "outcomes": seen.window.outcomes,
        "parties": seen.parties,
        "ties": seen.ties,
        "method": plan.method,
        "engine": plan.engine,
        "reason": plan.reason,
        "predicted_seconds": plan.predicted_seconds,
        "predicted_bytes": plan.predicted_bytes,
        "warnings": seen.warnings,
        "stopped": seen.stopped,
    }


def history(console: Console, settings: Settings, nights: list[dict[str, Any]], *, show_all: bool) -> dict[str, Any]:
    """One line per night, newest last; with `show_all` also one per run that was replaced, before the one that did.

    Returned: the same for machines.
    """
    warehouse = settings.run.warehouse
    if not nights:
        console.say(f"Series {settings.series}: no night yet in {warehouse}; `isthmus score` publishes the first.")
    else:
        lines: list[list[str]] = []
        before: dict[str, Any] = {}
        for each in nights:
            run = each.get("run", {})
            for old in reversed(run.get("replaces", [])) if show_all else ():
                lines.append([str(each["as_of"]), "replaced", *_figures(old, before)])
            lines.append([str(each["as_of"]), each["state"], *(_figures(run, before) if run else _ended(each))])
            before = run or before
        console.table(
            f"Series {settings.series}, {nights[0]['as_of']} .. {nights[-1]['as_of']}, in {warehouse}",
            ["night", "state", "method", "changed", "gates", "widest ±", "rows used", "refused", "seconds"],
            lines,
            left=5,
        )
        for each in nights:
            if each.get("damaged"):
                console.say(f"Night of {each['as_of']}: {', '.join(each['damaged'])} not as published; run it again.")
            if ending := each.get("ending"):
                again = "; what was published before is still there" if "run" in each else ""
                console.say(f"Night of {each['as_of']}, run that ended {ending['at']}{again}:\n  {ending['error']}")
        if (last := yesterday()) > nights[-1]["as_of"]:
            console.say(f"No night after {nights[-1]['as_of']}; the last whole day (UTC) is {last}.")
    return {"series": settings.series, "warehouse": warehouse, "nights": nights}


def _figures(run: dict[str, Any], before: dict[str, Any]) -> list[str]:
    """The columns of one run. What an older isthmus did not tell is left blank."""
    changed = [name for name in ("definition", "version") if before and before.get(name) != run.get(name)]
    gates = [
        f"{gate['gate']}: {gate['state']}" for gate in run.get("gates", []) if gate["state"] in ("warn", "accepted")
    ]
    return [
        run.get("method", ""),
        " ".join(changed),
        ", ".join(gates) or ("warnings" if run.get("warnings") else ""),
        f"{run['half_width_widest']:.2g}" if "half_width_widest" in run else "",
        number(run["rows_used"]),
        f"{run['rows_refused'] / max(run['rows_read'], 1):.2%}",
        f"{sum(run['seconds'].values()):,.1f}" if "seconds" in run else "",
    ]


def _ended(night: dict[str, Any]) -> list[str]:
    """The same columns, of a night that nothing was published of."""
    ending = night.get("ending", {})
    stops = ", ".join(f"{gate['gate']}: stop" for gate in ending.get("gates", []) if gate["state"] == "stop")
    return ["", "", stops or (f"exit {ending['exit_code']}" if ending else ""), *[""] * 4]


def dictionary(tables: list[Table], *, as_json: bool) -> None:
    """The data dictionary on stdout, where it can be piped."""
    if as_json:
        told = {
            table.name: [
                {"name": c.name, "type": str(c.type), "unit": c.unit, "nullable": c.nullable, "meaning": c.meaning}
                for c in (*PARTITION, *table.columns)
            ]
            for table in tables
        }
        print(json.dumps(told, indent=2, ensure_ascii=False))
        return
    for table in tables:
        print(f"{table.name}: {table.meaning}")
        for c in (*PARTITION, *table.columns):
            unit = f" [{c.unit}]" if c.unit else ""
            print(f"  {c.name:<20} {c.kind:<10} {c.meaning}{unit}{', may be null' if c.nullable else ''}")
        print()
