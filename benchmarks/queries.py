"""Two queries of an analyst on a year of nights, through DuckDB and Polars, for several ways to write the scores.

    python benchmarks/queries.py FOLDER                                    365 nights of 50,000 parties
    python benchmarks/queries.py FOLDER --parties 1000000 --distinct 4     a year of 1,000,000, of which 4 nights are
                                                                           written and the others are links to them

FOLDER holds what is generated and is used again. Each measurement is a process of its own with two threads; told is
the median of five runs after one that is not counted, so the file system's cache is warm: what a disk adds is not in
it. Links share their bytes in that cache, but every query opens and reads them as files of their own.
"""

from __future__ import annotations

import argparse
import json
import os
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl

from isthmus.tables import SCORES, conform

LAST = date(2026, 11, 30)
TURNS, THREADS = 5, 2
TOP = "rank, party, betweenness, lower, upper, rank_best, rank_worst, degree"
HISTORY = "as_of, rank, betweenness, lower, upper, degree"


@dataclass(frozen=True)
class Layout:
    """A way to write a night's scores. `thin`: only what a history shows; `bloom`: by PyArrow, with bloom filters."""

    sort: str = "rank"
    row_group: int | None = None
    thin: bool = False
    bloom: bool = False

    def write(self, scores: pl.DataFrame, path: Path) -> None:
        frame = scores.sort(self.sort)
        if self.thin:
            frame = frame.select("party", "rank", "betweenness", "lower", "upper", "degree", "run_id")
        if not self.bloom:
            frame.write_parquet(path, row_group_size=self.row_group)
            return
        import pyarrow.parquet

        pyarrow.parquet.write_table(
            frame.to_arrow(),
            path,
            compression="zstd",
            row_group_size=self.row_group,
            bloom_filter_options={"party": {"ndv": self.row_group or frame.height, "fpp": 0.01}},
        )


LAYOUTS = {
    "as published": Layout(),  # Polars makes groups of about 128k rows
    "rank, groups of 16k": Layout(row_group=16_384),
    "rank, groups of 128k, bloom": Layout(row_group=131_072, bloom=True),
    "party, groups of 8k": Layout("party", 8_192),
    "party, groups of 16k": Layout("party", 16_384),
    "party, groups of 64k": Layout("party", 65_536),
    "party, thin, groups of 16k": Layout("party", 16_384, thin=True),
    "party, thin, groups of 128k": Layout("party", 131_072, thin=True),
}


def key(number: int) -> str:
    """As long as an IBAN, and in no order that a night's ranks know."""
    return f"XA{number * 2_654_435_761 % 2**32:010d}{number:08d}"


def night(parties: int, day: date) -> pl.DataFrame:
    """The scores of an invented night: few brokers and many who lie between nobody, as in a real one."""
    draw = np.random.default_rng([parties, day.toordinal()])
    standing = np.random.default_rng(parties).pareto(1.2, parties)  # of the party, the same every night
    value = np.maximum(standing * draw.lognormal(0, 0.2, parties) - 0.5, 0)
    value /= value.sum()
    width, degree = value * 0.1 + 1e-6, 1 + (standing * 3).astype(np.int64)
    order = np.argsort(-value, kind="stable")
    rank = np.empty(parties, np.int64)
    rank[order] = np.arange(1, parties + 1)
    start = datetime.combine(day, datetime.min.time())
    moments = pl.Series((start - timedelta(days=27)).timestamp() * 1e6 + draw.integers(0, 28 * 86_400, parties) * 1e6)
    seen = moments.cast(pl.Int64).cast(pl.Datetime("us", "UTC"))
    frame = pl.DataFrame(
        {
            "party": [key(number) for number in range(parties)],
            "betweenness": value,
            "lower": np.maximum(value - width, 0),
            "upper": value + width,
            "std_error": width / 4,
            "pairs": value * parties * parties,
            "rank": rank,
            "rank_best": np.maximum(rank - rank // 10, 1),
            "rank_worst": np.minimum(rank + rank // 10, parties),
            "top": np.where(rank < 90, "in", np.where(rank > 110, "out", "open")),
            "degree": degree,
            "degree_in": (degree + 1) // 2,
            "degree_out": degree // 2,
            "contacts_in": degree * draw.integers(1, 9, parties),
            "contacts_out": degree * draw.integers(1, 9, parties),
            "amount_in": draw.lognormal(5, 2, parties).round(2),
            "amount_out": draw.lognormal(5, 2, parties).round(2),
            "component": np.zeros(parties, np.int64),
            "component_size": np.full(parties, parties),
            "first_seen": seen,
            "last_seen": seen,
            "run_id": [f"s-{day}-0123456789abcdef"] * parties,
        },
        strict=False,
    )
    return conform(frame, SCORES)


def generate(folder: Path, layouts: list[str], nights: int, parties: int, distinct: int) -> None:
    days = [LAST - timedelta(days=back) for back in range(nights)]
    written: dict[str, list[Path]] = {name: [] for name in layouts}
    for at, day in enumerate(days):
        paths = {name: file(folder, name, day) for name in layouts}
        missing = [name for name, path in paths.items() if not path.exists()]
        scores = night(parties, day) if missing and at < distinct else None
        for name, path in paths.items():
            path.parent.mkdir(parents=True, exist_ok=True)
            if name in missing and scores is not None:
                LAYOUTS[name].write(scores, path)
            elif name in missing:
                os.link(written[name][at % distinct], path)
            written[name].append(path)


def file(folder: Path, layout: str, day: date) -> Path:
    return folder / layout.replace(", ", "-").replace(" ", "-") / "series=s" / f"as_of={day}" / "scores.parquet"


def queries(engine: str, files: str, parties: int) -> dict[str, Callable[[], int]]:
    """Name -> the query, which gives the rows that it found."""
    party = key(parties // 3)
    if engine == "duckdb":
        import duckdb

        connection = duckdb.connect(config={"threads": THREADS})
        table = f"read_parquet('{files}', hive_partitioning = true)"

        def ask(sql: str) -> Callable[[], int]:
            return lambda: len(connection.sql(sql).fetchall())

        where = f"WHERE series = 's' AND as_of = DATE '{LAST - timedelta(days=1)}'"
        return {
            "top 50": ask(f"SELECT {TOP} FROM {table} {where} ORDER BY rank LIMIT 50"),
            "history": ask(f"SELECT {HISTORY} FROM {table} WHERE series = 's' AND party = '{party}' ORDER BY as_of"),
        }
    lazy = pl.scan_parquet(files, hive_partitioning=True, hive_schema={"series": pl.String, "as_of": pl.Date})
    one_night = lazy.filter(pl.col("series") == "s", pl.col("as_of") == LAST - timedelta(days=1))
    one_party = lazy.filter(pl.col("series") == "s", pl.col("party") == party)
    top = one_night.select(TOP.split(", ")).sort("rank").head(50)
    return {
        "top 50": lambda: top.collect().height,
        "history": lambda: one_party.select(HISTORY.split(", ")).sort("as_of").collect().height,
    }


def measure(folder: Path, engine: str, layout: str, query: str, parties: int) -> dict[str, Any]:
    """One line, measured in this process."""
    files = str(file(folder, layout, LAST).parents[2] / "*" / "*" / "scores.parquet")
    ask = queries(engine, files, parties)[query]
    rows, seconds = ask(), []
    for _ in range(TURNS):
        began = time.perf_counter()
        ask()
        seconds.append(time.perf_counter() - began)
        if sum(seconds) > 60:
            break
    return {"layout": layout, "engine": engine, "query": query, "rows": rows, "seconds": statistics.median(seconds)}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--nights", type=int, default=365)
    parser.add_argument("--parties", type=int, default=50_000)
    parser.add_argument("--distinct", type=int, help="write only so many nights; the others are links to them")
    parser.add_argument("--layout", action="append", choices=LAYOUTS, help="one of them; may be repeated")
    parser.add_argument("--one", nargs=3, metavar=("ENGINE", "LAYOUT", "QUERY"), help=argparse.SUPPRESS)
    told = parser.parse_args()
    folder = told.folder / f"{told.nights}x{told.parties}"
    if told.one:
        print(json.dumps(measure(folder, *told.one, told.parties)))
        return
    layouts = told.layout or list(LAYOUTS)
    generate(folder, layouts, told.nights, told.parties, told.distinct or told.nights)
    print(f"{told.nights} nights of {told.parties:,} parties, {THREADS} threads; seconds, median of {TURNS}\n")
    print("| layout | MB a night | DuckDB: top 50 | history | Polars: top 50 | history |\n|---|---|---|---|---|---|")
    for layout in layouts:
        cells = [f"{file(folder, layout, LAST).stat().st_size / 1e6:.1f}"]
        for engine in ("duckdb", "polars"):
            for query, expected in (("top 50", 50), ("history", told.nights)):
                if query == "top 50" and LAYOUTS[layout].thin:
                    cells.append("")  # it has not the columns
                    continue
                ran = subprocess.run(
                    [sys.executable, __file__, *sys.argv[1:], "--one", engine, layout, query],
                    env=os.environ | {"POLARS_MAX_THREADS": str(THREADS)},
                    capture_output=True,
                    text=True,
                    check=True,
                )
                line = json.loads(ran.stdout)
                assert line["rows"] == expected, line
                cells.append(f"{line['seconds']:.2f}")
        print(f"| {layout} | {' | '.join(cells)} |", flush=True)


if __name__ == "__main__":
    main()
