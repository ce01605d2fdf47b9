"""`isthmus.duckdb`: views that say what the tables say, wherever the warehouse lies, and never harm a night."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date, timedelta
from pathlib import Path
from typing import Any

import duckdb
import polars as pl
import pytest

from isthmus.publish import refresh_views
from isthmus.publish.views import FILE
from isthmus.store import Folder
from isthmus.tables import PARTITION, TABLES
from nights import AS_OF, BETWEEN, DAYS, PAIRS, Site, isthmus, rows

NEXT = AS_OF + timedelta(days=1)
README = Path(__file__).parent.parent / "README.md"
ENGINE = '[score]\nengine = "networkit"\n'
SETTINGS = ENGINE + "[gates]\nrefused_limit = 0.5\n[definitions.short.window]\ndays = 2\n"


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """Two series, of which one ended a night before the other; the folder's name has a quote. Not to be changed."""
    site = Site(tmp_path_factory.mktemp("views") / "o'clock", SETTINGS)
    site.write(rows(NEXT, [*PAIRS, ("gil@k8", "ada@k1"), ("", "ada@k1")]), NEXT)
    assert site.score().code == 0
    site.settings(SETTINGS.partition("[definitions")[0])
    assert isthmus("score", site.config, "--as-of", NEXT).code == 0
    return site


@contextmanager
def opened(warehouse: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    with duckdb.connect(warehouse / FILE, read_only=True) as database:
        yield database


def ask(warehouse: Path, sql: str) -> list[tuple[Any, ...]]:
    with opened(warehouse) as database:
        return database.execute(sql).fetchall()


def files(site: Site, table: str) -> pl.DataFrame:
    return pl.read_parquet(
        site.warehouse / table / "*" / "*" / f"{table}.parquet",
        hive_partitioning=True,
        hive_schema={"series": pl.String, "as_of": pl.Date},
    )


@pytest.mark.parametrize("table", TABLES)
def test_views_hold_the_rows_of_the_files(site: Site, table: str) -> None:
    every = files(site, table)
    columns = [*(column.name for column in PARTITION), *TABLES[table].schema]
    latest = every.filter(
        ((pl.col("series") == "s") & (pl.col("as_of") == NEXT))
        | ((pl.col("series") == "s-short") & (pl.col("as_of") == AS_OF))
    )
    named = ", ".join(f'"{name}"' for name in columns)
    order = ", ".join(["series", "as_of", *(f'"{name}"' for name in TABLES[table].sort)])
    for view, expected in ((f"{table}_all", every), (f"{table}_latest", latest)):
        found = ask(site.warehouse, f"SELECT {named} FROM {view} ORDER BY {order}")
        by = ["series", "as_of", *TABLES[table].sort]
        assert found == expected.select(columns).sort(by).rows()


def test_top_brokers_and_the_latest_nights(site: Site) -> None:
    found = ask(site.warehouse, "SELECT series, as_of, rank, party, kind, lower, upper FROM top_brokers")
    assert [(row[0], row[1]) for row in found] == [("s", NEXT)] * 8 + [("s-short", AS_OF)] * 7
    assert [row[2] for row in found] == [*range(1, 9), *range(1, 8)]
    scores = files(site, "scores").filter(pl.col("series") == "s", pl.col("as_of") == NEXT).sort("rank")
    assert [row[3:] for row in found[:8]] == scores.select("party", pl.lit("party"), "lower", "upper").rows()
    assert len(ask(site.warehouse, "FROM nights_latest")) == 2
    run = ask(site.warehouse, "SELECT run_id FROM runs_latest WHERE series = 's'")
    assert run == [(scores["run_id"][0],)]


def test_the_dictionary_is_the_declaration(site: Site) -> None:
    declared = [
        (table.name, column.name, column.kind, column.unit, column.meaning, column.nullable)
        for table in TABLES.values()
        for column in (*PARTITION, *table.columns)
    ]
    assert ask(site.warehouse, "FROM dictionary") == declared
    undescribed = "SELECT view_name FROM duckdb_views() WHERE NOT internal AND comment IS NULL"
    assert ask(site.warehouse, undescribed) == []


def test_latest_opens_no_other_nights_rows(tmp_path: Path) -> None:
    """Their pages are overwritten, all but the footer: who read them would fail."""
    site = Site(tmp_path, ENGINE)
    site.write(rows(NEXT), NEXT)
    assert site.score().code == 0
    old = (site.warehouse / "scores" / "series=s" / f"as_of={AS_OF}" / "scores.parquet").resolve()
    assert isthmus("score", site.config, "--as-of", NEXT).code == 0
    told = old.read_bytes()
    footer = int.from_bytes(told[-8:-4], "little") + 8
    old.write_bytes(told[:4] + b"\0" * (len(told) - footer - 4) + told[-footer:])
    with pytest.raises(duckdb.Error):
        ask(site.warehouse, "SELECT sum(degree), max(party) FROM scores_all")
    assert len(ask(site.warehouse, "FROM scores_latest")) == 7
    assert len(ask(site.warehouse, "FROM top_brokers")) == 7


def test_a_moved_warehouse(site: Site, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    moved = tmp_path / "elsewhere"
    shutil.copytree(site.root, tmp_path / "old", symlinks=True)
    copy = Site(tmp_path / "old", SETTINGS, log=False)
    assert copy.score().code == 0  # now its views name its own folder
    shutil.move(copy.root, moved)
    monkeypatch.chdir(tmp_path)
    with opened(moved / "warehouse") as database:
        with pytest.raises(duckdb.IOException, match="No files found"):
            database.execute("FROM top_brokers")
        database.execute(f"SET VARIABLE warehouse = '{moved / 'warehouse'}'")
        assert len(database.execute("FROM top_brokers").fetchall()) == 15
        monkeypatch.chdir(moved / "warehouse")
        database.execute("SET VARIABLE warehouse = '.'")
        assert len(database.execute("FROM top_brokers").fetchall()) == 15
    assert isthmus("score", moved / "isthmus.toml", "--as-of", AS_OF).code == 0
    assert len(ask(moved / "warehouse", "FROM top_brokers")) == 15


def test_made_anew_only_when_it_would_be_another(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    path = site.warehouse / FILE
    first = path.stat()
    assert site.score().code == 0
    assert (path.stat().st_ino, path.stat().st_mtime_ns) == (first.st_ino, first.st_mtime_ns)
    for spoil in (
        path.unlink,
        lambda: path.write_bytes(b"damaged"),
        lambda: duckdb.connect(path).execute("DELETE FROM made_by").close(),
    ):
        spoil()
        said = site.score()
        assert (said.code, "warning" in said.err) == (0, False)
        assert len(ask(site.warehouse, "FROM top_brokers")) == 7
    assert [name for name in os.listdir(site.warehouse) if "duckdb" in name] == [FILE]


def test_what_a_killed_writer_left_spoils_no_later_file(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    duckdb.connect(site.warehouse / FILE).execute("CREATE TABLE mine (a INTEGER)").close()
    code = (
        "import duckdb, os, sys; c = duckdb.connect(sys.argv[1]); c.execute('INSERT INTO mine VALUES (1)'); os._exit(9)"
    )
    subprocess.run([sys.executable, "-c", code, site.warehouse / FILE])
    assert (site.warehouse / f"{FILE}.wal").exists()
    (site.warehouse / FILE).unlink()
    assert site.score().code == 0
    assert len(ask(site.warehouse, "FROM top_brokers")) == 7


def test_who_has_it_open_keeps_it(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    with opened(site.warehouse) as database:
        assert len(database.execute("FROM scores_latest").fetchall()) == 7
        (site.warehouse / FILE).unlink()
        site.write(rows(DAYS[3], [*PAIRS, ("gil@k8", "ada@k1")]), DAYS[3])
        assert site.score().code == 0
        assert (site.warehouse / FILE).exists()
        assert len(database.execute("FROM scores_latest").fetchall()) == 8


def test_rows_of_two_runs_are_never_joined(tmp_path: Path) -> None:
    """As a query may meet them that opens one table before a night is switched and another after."""
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    public = site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "runs.parquet"
    other = site.table("runs").with_columns(run_id=pl.lit("another"))
    public.unlink()
    other.write_parquet(public)
    assert len(ask(site.warehouse, "FROM scores_all")) == 7
    assert ask(site.warehouse, "FROM scores_latest") == []
    assert ask(site.warehouse, "FROM top_brokers") == []


def test_nights_of_an_older_isthmus_lack_columns(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    site.write(rows(NEXT), NEXT)
    assert site.score().code == 0
    file = (site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "runs.parquet").resolve()
    pl.read_parquet(file).drop("revision").write_parquet(file)
    assert isthmus("score", site.config, "--as-of", NEXT).code == 0
    assert ask(site.warehouse, "SELECT revision FROM runs_all ORDER BY as_of") == [(None,), (1,)]


def test_a_failure_to_write_it_fails_no_night(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    (site.warehouse / FILE / "in the way").mkdir(parents=True)
    said = site.score()
    assert said.code == 0
    assert re.search(r"warning: .*isthmus\.duckdb, the views for DuckDB, could not be written", said.err)
    assert site.table("scores").height == 7
    assert [name for name in os.listdir(site.warehouse) if "unfinished" in name] == []


def test_a_warehouse_without_all_tables_gets_no_views_and_a_reason(tmp_path: Path) -> None:
    assert "could not be written (IOException)" in refresh_views(Folder(tmp_path))
    assert not list(tmp_path.iterdir())


# --- the README ----------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def messages(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with `warehouse`, of the series and the nights that the README speaks of."""
    site = Site(tmp_path_factory.mktemp("readme"), ENGINE, log=False)
    site.config.write_text(site.config.read_text().replace('series = "s"', 'series = "messages"'))
    last = date(2026, 11, 30)
    for back in range(5):
        day = last - timedelta(days=back)
        site.write(rows(day), day)
    for day in (last - timedelta(days=1), last):
        assert isthmus("score", site.config, "--as-of", day).code == 0
    return site.root


def blocks(language: str) -> list[str]:
    text = README.read_text(encoding="utf-8")
    analyst = text[text.index("### The analyst") : text.index("### The fraud team")]
    return re.findall(rf"^```{language}\n(.*?)^```", analyst, re.MULTILINE | re.DOTALL)


def test_the_analysts_sql_answers(messages: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(messages)
    statements = [text.strip() for block in blocks("sql") for text in re.split(r";|^--.*$", block, flags=re.MULTILINE)]
    statements = [statement for statement in statements if statement]
    assert len(statements) >= 5
    for statement in statements:
        adapted = statement.replace("'an account'", f"'{BETWEEN}'")
        with opened(Path("warehouse")) as database:
            assert database.execute(adapted).fetchall(), statement


def test_the_analysts_python_runs(messages: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(messages)
    assert blocks("python")
    for block in blocks("python"):
        exec(block, {})
