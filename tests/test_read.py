"""`isthmus.read`: lazy frames over whole nights, of folders and of object stores."""

from __future__ import annotations

import shutil
import time
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import polars as pl
import pytest

import isthmus
from isthmus.errors import SettingsError, StoreError
from isthmus.tables import TABLES
from nights import AS_OF, BETWEEN, DAYS, PAIRS, Site, rows
from nights import isthmus as command
from servers import S3, driver

NEXT = AS_OF + timedelta(days=1)
SETTINGS = '[score]\nengine = "networkit"\n[gates]\nrefused_limit = 0.5\n[definitions.short.window]\ndays = 2\n'


def two_nights(site: Site) -> Site:
    site.write(rows(NEXT, [*PAIRS, ("gil@k8", "ada@k1"), ("", "ada@k1")]), NEXT)
    for day in (AS_OF, NEXT):
        said = command("score", site.config, "--as-of", day)
        assert said.code == 0, said.err
    return site


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """Two series of two nights, in a folder whose name a notebook has to escape. Not to be changed."""
    return two_nights(Site(tmp_path_factory.mktemp("read") / "a<b", SETTINGS))


def file(site: Site, table: str, series: str = "s", day: object = NEXT) -> pl.DataFrame:
    frame = pl.read_parquet(site.warehouse / table / f"series={series}" / f"as_of={day}" / f"{table}.parquet")
    return frame.select(pl.lit(series).alias("series"), pl.lit(str(day)).str.to_date().alias("as_of"), pl.all())


@pytest.mark.parametrize("table", TABLES)
def test_the_latest_night_of_each_series_by_default(site: Site, table: str) -> None:
    frame = getattr(isthmus.read(site.warehouse), table)
    assert isinstance(frame, pl.LazyFrame)
    assert frame.collect().equals(pl.concat([file(site, table), file(site, table, "s-short")]))
    assert frame.collect_schema().names() == ["series", "as_of", *TABLES[table].schema]


def test_one_series_one_night_and_all(site: Site) -> None:
    assert isthmus.read(site.warehouse, series="s").scores.collect().equals(file(site, "scores"))
    first = file(site, "scores", day=AS_OF)
    for day in (AS_OF, str(AS_OF)):
        assert isthmus.read(site.warehouse, series="s", as_of=day).scores.collect().equals(first)
    every = isthmus.read(site.warehouse, as_of="all")
    assert [(night.series, night.as_of) for night in every.nights] == [
        *(("s", AS_OF), ("s", NEXT), ("s-short", AS_OF), ("s-short", NEXT))
    ]
    history = every.scores.filter(pl.col("party") == BETWEEN).select("series", "as_of").collect()
    assert history.rows() == [(night.series, night.as_of) for night in every.nights]


def test_errors_say_what_there_is(site: Site, tmp_path: Path) -> None:
    for nowhere in (tmp_path, tmp_path / "none", site.root):
        with pytest.raises(StoreError, match=r"is no warehouse: it has no layout\.json"):
            isthmus.read(nowhere)
    with pytest.raises(StoreError, match="no series 'x'; it has s, s-short"):
        isthmus.read(site.warehouse, series="x")
    with pytest.raises(StoreError, match="no night of 2020-01-01 of the series s"):
        isthmus.read(site.warehouse, series="s", as_of="2020-01-01")
    with pytest.raises(AttributeError, match="no table 'score'; there are scores, ties"):
        _ = isthmus.read(site.warehouse).score
    (tmp_path / "layout.json").write_text('{"layout": 1}')
    with pytest.raises(StoreError, match="has no night"):
        isthmus.read(tmp_path)
    (tmp_path / "layout.json").write_text('{"layout": 99}')
    with pytest.raises(SettingsError, match="a newer isthmus"):
        isthmus.read(tmp_path)


def test_a_warehouse_shows_itself(site: Site) -> None:
    warehouse = isthmus.read(site.warehouse, as_of="all")
    text, html = repr(warehouse), warehouse._repr_html_()
    for shown in (text, html):
        for part in ("scores", "s-short", str(NEXT), "exact", "not a verdict"):
            assert part in shown
    assert "a<b" in text
    assert "a&lt;b" in html
    assert "a<b" not in html
    assert html.count("<tr>") == 5
    assert set(TABLES) <= set(dir(warehouse))


def test_frames_stay_of_one_run_while_a_night_is_replaced(tmp_path: Path) -> None:
    site = Site(tmp_path, '[score]\nengine = "networkit"\n')
    assert site.score().code == 0
    old = isthmus.read(site.warehouse)
    scores = old.scores.collect()
    site.write(rows(DAYS[3], [*PAIRS, ("gil@k8", "ada@k1")]), DAYS[3])
    assert site.score().code == 0
    assert old.scores.collect().equals(scores)
    assert old.ties.collect()["run_id"].unique().to_list() == scores["run_id"].unique().to_list()
    assert isthmus.read(site.warehouse).scores.collect().height == scores.height + 1


def test_a_night_that_is_just_being_published_is_none_yet(tmp_path: Path) -> None:
    site = Site(tmp_path, '[score]\nengine = "networkit"\n')
    assert site.score().code == 0
    home = site.warehouse / ".nights" / "series=s" / f"as_of={NEXT}"
    (home / "000000-blank").mkdir(parents=True)
    site.table("scores").clear().write_parquet(home / "000000-blank" / "scores.parquet.data")
    (home / "current").symlink_to("000000-blank")
    for table in ("scores", "runs"):
        public = site.warehouse / table / "series=s" / f"as_of={NEXT}" / f"{table}.parquet"
        public.parent.mkdir(parents=True)
        public.symlink_to(home / "current" / f"{table}.parquet.data")
    assert [night.as_of for night in isthmus.read(site.warehouse).nights] == [AS_OF]


def test_a_copy_without_its_links_and_with_older_tables(site: Site, tmp_path: Path) -> None:
    copy = tmp_path / "env=prod" / "copy"
    shutil.copytree(site.warehouse, copy, ignore=shutil.ignore_patterns(".nights", ".leases"))
    runs = copy / "runs" / "series=s" / f"as_of={NEXT}" / "runs.parquet"
    pl.read_parquet(runs).drop("revision").with_columns(later=1).write_parquet(runs)
    shutil.rmtree(copy / "parties")
    warehouse = isthmus.read(copy)
    assert warehouse.scores.collect().equals(isthmus.read(site.warehouse).scores.collect())
    assert warehouse.runs.collect()["revision"].to_list() == [None, 1]
    assert warehouse.parties.collect().schema == isthmus.read(site.warehouse).parties.collect_schema()
    assert warehouse.parties.collect().is_empty()


# --- object stores -------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def s3() -> Iterator[S3]:
    server = S3()
    with pytest.MonkeyPatch.context() as patch:
        for key, value in {"ENDPOINT_URL": server.url, "ACCESS_KEY_ID": "a", "SECRET_ACCESS_KEY": "b"}.items():
            patch.setenv(f"AWS_{key}", value)
        patch.setenv("AWS_DEFAULT_REGION", "us-east-1")
        yield server
    server.close()


def test_an_object_store_is_read_as_a_folder_is(s3: S3, tmp_path: Path) -> None:
    box = f"box{time.monotonic_ns()}"
    driver("s3").mkdir(f"s3://{box}")
    settings = SETTINGS.partition("[definitions")[0]
    bucket = two_nights(Site(tmp_path / "bucket", f'warehouse = "s3://{box}/wh"\n{settings}'))
    folder = two_nights(Site(tmp_path / "folder", settings))
    s3.asked.clear()
    there, here = (isthmus.read(where, as_of="all") for where in (f"s3://{box}/wh", folder.warehouse))
    assert [path for _, path in s3.asked if "scores.parquet" in path] == []  # nothing that nobody asked for
    lazy = there.scores
    assert lazy.collect_schema() == here.scores.collect_schema()
    assert lazy.drop("run_id").collect().equals(here.scores.drop("run_id").collect())
    for table in TABLES:
        assert getattr(there, table).collect().height == getattr(here, table).collect().height
    one = pl.col("party") == BETWEEN
    for ask in (
        lambda frame: frame.filter(one).select("as_of", "rank"),
        lambda frame: frame.head(9).select("party"),
        lambda frame: frame.filter(pl.col("as_of") == NEXT).select("degree"),
        lambda frame: frame.filter(one).head(1).select("as_of"),
    ):
        assert ask(lazy).collect().equals(ask(here.scores).collect())
    before = there.scores.collect()
    bucket.write(rows(DAYS[3], PAIRS[:-1]), DAYS[3])
    assert command("score", bucket.config, "--as-of", NEXT).code == 0
    assert there.scores.collect().equals(before)
    with pytest.raises(StoreError, match="has no series 'x'; it has s"):
        isthmus.read(f"s3://{box}/wh", series="x")
