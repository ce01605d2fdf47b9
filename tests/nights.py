"""A small log, its settings and the command line, for the tests that look at whole nights."""

from __future__ import annotations

import contextlib
import io
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl

from isthmus.cli import exit_code
from isthmus.settings import load

AS_OF = date(2026, 3, 4)
FIRST = date(2026, 3, 1)
DAYS = [FIRST + timedelta(days=at) for at in range(4)]
# Every day the same: two triangles, joined by one party that is in neither. No message may hold any of these keys.
BETWEEN = "zia@k7"
PAIRS = [
    ("ada@k1", "ben@k2"),
    ("ben@k2", "cas@k3"),
    ("cas@k3", "ada@k1"),
    ("cas@k3", BETWEEN),
    (BETWEEN, "dov@k4"),
    ("dov@k4", "eli@k5"),
    ("eli@k5", "fay@k6"),
    ("fay@k6", "dov@k4"),
]
PARTIES = sorted({party for pair in PAIRS for party in pair})


@dataclass(frozen=True)
class Said:
    """What a command left: exit code, stdout, stderr."""

    code: int
    out: str
    err: str


def isthmus(*arguments: object) -> Said:
    """Run the command line in this process."""
    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        code = exit_code([str(argument) for argument in arguments])
    return Said(code, out.getvalue(), err.getvalue())


def noon(day: date) -> datetime:
    return datetime(day.year, day.month, day.day, 12, tzinfo=UTC)


def rows(day: date, pairs: list[tuple[str, str]] = PAIRS) -> pl.DataFrame:
    """One row per pair, a minute apart from noon on."""
    return pl.DataFrame(
        {
            "from": [sender for sender, _ in pairs],
            "to": [receiver for _, receiver in pairs],
            "sent_at": [noon(day) + timedelta(minutes=at) for at in range(len(pairs))],
            "value": [10.0 + at for at in range(len(pairs))],
        },
        schema={"from": pl.String, "to": pl.String, "sent_at": pl.Datetime("us", "UTC"), "value": pl.Float64},
    )


class Site:
    """A folder with a log of four days, its settings, and the warehouse and work folders that a night makes."""

    def __init__(self, root: Path, more: str = "", *, log: bool = True) -> None:
        self.root = root
        root.mkdir(parents=True, exist_ok=True)
        self.log, self.warehouse, self.work = root / "log", root / "warehouse", root / "work"
        self.config = root / "isthmus.toml"
        self.settings(more)
        if log:
            for day in DAYS:
                self.write(rows(day), day)

    def settings(self, more: str = "", columns: str = 'amount = "value"') -> None:
        if "nulls" not in more:  # nearly every log here has a bad row or two among its 32
            rest = more.split("[gates]\n", 1)
            more = f"{rest[0]}\n[gates]\nnulls_limit = 1.0\n{rest[1] if rest[1:] else ''}"
        self.config.write_text(
            f'series = "s"\n[log]\npath = "log"\n[log.columns]\nsender = "from"\nreceiver = "to"\ntime = "sent_at"\n'
            f"{columns}\n[window]\ndays = 4\n[run]\nthreads = 1\n{more}\n",
            encoding="utf-8",
        )

    def file(self, day: date) -> Path:
        return self.log / f"dt={day}" / "part-0.parquet"

    def write(self, frame: pl.DataFrame, day: date = DAYS[0]) -> None:
        self.file(day).parent.mkdir(parents=True, exist_ok=True)
        frame.write_parquet(self.file(day))

    def score(self, *more: object) -> Said:
        return isthmus("score", self.config, "--as-of", AS_OF, *more)

    def check(self, *more: object) -> Said:
        return isthmus("check", self.config, "--as-of", AS_OF, *more)

    def table(self, name: str) -> pl.DataFrame:
        return pl.read_parquet(self.warehouse / name / "series=s" / f"as_of={AS_OF}" / f"{name}.parquet")

    def published(self) -> dict[str, bytes]:
        """Every file that readers may come across in the warehouse, hidden ones beside theirs too, and its bytes."""
        return {
            str(path.relative_to(self.warehouse)): path.read_bytes()
            for path in sorted(self.warehouse.rglob("*"))
            if path.is_file()
            and path.relative_to(self.warehouse).parts[0] not in (".nights", ".leases", "isthmus.duckdb")
        }

    @property
    def reading(self) -> Path:
        """Where the log's rows and days are kept between nights."""
        return load(self.config).reading

    def tree(self) -> dict[str, tuple[Any, ...]]:
        """Everything below the root: size and time of the last change of each file and folder."""
        return {
            str(path.relative_to(self.root)): (path.is_dir(), path.stat().st_size, path.stat().st_mtime_ns)
            for path in sorted([self.root, *self.root.rglob("*")])
        }
