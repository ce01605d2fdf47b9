"""Time and peak memory of each stage of `isthmus score`, and of a bare Polars group-by of the same columns.

    python benchmarks/stages.py --log demo                  300,000 invented rows
    python benchmarks/stages.py --log flights               3,000,000 real rows
    python benchmarks/stages.py --log generated --repeat 3  20,000,000 invented rows, string keys
    python benchmarks/stages.py --log email --repeat 1      20,000,000 contacts of 7.5 million invented messages
    python benchmarks/stages.py --log calls --repeat 1      20,000,000 invented records of calls and texts
    python benchmarks/stages.py --log payments --repeat 1   20,000,000 invented payments

Every measurement is a process of its own and one JSON line in stages.jsonl; bare group-by and `isthmus score` take
turns, each starting with empty folders. Memory is the resident set of the process and its children, looked at every
10 ms from outside, so it holds the file pages that are mapped; a stage's is the most seen while it ran.
"""

from __future__ import annotations

import argparse
import json
import re
import shutil
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl
import psutil

from isthmus.cluster import open_door
from isthmus.ingest import read_window, survey
from isthmus.inventions import LAST_DAY, calls, email, payments
from isthmus.inventions.plain import CONFIG, make_log
from isthmus.settings import Settings, load, mapped
from isthmus.watch import Watch
from open_graphs import DATA, flights

HERE = Path(__file__).parent
LINES, TABLE = HERE / "stages.jsonl", HERE / "stages.md"
INGEST = ("survey", "read", "combine")
STAGE_DONE = re.compile(r"^(\w+) +[\d.]+ s$")  # what the command says when a stage has ended

FLIGHTS = """\
series = "flights"

[log]
path = "log"

[log.columns]
sender = "origin"
receiver = "destination"
time = "date"

[window]
days = 181
"""


@dataclass(frozen=True)
class Source:
    """A log, the settings to read it with, and the last day of its window."""

    config: str
    as_of: date
    make: Callable[[Path], object]


def lenient(config: str, days: int) -> str:
    """The settings of a kind's invented log, for a window of so many days; its dirt is no news here."""
    return config.replace("[window]\ndays = 28\n", "") + (
        f"\n[window]\ndays = {days}\n[gates]\nrefused_limit = 1.0\nnulls_limit = 1.0\n"
    )


SOURCES = {
    "demo": Source(CONFIG, LAST_DAY, lambda folder: make_log(folder / "plain", LAST_DAY)),
    "flights": Source(FLIGHTS, date(2001, 6, 30), lambda folder: (folder / "log").symlink_to(flights())),
    "generated": Source(
        CONFIG, LAST_DAY, lambda folder: make_log(folder / "plain", LAST_DAY, people=1_000_000, rows=20_000_000)
    ),
    "email": Source(
        lenient(email.CONFIG, 7),
        LAST_DAY,
        lambda folder: email.make_log(folder / "email", LAST_DAY, days=7, people=350_000),
    ),
    "calls": Source(
        lenient(calls.CONFIG, 7),
        LAST_DAY,
        lambda folder: calls.make_log(folder / "calls", LAST_DAY, days=7, people=1_250_000),
    ),
    "payments": Source(
        lenient(payments.CONFIG, 28),
        LAST_DAY,
        lambda folder: payments.make_log(folder / "payments", LAST_DAY, days=28, people=715_000),
    ),
}
ONLY_INGEST = ("email", "calls", "payments")  # of these logs
# The columns of the two sides, by kind; a list of receivers is a row each.
SIDES = {"plain": ("sender", "receiver"), "email": ("sender", "recipients"), "calls": ("sender", "receiver")}
SIDES |= {"payments": ("debtor_account", "creditor_account")}


def home(log: str) -> Path:
    return DATA / "stages" / log


def prepare(log: str, minutes: float) -> Path:
    """The settings file, its log beside it (made once), no warehouse and no work folder."""
    folder, source = home(log), SOURCES[log]
    folder.mkdir(parents=True, exist_ok=True)
    if not (folder / "made").exists():
        # in a process of its own: what it leaves in memory is nobody's measurement
        subprocess.run([sys.executable, __file__, "--log", log, "--make"], check=True)
        (folder / "made").touch()
    for left in ("warehouse", "work"):
        shutil.rmtree(folder / left, ignore_errors=True)
    config = folder / "isthmus.toml"
    config.write_text(f"{source.config}\n[score]\nminutes = {minutes}\n")
    return config


@dataclass
class Seen:
    """What was seen from outside: per stage the peak of memory and the processor time, and the wall time of all."""

    peak_bytes: dict[str, int] = field(default_factory=dict)
    cpu_seconds: dict[str, float] = field(default_factory=dict)
    wall_seconds: float = 0.0


def watched(command: list[str]) -> tuple[dict[str, Any], Seen]:
    """Run a command that puts one JSON object on stdout and one line per finished stage on stderr."""
    start = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stdout is not None
    seen, said = Seen(), []
    peak, spent, before = 0, 0.0, 0.0  # of the stage that runs; of the process so far; when the stage began

    def look() -> None:
        nonlocal peak, spent
        own = psutil.Process(process.pid)
        while process.poll() is None:
            with suppress(psutil.NoSuchProcess):
                family = [own, *own.children(recursive=True)]
                peak = max(peak, sum(member.memory_info().rss for member in family))
                spent = sum(sum(member.cpu_times()[:2]) for member in family)
            time.sleep(0.01)

    def end_stage(name: str) -> None:
        nonlocal peak, before
        seen.peak_bytes[name], seen.cpu_seconds[name] = peak, spent - before
        peak, before = 0, spent

    def listen() -> None:
        for line in process.stderr or ():
            said.append(line)
            if done := STAGE_DONE.match(line):
                end_stage(done[1])

    threads = [threading.Thread(target=look), threading.Thread(target=listen)]
    for thread in threads:
        thread.start()
    answer = process.stdout.read()
    for thread in threads:
        thread.join()
    if process.wait():
        sys.exit(f"{' '.join(command)} ended with {process.returncode}:\n{''.join(said)}")
    end_stage("after")
    seen.wall_seconds = time.perf_counter() - start
    return json.loads(answer), seen


def group_by(settings: Settings, as_of: date) -> dict[str, Any]:
    """The least that ingest could do: read the same columns, add the window's rows up, refuse nothing."""
    columns = mapped(settings.log.columns)
    sender, receiver = (columns.pop(side) for side in SIDES[settings.log.kind])
    first, when = as_of - timedelta(days=settings.window.days - 1), columns["time"]
    start, spent = time.perf_counter(), time.process_time()
    rows = pl.scan_parquet(settings.log.path, hive_partitioning=False)
    rows = rows.filter(pl.col(when).dt.date().is_between(first, as_of))
    if settings.log.kind == "email":
        rows = rows.explode(receiver)
    ties = (
        rows.group_by(sender, receiver)
        .agg(
            pl.len().alias("contacts"),
            pl.col(when).min().alias("first_seen"),
            pl.col(*set(columns.values())).max(),  # so that they are read, and the time's last
        )
        .collect(engine="streaming")
    )
    took, spent = time.perf_counter() - start, time.process_time() - spent
    return {"seconds": {"group-by": took}, "cpu_seconds": {"group-by": spent}, "ties": ties.height}


def ingest(settings: Settings, as_of: date) -> dict[str, Any]:
    """The stages of ingest alone, as a night runs them."""
    work = settings.work
    work.mkdir(parents=True)
    watch = Watch()
    with open_door(threads=settings.run.threads, scratch=str(work)) as door:
        with watch.stage("survey"):
            found = survey(settings.log, as_of - timedelta(days=settings.window.days - 1), as_of, door)
        window = read_window(found, settings.ties, settings.reading, work, door, watch)
    return {"seconds": watch.seconds, "rows_read": window.rows_read, "ties": window.ties.height}


def measure(log: str, minutes: float, repeat: int) -> None:
    moment = datetime.now(UTC).isoformat(timespec="seconds")
    for turn in range(1, repeat + 1):
        config = prepare(log, minutes)
        as_of = str(SOURCES[log].as_of)
        bare = [sys.executable, __file__, "--log", log, "--bare"]
        score = [sys.executable, "-m", "isthmus", "score", str(config), "--as-of", as_of, "--json"]
        alone = [sys.executable, __file__, "--log", log, "--ingest"]
        whole = ("ingest", alone) if log in ONLY_INGEST else ("score", score)
        for what, command in (("group-by", bare), whole):
            told, seen = watched(command)
            if what == "group-by":  # one stage, and its own figures leave out what loading Polars took
                seen.peak_bytes = {what: max(seen.peak_bytes.values())}
                seen.cpu_seconds = told["cpu_seconds"]
            elif what == "ingest":  # nobody says when a stage ends
                seen.peak_bytes = dict.fromkeys(told["seconds"], max(seen.peak_bytes.values()))
                seen.cpu_seconds = dict.fromkeys(told["seconds"], 0.0) | {"read": sum(seen.cpu_seconds.values())}
            line = {
                "log": log,
                "what": what,
                "measured": moment,
                "turn": turn,
                "seconds": told["seconds"],
                **vars(seen),
            }
            line |= {key: told[key] for key in ("rows_read", "parties", "ties", "method", "samples") if key in told}
            with LINES.open("a") as lines:
                lines.write(json.dumps(line) + "\n")
            print(json.dumps(line), flush=True)


def write_table() -> None:
    """The last measurement of each log: median times and largest memory over its turns."""
    lines = [json.loads(line) for line in LINES.read_text().splitlines()]
    last = {line["log"]: line["measured"] for line in lines}
    kept = [figures for line in lines if line["measured"] == last[line["log"]] for figures in _figures(line)]
    names = ["log", "stage", "seconds", "cpu", "bytes"]
    table = (
        pl.DataFrame(kept, schema=names, orient="row")
        .group_by("log", "stage", maintain_order=True)
        .agg(pl.col("seconds", "cpu").median(), pl.col("bytes").max())
    )
    wide: dict[str, dict[str, str]] = {}
    for log, stage, seconds, cpu, size in table.iter_rows():
        wide.setdefault(stage, {})[log] = f"{seconds:.1f} s, {cpu:.1f} CPU s, {size / 2**20:,.0f} MiB"
    logs = [log for log in SOURCES if log in last]
    rows = [f"| {stage} | {' | '.join(found.get(log, '') for log in logs)} |" for stage, found in wide.items()]
    TABLE.write_text("\n".join([f"| stage | {' | '.join(logs)} |", "|---|" + "---:|" * len(logs), *rows]) + "\n")


def _figures(line: dict[str, Any]) -> list[tuple[str, str, float, float, int]]:
    """Log, stage, seconds, processor seconds, bytes; ingest as a whole first, to stand beside the bare group-by."""
    log, seconds, cpu, peak = line["log"], line["seconds"], line["cpu_seconds"], line["peak_bytes"]
    each = [(log, stage, seconds[stage], cpu[stage], peak[stage]) for stage in seconds]
    if line["what"] == "group-by":
        return each
    ingest = [part for part in each if part[1] in INGEST]
    return [
        (log, "ingest, all", sum(p[2] for p in ingest), sum(p[3] for p in ingest), max(p[4] for p in ingest)),
        *each,
        (log, "start to end", line["wall_seconds"], sum(cpu.values()), max(peak.values())),
    ]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--log", choices=SOURCES, required=True)
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--minutes", type=float, default=1.0, help="score.minutes of the run")
    parser.add_argument("--make", action="store_true", help=argparse.SUPPRESS)
    parser.add_argument("--ingest", action="store_true", help=argparse.SUPPRESS)
    parser.add_argument("--bare", action="store_true", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.make:
        SOURCES[asked.log].make(home(asked.log))
    elif asked.ingest:
        print(json.dumps(ingest(load(home(asked.log) / "isthmus.toml"), SOURCES[asked.log].as_of)))
    elif asked.bare:
        print(json.dumps(group_by(load(home(asked.log) / "isthmus.toml"), SOURCES[asked.log].as_of)))
    else:
        measure(asked.log, asked.minutes, asked.repeat)
        write_table()
        print(TABLE.read_text())


if __name__ == "__main__":
    main()
