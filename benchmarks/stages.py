"""Time and peak memory of each stage of `isthmus score`, and of a bare Polars group-by of the same columns.

    python benchmarks/stages.py --log demo                  300,000 invented rows
    python benchmarks/stages.py --log flights               3,000,000 real rows
    python benchmarks/stages.py --log generated --repeat 3  20,000,000 invented rows, string keys

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
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import polars as pl
import psutil

from isthmus.demo import AS_OF, CONFIG, make_log
from isthmus.settings import Settings, load
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


SOURCES = {
    "demo": Source(CONFIG, AS_OF, lambda folder: make_log(folder / "payments")),
    "flights": Source(FLIGHTS, date(2001, 6, 30), lambda folder: (folder / "log").symlink_to(flights())),
    "generated": Source(
        CONFIG, AS_OF, lambda folder: make_log(folder / "payments", rows=20_000_000, parties=1_000_000)
    ),
}


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


def watched(command: list[str]) -> tuple[dict[str, object], dict[str, int], float]:
    """Run a command that puts one JSON object on stdout. Its object, peak bytes per stage, wall seconds."""
    start = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stderr is not None
    peaks, current, said = {}, [0], []

    def look() -> None:
        own = psutil.Process(process.pid)
        while process.poll() is None:
            try:
                family = [own, *own.children(recursive=True)]
                current[0] = max(current[0], sum(member.memory_info().rss for member in family))
            except psutil.NoSuchProcess:
                pass
            time.sleep(0.01)

    def listen(lines: list[str]) -> None:
        for line in process.stderr or ():
            lines.append(line)
            if done := STAGE_DONE.match(line):
                peaks[done[1]], current[0] = current[0], 0

    threads = [threading.Thread(target=look), threading.Thread(target=listen, args=(said,))]
    for thread in threads:
        thread.start()
    answer = process.stdout.read()
    for thread in threads:
        thread.join()
    if process.wait():
        sys.exit(f"{' '.join(command)} ended with {process.returncode}:\n{''.join(said)}")
    peaks["after"] = current[0]
    return json.loads(answer), peaks, time.perf_counter() - start


def group_by(settings: Settings, as_of: date) -> dict[str, object]:
    """The least that ingest could do: read the same columns, add the window's rows up, refuse nothing."""
    columns = settings.log.columns
    first = as_of - timedelta(days=settings.window.days - 1)
    extra = [pl.col(columns.amount).sum()] if columns.amount else []
    extra += [pl.col(columns.id).max()] if columns.id else []  # so that it is read
    start = time.perf_counter()
    ties = (
        pl.scan_parquet(settings.log.path, hive_partitioning=False)
        .filter(pl.col(columns.time).dt.date().is_between(first, as_of))
        .group_by(columns.sender, columns.receiver)
        .agg(
            pl.len().alias("contacts"),
            pl.col(columns.time).min().alias("first_seen"),
            pl.col(columns.time).max().alias("last_seen"),
            *extra,
        )
        .collect(engine="streaming")
    )
    return {"seconds": {"group-by": time.perf_counter() - start}, "ties": ties.height}


def measure(log: str, minutes: float, repeat: int) -> None:
    moment = datetime.now(UTC).isoformat(timespec="seconds")
    for turn in range(1, repeat + 1):
        config = prepare(log, minutes)
        as_of = str(SOURCES[log].as_of)
        bare = [sys.executable, __file__, "--log", log, "--bare"]
        score = [sys.executable, "-m", "isthmus", "score", str(config), "--as-of", as_of, "--json"]
        for what, command in (("group-by", bare), ("score", score)):
            told, peaks, wall = watched(command)
            line = {
                "log": log,
                "what": what,
                "measured": moment,
                "turn": turn,
                "wall_seconds": wall,
                "seconds": told["seconds"],
                "peak_bytes": peaks if what == "score" else {"group-by": max(peaks.values())},
                **{key: told.get(key) for key in ("rows_read", "parties", "ties", "method", "samples")},
            }
            with LINES.open("a") as lines:
                lines.write(json.dumps(line) + "\n")
            print(json.dumps(line), flush=True)


def write_table() -> None:
    """The last measurement of each log: median time and largest memory over its turns."""
    lines = [json.loads(line) for line in LINES.read_text().splitlines()]
    last = {line["log"]: line["measured"] for line in lines}
    cells = pl.DataFrame(
        [
            {"log": line["log"], "stage": stage, "seconds": seconds, "bytes": line["peak_bytes"].get(stage)}
            for line in lines
            if line["measured"] == last[line["log"]]
            for stage, seconds in _with_ingest(line)
        ]
    )
    table = cells.group_by("log", "stage", maintain_order=True).agg(pl.col("seconds").median(), pl.col("bytes").max())
    wide: dict[str, dict[str, str]] = {}
    for log, stage, seconds, size in table.iter_rows():
        wide.setdefault(stage, {})[log] = f"{seconds:.1f} s, {size / 2**20:,.0f} MiB" if size else f"{seconds:.1f} s"
    logs = [log for log in SOURCES if log in last]
    rows = [f"| {stage} | {' | '.join(found.get(log, '') for log in logs)} |" for stage, found in wide.items()]
    TABLE.write_text("\n".join([f"| stage | {' | '.join(logs)} |", "|---|" + "---:|" * len(logs), *rows]) + "\n")


def _with_ingest(line: dict[str, dict[str, float]]) -> list[tuple[str, float]]:
    """Stages in order, the three of ingest also added up, to stand beside the bare group-by."""
    stages = list(line["seconds"].items())
    if line["what"] == "group-by":
        return stages
    peaks = line["peak_bytes"]
    peaks["ingest, all"] = max(peaks.get(stage, 0) for stage in INGEST)
    return [
        ("ingest, all", sum(line["seconds"][stage] for stage in INGEST)),
        *stages,
        ("start to end", line["wall_seconds"]),
    ]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--log", choices=SOURCES, required=True)
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--minutes", type=float, default=1.0, help="score.minutes of the run")
    parser.add_argument("--make", action="store_true", help=argparse.SUPPRESS)
    parser.add_argument("--bare", action="store_true", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.make:
        SOURCES[asked.log].make(home(asked.log))
    elif asked.bare:
        print(json.dumps(group_by(load(home(asked.log) / "isthmus.toml"), SOURCES[asked.log].as_of)))
    else:
        measure(asked.log, asked.minutes, asked.repeat)
        write_table()
        print(TABLE.read_text())


if __name__ == "__main__":
    main()
