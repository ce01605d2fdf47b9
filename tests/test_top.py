"""`isthmus top`: the first screen of a published night, from its tables alone."""

from __future__ import annotations

import json
import shutil
from datetime import timedelta
from pathlib import Path

import polars as pl
import pytest

from isthmus.cli.top import _whiskers
from isthmus.console import printable
from nights import AS_OF, BETWEEN, DAYS, PAIRS, Said, Site, isthmus, rows

LONG = "a-mailbox-with-a-rather-long-name-of-its-own@department.site.example"


def top(site: Site, *more: object) -> Said:
    return isthmus("top", site.config, *more)


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A sampled night and its log gone; a second series that is exact. Not to be changed."""
    site = Site(
        tmp_path_factory.mktemp("top"),
        '[score]\nengine = "networkit"\nmethod = "paths"\nsamples = 2000\n'
        '[definitions.exact.score]\nengine = "networkit"\nmethod = "exact"\n',
    )
    site.write(rows(DAYS[3], [*PAIRS, (LONG, BETWEEN), (LONG, "ada@k1")]), DAYS[3])
    assert site.score().code == 0
    shutil.rmtree(site.log)
    shutil.rmtree(site.work)
    return site


def lines_of(said: Said, series: str) -> list[str]:
    """Those of the brokers of a series."""
    after = said.err[said.err.index(f"Series {series},") :].splitlines()
    return after[3 : after.index("")]


def test_one_screen_in_80_columns(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    said = top(site)
    assert (said.code, said.out) == (0, "")
    assert max(map(len, said.err.splitlines())) <= 80
    assert "paths, 2,000 samples" in said.err
    assert "Method: exact" in said.err
    assert "not a verdict" in said.err
    assert printable(LONG, 20) in said.err
    scores = site.table("scores").head(10)
    ranks = [line[: line.index(" ")] for line in lines_of(said, "s")]
    assert ranks == [printable(party, 20) for party in scores["party"]]
    for line, row in zip(lines_of(said, "s"), scores.iter_rows(named=True), strict=True):
        assert f"{row['rank']}  {row['rank_best']} .. {row['rank_worst']}".split() == line.split()[-6:-2]
        assert line.split()[-2:] == [str(row["degree"]), f"{row['betweenness']:.6f}"]
        assert "o" in line[line.index("party  ") + 7 :]


def test_a_wider_terminal_has_longer_whiskers_and_no_more(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    widths = []
    for columns in ("80", "110", "400"):
        monkeypatch.setenv("COLUMNS", columns)
        widths.append(max(map(len, lines_of(top(site), "s"))))
    assert widths[0] <= 80 < widths[1] <= 110 < widths[2] < 200


@pytest.mark.parametrize(
    ("interval", "drawn"),
    [
        ((0.0, 0.5, 1.0), "|----o----|"),
        ((0.4, 0.5, 0.6), "    |o|"),
        ((0.5, 0.5, 0.5), "     o"),
        ((0.0, 0.0, 0.0), "o"),
        ((0.0, 0.0, 0.3), "o--|"),
        ((0.8, 1.0, 1.0), "        |-o"),
    ],
)
def test_whiskers_are_to_scale(interval: tuple[float, float, float], drawn: str) -> None:
    assert _whiskers(*interval, 1.0, 11) == drawn
    assert _whiskers(*(each / 100 for each in interval), 0.01, 11) == drawn
    assert _whiskers(0.0, 0.0, 0.0, 0.0, 11) == "o"


def test_for_machines(site: Site) -> None:
    sampled, exact = json.loads(top(site, "--json", "--first", 3).out)
    assert (sampled["series"], exact["series"]) == ("s", "s-exact")
    assert sampled["as_of"] == str(AS_OF)
    scores = site.table("scores").head(3)
    told = pl.DataFrame(sampled["brokers"])
    assert told.drop("kind").equals(scores.select(told.drop("kind").columns))
    assert set(told["kind"]) == {"party"}
    assert sampled["run_id"] == site.table("runs")["run_id"][0]


def test_warnings_and_an_earlier_night(tmp_path: Path) -> None:
    site = Site(tmp_path, '[score]\nengine = "networkit"\n[gates]\nmissing_days = "warn"\n')
    assert site.score().code == 0
    later = AS_OF + timedelta(days=1)
    assert isthmus("score", site.config, "--as-of", later).code == 0
    said = top(site)
    assert f".. {later}:" in said.err
    assert "Warnings: " in said.err
    assert str(later) in said.err.partition("Warnings: ")[2]
    said = top(site, "--as-of", AS_OF)
    assert f".. {AS_OF}:" in said.err
    assert "Warnings" not in said.err


def test_nothing_published_is_told(tmp_path: Path) -> None:
    site = Site(tmp_path)
    said = top(site)
    assert said.code == 74
    assert "publish a first night there with isthmus score" in said.err
    assert not site.warehouse.exists()


def test_a_series_without_a_night_does_not_hide_the_others(site: Site, tmp_path: Path) -> None:
    shutil.copytree(site.root, tmp_path / "copy", symlinks=True)
    copy = Site(tmp_path / "copy", site.config.read_text().partition("threads = 1\n")[2], log=False)
    shutil.rmtree(copy.warehouse / "runs" / "series=s")
    said = top(copy, "--json")
    assert said.code == 74
    assert "has no series 's'" in said.err
    assert "Series s-exact" in said.err
    assert [night["series"] for night in json.loads(said.out)] == ["s-exact"]
