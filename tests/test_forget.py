"""`isthmus forget`: nights and parties are gone from every file, what is told says so, and the rest stays."""

from __future__ import annotations

import io
import json
import shutil
import time
from collections.abc import Iterator
from contextlib import nullcontext
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import polars as pl
import pytest

from isthmus import store
from isthmus.forget import holding
from isthmus.store import bucket, place
from nights import AS_OF, BETWEEN, DAYS, PAIRS, PARTIES, Said, Site, isthmus, rows
from servers import S3, driver
from test_privacy import PRIVACY, SECRET, held_in, one, written

NIGHTS = [AS_OF - timedelta(days=back) for back in (2, 1, 0)]
LENIENT = '[gates]\nmissing_days = "off"\nredelivery = "off"\nvolume = "off"\nnulls_limit = 1.0\n'


@pytest.fixture(autouse=True)
def secret(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", SECRET)


def scored(root: Path, more: str = "") -> Site:
    """Three nights, of which the last was published twice."""
    site = Site(root, more + LENIENT)
    for night in NIGHTS:
        assert isthmus("score", site.config, "--as-of", night).code == 0
    site.write(rows(DAYS[-1], [*PAIRS, PAIRS[0]]), DAYS[-1])
    said = site.score()
    assert said.code == 0, said.err
    return site


def forgotten(monkeypatch: pytest.MonkeyPatch, site: Site, text: str, *more: object) -> Said:
    monkeypatch.setattr("sys.stdin", io.StringIO(text + "\n"))
    return isthmus("forget", site.config, "--party", *more)


def run_json(site: Site, night: date = AS_OF) -> dict:
    return json.loads((site.warehouse / "runs" / "series=s" / f"as_of={night}" / "run.json").read_text())


def take_from_the_log(site: Site, party: str = BETWEEN) -> None:
    for day in DAYS:
        frame = pl.read_parquet(site.file(day))
        site.write(frame.filter((pl.col("from") != party) & (pl.col("to") != party)), day)


# ---- nights


def test_old_nights_and_what_was_kept_of_their_days_go(tmp_path: Path) -> None:
    site = scored(tmp_path)
    work, reading = site.work / "series=s", site.reading
    (work / "endings").mkdir(exist_ok=True)
    for night in NIGHTS:
        (work / "endings" / f"{night}.json").write_text("{}")
    before = site.published()
    dry = isthmus("forget", site.config, "--before", AS_OF, "--dry-run")
    assert (dry.code, site.published()) == (0, before)
    assert (reading / "parts").exists()
    assert all(str(night) in dry.err for night in NIGHTS[:2])
    said = isthmus("forget", site.config, "--before", AS_OF)
    assert said.code == 0, said.err
    gone = [f"as_of={night}" for night in NIGHTS[:2]]
    assert site.published() == {name: data for name, data in before.items() if not any(g in name for g in gone)}
    assert [path for path in site.warehouse.rglob("*") if path.name in gone] == []
    assert sorted(path.name for path in work.iterdir() if path.is_dir()) == [".leases", "endings"]
    assert [path.name for path in reading.iterdir()] == ["days"]
    assert {path.name[:10] for path in (reading / "days").iterdir()} == {str(AS_OF)}
    assert [path.stem for path in (work / "endings").iterdir()] == [str(AS_OF)]
    assert isthmus("history", site.config).code == 0
    again = isthmus("forget", site.config, "--before", AS_OF)
    assert (again.code, "none" in again.err) == (0, True)
    (work / "endings" / f"{AS_OF}.json").unlink()
    assert site.score().code == 0
    assert site.published()[f"scores/series=s/as_of={AS_OF}/scores.parquet"] == next(
        data for name, data in before.items() if name == f"scores/series=s/as_of={AS_OF}/scores.parquet"
    )


def test_a_killed_removal_is_ended_by_the_next(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = scored(tmp_path)
    real = shutil.rmtree

    def refused(path: Path, ignore_errors: bool = False) -> None:
        if not ignore_errors:
            raise OSError(5, "no")
        real(path, ignore_errors=True)

    with monkeypatch.context() as patch:
        patch.setattr("isthmus.store.folder.shutil.rmtree", refused)
        assert isthmus("forget", site.config, "--before", AS_OF).code == 74
    assert isthmus("forget", site.config, "--before", AS_OF).code == 0
    assert not [path for path in site.warehouse.rglob("*") if f"as_of={NIGHTS[0]}" in str(path)]


def test_either_or(tmp_path: Path) -> None:
    site = Site(tmp_path, log=False)
    assert isthmus("forget", site.config).code == 64
    assert isthmus("forget", site.config, "--party", "--before", AS_OF).code == 64


def test_not_while_a_run_is_at_work(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = scored(tmp_path)
    with store.lease(store.Folder(site.warehouse), "series=s"):
        assert isthmus("forget", site.config, "--before", AS_OF).code == 75
        assert forgotten(monkeypatch, site, BETWEEN).code == 75


# ---- one party


@pytest.mark.parametrize("how", ["clear", "key", "pseudonym"])
def test_a_party_goes_from_every_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, how: str) -> None:
    site = scored(tmp_path, "" if how == "clear" else PRIVACY)
    key = BETWEEN if how == "clear" else one(BETWEEN)
    take_from_the_log(site)
    before = {name: site.table(name) for name in ("scores", "ties", "parties", "runs")}
    revision = run_json(site)["revision"]
    assert held_in(written(tmp_path, site.log), [key])
    dry = forgotten(monkeypatch, site, BETWEEN, "--dry-run")
    assert dry.code == 0
    assert held_in(written(tmp_path, site.log), [key])
    said = forgotten(monkeypatch, site, key if how == "pseudonym" else BETWEEN)
    assert said.code == 0, said.err
    assert "warning" not in said.err
    for night in NIGHTS:
        assert str(night) in said.err
        assert str(night) in dry.err
    files = {path for top in (site.work, site.warehouse) for path in top.rglob("*")}
    assert f"{sum(path.is_file() and not path.is_symlink() for path in files)} files" in said.err
    texts = written(tmp_path, site.log) | {"stdout": said.out, "stderr": said.err}
    assert held_in(texts, [BETWEEN, one(BETWEEN)]) == []
    assert site.table("scores").equals(before["scores"].filter(pl.col("party") != key))
    assert site.table("parties").equals(before["parties"].filter(pl.col("party") != key))
    assert site.table("ties").equals(before["ties"].filter((pl.col("sender") != key) & (pl.col("receiver") != key)))
    told, row = run_json(site), site.table("runs").row(0, named=True)
    assert told["revision"] == row["revision"] == revision + 1
    assert told["run_id"] == row["run_id"]
    assert "forgotten" in row["warnings"]
    assert "forgotten" in told["warnings"]
    assert site.table("runs").drop("revision", "warnings").equals(before["runs"].drop("revision", "warnings"))
    history = json.loads(isthmus("history", site.config, "--json").out)
    assert {night["state"] for night in history["nights"]} == {"published"}
    assert "without the party: none (0 rows)" in forgotten(monkeypatch, site, BETWEEN).err
    assert run_json(site)["revision"] == revision + 1


def test_the_person_behind_an_address_goes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whoever had the address, on whatever days."""
    day = datetime(2026, 3, 4, 12, tzinfo=UTC)
    pairs = [("zeb@own.example", "bea@own.example"), ("bea@own.example", "cyd@own.example")]
    (tmp_path / "log").mkdir()
    pl.DataFrame({"from": [a for a, _ in pairs], "to": [b for _, b in pairs], "date": [day] * 2}).write_parquet(
        tmp_path / "log" / "day.parquet"
    )
    (tmp_path / "aliases.csv").write_text("address,person,from,to\nzeb@own.example,Anneliese K.,,\n")
    config = tmp_path / "c.toml"
    config.write_text(
        'series = "s"\n[log]\nkind = "email"\npath = "log"\n[log.columns]\nreceiver = "to"\n'
        '[log.rules]\naliases = "aliases.csv"\n[window]\ndays = 1\n'
    )
    assert isthmus("score", config, "--as-of", day.date()).code == 0
    monkeypatch.setattr("sys.stdin", io.StringIO("zeb@own.example\n"))
    said = isthmus("forget", config, "--party")
    assert said.code == 0, said.err
    assert "1 rows" not in said.err
    scores = pl.read_parquet(tmp_path / "warehouse" / "scores" / "*" / "*" / "scores.parquet")
    assert set(scores["party"]) == {"bea@own.example", "cyd@own.example"}
    assert "still has the party" in said.err


def test_nights_of_another_secret_are_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    private = '[privacy]\npseudonyms = true\npurpose = "p"\nsecret_env = "ISTHMUS_TEST_SECRET"\n'
    site = scored(tmp_path, private)
    key_id = run_json(site)["key_id"]
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", "another secret of enough bytes")
    said = forgotten(monkeypatch, site, BETWEEN)
    assert said.code == 78
    assert f"pseudonyms of another secret, key_id {key_id}" in said.err


def test_a_series_that_is_no_longer_defined_is_told(tmp_path: Path) -> None:
    site = Site(tmp_path, LENIENT + "[definitions.m.ties]\nmutual = true\n")
    site.write(rows(AS_OF, [*PAIRS, *((two, one) for one, two in PAIRS)]), AS_OF)
    assert site.score().code == 0
    site.settings(LENIENT)
    assert "also has s-m, which" in isthmus("forget", site.config, "--before", "2027-01-01").err


def test_who_is_still_in_the_log_is_told_and_comes_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = scored(tmp_path)
    said = forgotten(monkeypatch, site, BETWEEN)
    assert said.code == 0
    assert "still has the party" in said.err
    for path in site.log.rglob("*.parquet"):
        path.unlink()
    assert "could not be searched" in forgotten(monkeypatch, site, BETWEEN).err


def test_a_damaged_night_is_named_and_stays_damaged(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = scored(tmp_path)
    (site.warehouse / "ties" / "series=s" / f"as_of={NIGHTS[0]}" / "ties.parquet").unlink()
    said = forgotten(monkeypatch, site, BETWEEN)
    assert said.code == 74
    assert str(NIGHTS[0]) in said.err
    assert BETWEEN not in said.err
    history = json.loads(isthmus("history", site.config, "--json").out)
    assert [night["state"] for night in history["nights"]] == ["damaged", "published", "published"]


@pytest.mark.parametrize("where", ["table", "text", "warehouse"])
def test_what_still_holds_it_is_named_and_not_quoted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, where: str
) -> None:
    site = scored(tmp_path)
    stray = (site.warehouse if where == "warehouse" else site.work) / "series=other" / "stray"
    stray.parent.mkdir()
    if where == "text":
        stray.write_text(f'{{"x": "{BETWEEN}"}}')
    else:
        pl.DataFrame({"who": ["somebody", BETWEEN] * 500}).write_parquet(stray)
        assert BETWEEN.encode() * 2 not in stray.read_bytes()
    said = forgotten(monkeypatch, site, BETWEEN)
    assert said.code == 74
    assert "stray" in said.err
    assert BETWEEN not in said.err + said.out
    assert BETWEEN not in set(site.table("scores")["party"])


def test_only_whole_keys_count() -> None:
    def parquet(*values: str) -> bytes:
        file = io.BytesIO()
        pl.DataFrame({"a": values, "b": [[{"c": value}] for value in values]}).write_parquet(file)
        return file.getvalue()

    def arrow(*values: str) -> bytes:
        file = io.BytesIO()
        pl.DataFrame({"a": pl.Series(values, dtype=pl.Enum(sorted(values)))}).write_ipc(file, compression="zstd")
        return file.getvalue()

    assert holding(arrow("x", "ann@x.org"), ["ann@x.org"])
    assert holding(parquet("x", "ann@x.org"), ["ann@x.org"])
    assert holding(parquet("so said ann@x.org, too"), ["ann@x.org"])
    assert not holding(arrow("joann@x.org", "ann@x.org.uk"), ["ann@x.org"])
    assert holding(parquet("8", "7"), ["7"])
    assert not holding(parquet("17", "page 7"), ["7"])
    assert holding(b'{"k": "7"}', ["7"])
    assert not holding(b'{"seven": 7}', ["7"])
    assert holding("x ünïcødé@x y".encode(), ["ünïcødé@x"])
    assert holding(json.dumps("ünïcødé@x").encode(), ["ünïcødé@x"])


# ---- an object store


@pytest.fixture(scope="module")
def server() -> Iterator[S3]:
    server = S3()
    yield server
    server.close()


@pytest.fixture
def s3_site(server: S3, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Site:
    for key, value in {"ENDPOINT_URL": server.url, "ACCESS_KEY_ID": "a", "SECRET_ACCESS_KEY": "b"}.items():
        monkeypatch.setenv(f"AWS_{key}", value)
    monkeypatch.setenv("AWS_DEFAULT_REGION", "us-east-1")
    monkeypatch.setattr(bucket, "PAUSES", (0.01,))
    name = f"box{time.monotonic_ns()}"
    driver("s3").mkdir(f"s3://{name}")
    site = Site(tmp_path, f'warehouse = "s3://{name}/wh"\n{LENIENT}')
    for night in NIGHTS:
        assert isthmus("score", site.config, "--as-of", night).code == 0
    site.write(rows(DAYS[-1], [*PAIRS, PAIRS[0]]), DAYS[-1])
    assert site.score().code == 0
    return site


def objects(site: Site) -> dict[str, bytes]:
    url = next(line.split('"')[1] for line in site.config.read_text().splitlines() if line.startswith("warehouse"))
    top = url.removeprefix("s3://")
    return {path.removeprefix(f"{top}/"): driver("s3").cat_file(path) for path in driver("s3").find(top)}


def test_the_same_in_an_object_store(s3_site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    before = objects(s3_site)
    assert sum(holding(data, [BETWEEN]) for data in before.values()) > 3 * 2 * 3
    said = isthmus("forget", s3_site.config, "--before", AS_OF)
    assert said.code == 0, said.err
    left = objects(s3_site)
    assert {name for name in left if "as_of=" in name} == {name for name in before if f"as_of={AS_OF}" in name}
    take_from_the_log(s3_site)
    said = forgotten(monkeypatch, s3_site, BETWEEN)
    assert said.code == 0, said.err
    now = objects(s3_site)
    assert not any(holding(data, [BETWEEN]) for data in now.values())
    scores = pl.read_parquet(now[f"scores/series=s/as_of={AS_OF}/scores.parquet"])
    assert sorted(scores["party"]) == sorted(set(PARTIES) - {BETWEEN})
    run = json.loads(now[f"runs/series=s/as_of={AS_OF}/run.json"])
    assert "forgotten" in run["warnings"]
    assert {name: len(now[f"{name}/series=s/as_of={AS_OF}/{name}.parquet"]) for name in run["tables"]} == {
        name: told["bytes"] for name, told in run["tables"].items()
    }
    files = [*now, *(path for path in s3_site.work.rglob("*") if path.is_file())]
    assert f"{len(files)} files" in said.err


def test_places_list_every_file_once(s3_site: Site, tmp_path: Path) -> None:
    url = next(line.split('"')[1] for line in s3_site.config.read_text().splitlines() if line.startswith("warehouse"))
    assert sorted(place(url).files()) == sorted(objects(s3_site))
    site = scored(tmp_path / "other")
    listed = list(place(site.warehouse).files())
    assert len(listed) == len(set(listed))
    assert {(site.warehouse / path).resolve() for path in listed} == {
        path.resolve() for path in site.warehouse.rglob("*") if path.is_file()
    }
    assert list(place(tmp_path / "nowhere").files()) == []


def test_removing_what_is_not_there(s3_site: Site, tmp_path: Path) -> None:
    url = next(line.split('"')[1] for line in s3_site.config.read_text().splitlines() if line.startswith("warehouse"))
    for one_place in (place(url), place(tmp_path / "nowhere")):
        one_place.remove("series=s/as_of=1999-01-01", nullcontext)
        one_place.remove_earlier("series=s/as_of=1999-01-01", nullcontext)
