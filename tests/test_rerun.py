"""A night is a function of its settings and its log: run again, it leaves the same files."""

from __future__ import annotations

import json
import os
import random
import subprocess
import sys
from datetime import date
from itertools import pairwise
from pathlib import Path

import polars as pl
import pytest

from nights import AS_OF, DAYS, PAIRS, Site, rows

SAME = ("scores", "ties", "refused")
# columns of `runs` that tell of the run and not of the night
OF_THE_RUN = {"gates", "seconds", "stages", "predictions", "replaces", "peak_memory_bytes", "started_at", "finished_at"}


def tables(files: dict[str, bytes]) -> dict[str, bytes]:
    return {name: data for name, data in files.items() if name.split("/")[0] in SAME}


@pytest.fixture
def site(tmp_path: Path) -> Site:
    """A log with a refused row and several files a day, so that there is an order to depend on."""
    site = Site(tmp_path, '[score]\nmethod = "exact"\n[gates]\nrefused_limit = 0.5\n')
    for at, day in enumerate(DAYS):
        more = rows(day, [*PAIRS[at : at + 3], ("", "Ada")])
        more.write_parquet(site.file(day).with_name("part-1.parquet"))
    return site


def test_the_same_night_twice_leaves_the_same_files(site: Site) -> None:
    assert site.score().code == 0
    first, runs, manifest = site.published(), site.table("runs"), run_json(site)
    assert site.score().code == 0
    second = site.published()
    assert second.keys() == first.keys()
    assert tables(second) == tables(first)
    assert len(tables(first)) == len(SAME)
    told = set(runs.columns) - OF_THE_RUN
    assert site.table("runs").select(told).equals(runs.select(told))
    assert site.table("runs")["started_at"].item() > runs["started_at"].item()
    again = run_json(site)
    for told in (again, manifest):
        told["tables"].pop("runs")  # how many bytes its times take
    assert {k: v for k, v in again.items() if k not in OF_THE_RUN} == {
        k: v for k, v in manifest.items() if k not in OF_THE_RUN
    }


def run_json(site: Site) -> dict:
    return json.loads((site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "run.json").read_text())


def test_a_changed_definition_replaces_the_night(site: Site) -> None:
    assert site.score().code == 0
    first, before = site.published(), run_json(site)
    site.settings('[graph]\ndirected = false\n[score]\nmethod = "exact"\n[gates]\nrefused_limit = 0.5\n')
    assert site.score().code == 0
    second, after = site.published(), run_json(site)
    assert second.keys() == first.keys()
    assert before["definition"] != after["definition"]
    assert before["run_id"] != after["run_id"]
    for name in SAME:
        assert set(site.table(name)["run_id"]) == {after["run_id"]}


def test_late_rows_replace_the_night(site: Site) -> None:
    assert site.score().code == 0
    before = run_json(site)
    rows(DAYS[1], [("Gus", "Ada")]).write_parquet(site.file(DAYS[1]).with_name("late.parquet"))
    assert site.score().code == 0
    assert "Gus" in site.table("scores")["party"].to_list()
    assert run_json(site)["run_id"] != before["run_id"]


def test_other_nights_and_series_are_left_alone(site: Site) -> None:
    assert site.score().code == 0
    first = site.published()
    site.write(rows(date(2026, 3, 5)), date(2026, 3, 5))
    assert site.score("--as-of", "2026-03-05").code == 0
    night = site.published()
    assert {name: night[name] for name in first} == first
    assert sum("as_of=2026-03-05" in name for name in night) == 6
    site.config.write_text(site.config.read_text().replace('series = "s"', 'series = "other"'))
    assert site.score().code == 0
    series = site.published()
    assert {name: series[name] for name in night} == night
    assert sum("series=other" in name for name in series) == 6


PROGRAM = """
import sys
from isthmus.ingest import files
files.ROWS_PER_PART = int(sys.argv[2])
import isthmus
isthmus.score(sys.argv[1], "{as_of}")
"""


def test_threads_and_the_cut_change_nothing(tmp_path: Path) -> None:
    """Many parties, so that threads have something to share out; the pool's size is fixed when a process starts."""
    site = Site(tmp_path, log=False)
    draw = random.Random(1)
    for day in DAYS:
        pairs = [(f"p{draw.randrange(300)}", f"p{draw.randrange(300)}") for _ in range(3000)]
        frame = rows(day, pairs).with_columns(value=pl.Series([draw.random() * 100 for _ in pairs]).round(2))
        site.file(day).parent.mkdir(parents=True)
        frame.write_parquet(site.file(day), row_group_size=500)
    published = []
    for threads, most in ((1, 2_000_000), (2, 700)):
        site.settings('[score]\nmethod = "exact"\n')
        site.config.write_text(site.config.read_text().replace("threads = 1", f"threads = {threads}"))
        environment = os.environ | {"POLARS_MAX_THREADS": str(threads)}
        program = PROGRAM.format(as_of=AS_OF)
        subprocess.run([sys.executable, "-c", program, str(site.config), str(most)], env=environment, check=True)
        published.append(tables(site.published()))
    assert published[0] == published[1]


def test_the_order_and_cut_of_files_change_no_result(tmp_path: Path) -> None:
    """The same rows in another order, cut into other files, give the same scores and ties."""
    every = pl.concat([rows(day, PAIRS) for day in DAYS]).with_columns(value=pl.lit(0.1))
    shuffled = every.sample(fraction=1, shuffle=True, seed=2)
    assert not shuffled.equals(every)
    found = []
    for name, frame, cuts in (("one", every, [0, 5, 32]), ("two", shuffled, [0, 20, 21, 32])):
        (tmp_path / name / "log").mkdir(parents=True)
        site = Site(tmp_path / name, '[score]\nmethod = "exact"\n', log=False)
        for start, stop in pairwise(cuts):
            frame[start:stop].write_parquet(site.log / f"{99 - start}.parquet")
        assert site.score().code == 0
        found.append({table: site.table(table) for table in ("scores", "ties")})
    for table in found[0]:
        assert found[0][table].equals(found[1][table])
    assert found[0]["ties"]["amount"].to_list() == [0.4] * len(PAIRS)
