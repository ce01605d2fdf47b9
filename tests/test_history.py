"""`isthmus history`: the recent nights, from the warehouse and, of runs that published nothing, the work folder."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

import pytest

from isthmus import nightly
from isthmus.errors import AskedToStop
from nights import AS_OF, DAYS, PAIRS, PARTIES, Said, Site, isthmus, rows

ENGINE = '[score]\nengine = "networkit"\n'


def history(site: Site, *more: object) -> Said:
    return isthmus("history", site.config, *more)


def night_lines(said: Said) -> list[str]:
    return [line for line in said.err.splitlines() if re.match(r"\d{4}-\d\d-\d\d ", line)]


@pytest.fixture(scope="module")
def many(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """Five days: published, missing, published under another definition, incomplete, replaced. Not to be changed."""
    site = Site(tmp_path_factory.mktemp("history"), '[gates]\nmissing_days = "warn"\nrefused_limit = 0.5\n' + ENGINE)
    site.write(rows(DAYS[1], [*PAIRS, ("", "ada@k1")]), DAYS[1])
    days = [AS_OF + timedelta(days=at) for at in range(5)]
    for day in days[1:]:
        site.write(rows(day), day)
    shutil.rmtree(site.file(days[1]).parent)
    assert site.score().code == 0
    site.config.write_text(site.config.read_text() + "top = 7\n")
    for day in (days[2], days[3], days[4], days[4]):
        assert isthmus("score", site.config, "--as-of", day).code == 0
    (site.warehouse / "runs" / "series=s" / f"as_of={days[3]}" / "run.json").unlink()
    shutil.rmtree(site.log)  # it is not needed
    shutil.rmtree(site.work)
    return site


def test_one_line_a_night_newest_last(many: Site) -> None:
    said = history(many)
    assert (said.code, said.out) == (0, "")
    told = [line.split()[:2] for line in night_lines(said)]
    assert told == [
        ["2026-03-04", "published"],
        ["2026-03-05", "missing"],
        ["2026-03-06", "published"],
        ["2026-03-07", "incomplete"],
        ["2026-03-08", "published"],
    ]
    first, _, third, _, last = night_lines(said)
    assert re.fullmatch(r"2026-03-04  published   exact +0 +32 +3\.03% +\d+\.\d", first)
    assert "definition" in third
    assert "missing_days: warn" in third
    assert "definition" not in last  # the same as in the last night that was published
    assert "No night after 2026-03-08; the last whole day (UTC) is" in said.err


def test_replaced_runs_on_demand(many: Site) -> None:
    assert not any("replaced" in line for line in night_lines(history(many)))
    told = [line.split()[:2] for line in night_lines(history(many, "--all"))]
    assert told[-2:] == [["2026-03-08", "replaced"], ["2026-03-08", "published"]]
    assert len(told) == 6


def test_how_far_back(many: Site) -> None:
    assert [line.split()[0] for line in night_lines(history(many, "--nights", 2))] == ["2026-03-07", "2026-03-08"]
    said = history(many, "--nights", 0)
    assert said.code == 64
    assert "--nights" in said.err


def test_json_is_one_object(many: Site) -> None:
    told = json.loads(history(many, "--json").out)
    assert told["series"] == "s"
    assert [(night["as_of"], night["state"]) for night in told["nights"]][1:3] == [
        *(("2026-03-05", "missing"), ("2026-03-06", "published"))
    ]
    assert told["nights"][0]["run"]["rows_refused"] == 1
    assert "run" not in told["nights"][1]


def test_before_the_first_night(tmp_path: Path) -> None:
    site = Site(tmp_path, log=False)
    before = site.tree()
    said = history(site)
    assert said.code == 0
    assert f"Series s: no night yet in {site.warehouse}" in said.err
    assert json.loads(history(site, "--json").out)["nights"] == []
    assert site.tree() == before


def test_a_manifest_that_is_not_json_is_an_incomplete_night(many: Site, tmp_path: Path) -> None:
    shutil.copytree(many.root, tmp_path / "site")
    site = Site(tmp_path / "site", log=False)
    path = site.warehouse / "runs" / "series=s" / "as_of=2026-03-08" / "run.json"
    path.write_text(path.read_text()[:100])
    assert night_lines(history(site))[-1].split() == ["2026-03-08", "incomplete"]


def test_runs_of_an_older_isthmus_are_shown(many: Site, tmp_path: Path) -> None:
    """What they did not tell yet is left blank."""
    shutil.copytree(many.root, tmp_path / "site")
    site = Site(tmp_path / "site", log=False)
    path = site.warehouse / "runs" / "series=s" / "as_of=2026-03-04" / "run.json"
    told = json.loads(path.read_text())
    for name in ("gates", "stages", "versions", "replaces", "predictions"):
        del told[name]
    path.write_text(json.dumps(told))
    assert night_lines(history(site, "--all"))[0].split()[:3] == ["2026-03-04", "published", "exact"]


def test_a_night_that_a_gate_stopped_tells_which(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    next_day = AS_OF + timedelta(days=1)
    assert isthmus("score", site.config, "--as-of", next_day).code == 65
    said = history(site)
    assert night_lines(said)[-1].split() == ["2026-03-05", "stopped", "missing_days:", "stop"]
    assert "1 day" in said.err
    assert PARTIES[0] not in said.err
    site.write(rows(next_day), next_day)
    assert isthmus("score", site.config, "--as-of", next_day).code == 0
    assert night_lines(history(site))[-1].split()[:2] == ["2026-03-05", "published"]
    assert "stopped" not in history(site).err


def test_a_run_that_failed_after_the_night_was_published(tmp_path: Path) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    site.file(AS_OF).write_bytes(b"not Parquet")
    assert site.score().code == 65
    said = history(site)
    assert night_lines(said)[-1].split()[:2] == ["2026-03-04", "published"]
    assert "what was published before is still there" in said.err


@pytest.mark.parametrize("harm", [Path.unlink, lambda path: path.write_bytes(path.read_bytes()[:-7])])
def test_a_table_that_is_not_as_published(tmp_path: Path, harm: Callable[[Path], object]) -> None:
    site = Site(tmp_path, ENGINE)
    assert site.score().code == 0
    harm((site.warehouse / "ties" / "series=s" / f"as_of={AS_OF}" / "ties.parquet").resolve())
    said = history(site)
    assert night_lines(said)[-1].split()[:2] == ["2026-03-04", "damaged"]
    assert "ties not as published" in said.err
    assert "published" in isthmus("backfill", site.config, "--from", AS_OF, "--to", AS_OF).err
    assert night_lines(history(site))[-1].split()[:2] == ["2026-03-04", "published"]


def test_help_teaches() -> None:
    said = isthmus("history", "--help")
    words = " ".join(said.out.split())
    for text in ("newest last", "incomplete", "missing", "--nights", "--all", "--json", "isthmus history configs/"):
        assert text in words


@pytest.mark.parametrize(
    ("fault", "code", "told"), [(ZeroDivisionError("ada@k1"), 70, "failed"), (AskedToStop(), 75, "interrupted")]
)
def test_every_ending_is_told_without_a_librarys_words(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fault: BaseException, code: int, told: str
) -> None:
    site = Site(tmp_path, ENGINE)

    def describe(*_: object) -> None:
        raise fault

    monkeypatch.setattr(nightly, "describe", describe)
    assert site.score().code == code
    said = history(site)
    assert night_lines(said)[-1].split() == ["2026-03-04", told, "exit", str(code)]
    assert "ada@k1" not in said.err
