"""Nights under faults, for as long as one likes: how many were published, what was done to them, and what readers saw.

    python benchmarks/soak.py                     ten minutes
    python benchmarks/soak.py --minutes 120 --seed 7 --folder /tmp/soak

Over and over the log of one of a few days changes and the night is run again, as a process of its own. Most runs meet
a fault: kill -9 or SIGTERM at a random instant, a kept file cut short or altered, a log file replaced meanwhile, two
runs at once. All the while another process asks DuckDB for the night's scores and its row of `runs`. Every answer must
be one whole night: all rows of one run_id, as many as its row of `runs` tells, ranked without a gap. A query that meets
the very instant of the switch may find two runs in two tables; it is asked again, as a careful reader does, and what is
wrong twice is a wrong read. Prints one line a minute and the totals; exits 1 on a wrong read, an exit code that the
fault does not explain, or when the last night, which nothing disturbs, is not published.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import duckdb
import polars as pl

AS_OF = date(2026, 11, 30)
DAYS = [AS_OF - timedelta(days=at) for at in range(4)]
CONFIG = """series = "soak"
[log]
path = "log"
[window]
days = 4
[score]
minutes = 1.0
[gates]
volume = "off"
overlap = "off"
[run]
threads = 1
"""
QUERY = """
SELECT count(DISTINCT s.run_id), count(*), any_value(r.parties), count(DISTINCT r.run_id), sum(s.rank)
FROM read_parquet('{0}/runs/*/*/runs.parquet') r JOIN read_parquet('{0}/scores/*/*/scores.parquet') s USING (run_id)
"""
FAULTS = ("none", "kill", "terminate", "damage", "replace", "two at once")


def write_day(folder: Path, day: date, draw: random.Random) -> None:
    """A day's log, put in place by one rename, as a careful writer does."""
    pairs = [(draw.randrange(300), draw.randrange(300)) for _ in range(400)]
    noon = datetime(day.year, day.month, day.day, 12, tzinfo=UTC)
    frame = pl.DataFrame(
        {
            "sender": [f"p{one:03d}" for one, _ in pairs],
            "receiver": [f"p{two:03d}" for _, two in pairs],
            "time": [noon] * len(pairs),
        }
    )
    place = folder / f"dt={day}"
    place.mkdir(parents=True, exist_ok=True)
    frame.write_parquet(place / ".part")
    os.replace(place / ".part", place / "part.parquet")


def whole(warehouse: str) -> str:
    """Empty, or what is wrong with the answer: it must be one run, all of its parties, ranks 1..n."""
    try:
        ((*found,),) = duckdb.sql(QUERY.format(warehouse)).fetchall()
    except duckdb.Error as error:
        return str(error)[:200]
    runs, rows, parties, told, ranks = found
    return "" if runs == told == 1 and rows == parties and ranks == rows * (rows + 1) / 2 else str(found)


def read_for_ever(warehouse: str, stop: Any, told: Any) -> None:
    """Ask until told to stop; puts (answers, asked again, wrong, one that was wrong)."""
    answers, again, wrong, example = 0, 0, 0, ""
    while not stop.is_set():
        answers += 1
        if whole(warehouse):
            again += 1
            if problem := whole(warehouse):
                wrong += 1
                example = example or problem
    told.put((answers, again, wrong, example))


def start(config: Path) -> subprocess.Popen[bytes]:
    command = [sys.executable, "-m", "isthmus", "score", str(config), "--as-of", str(AS_OF)]
    return subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def damage(work: Path, draw: random.Random) -> bool:
    """Cut a kept file short, or change a byte of it."""
    files = sorted(path for path in work.rglob("*") if path.is_file() and path.stat().st_size > 16)
    if not files:
        return False
    path = draw.choice(files)
    raw = bytearray(path.read_bytes())
    if draw.random() < 0.5:
        del raw[len(raw) // 2 :]
    else:
        raw[draw.randrange(len(raw))] ^= 1
    path.write_bytes(raw)
    return True


def once(root: Path, fault: str, usual: float, draw: random.Random) -> list[int]:
    """One change of the log and one run, disturbed by the fault; the exit codes."""
    config = root / "isthmus.toml"
    write_day(root / "log", draw.choice(DAYS), draw)
    if fault == "damage":
        damage(root / "work" / "series=soak", draw)
    runs = [start(config)]
    if fault in ("kill", "terminate"):
        time.sleep(draw.uniform(0, 1.1 * usual))
        runs[0].send_signal(signal.SIGKILL if fault == "kill" else signal.SIGTERM)
    elif fault == "replace":
        time.sleep(draw.uniform(0, usual))
        write_day(root / "log", draw.choice(DAYS), draw)
    elif fault == "two at once":
        time.sleep(draw.uniform(0, usual))
        runs.append(start(config))
    return [run.wait() for run in runs]


def soak(root: Path, minutes: float, seed: int) -> int:
    draw = random.Random(seed)
    (root / "isthmus.toml").write_text(CONFIG)
    for day in DAYS:
        write_day(root / "log", day, draw)
    began = time.monotonic()
    if start(root / "isthmus.toml").wait() != 0:
        sys.exit("the first night was not published; run it by hand to see why")
    usual = time.monotonic() - began
    stop, told = multiprocessing.Event(), multiprocessing.Queue()
    reader = multiprocessing.Process(target=read_for_ever, args=(str(root / "warehouse"), stop, told))
    reader.start()
    ends, faults, failed = time.monotonic() + 60 * minutes, Counter[str](), Counter[str]()
    published, next_line = 0, time.monotonic() + 60
    while time.monotonic() < ends:
        fault = draw.choice(FAULTS)
        codes = once(root, fault, usual, draw)
        faults[fault] += 1
        published += codes.count(0)
        allowed = {"kill": {0, -signal.SIGKILL}, "terminate": {0, 75, -signal.SIGTERM}, "replace": {0, 75}}
        allowed["two at once"] = {0, 75}
        if not set(codes) <= allowed.get(fault, {0}):
            failed[f"{fault}: exit {codes}"] += 1
        if time.monotonic() > next_line:
            print(f"{published} nights published, {faults.total() - faults['none']} faults", flush=True)
            next_line += 60
    last = start(root / "isthmus.toml").wait()
    stop.set()
    answers, again, wrong, example = told.get()
    reader.join()
    print(f"nights published   {published + (last == 0)}")
    print(f"faults injected    {faults.total() - faults['none']}  ({dict(faults)})")
    print(f"reads              {answers:,}  ({again} asked again)")
    print(f"wrong reads        {wrong}  {example if wrong else ''}")
    print(f"unexpected ends    {failed.total()}  {dict(failed) if failed else ''}")
    return int(bool(wrong or failed or last))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=float, default=10.0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--folder", type=Path, help="where to work; a temporary folder otherwise")
    asked = parser.parse_args()
    if asked.folder:
        asked.folder.mkdir(parents=True)
        sys.exit(soak(asked.folder, asked.minutes, asked.seed))
    with tempfile.TemporaryDirectory() as folder:
        sys.exit(soak(Path(folder), asked.minutes, asked.seed))


if __name__ == "__main__":
    main()
