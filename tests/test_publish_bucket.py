"""Object stores: every object whole, faults told without secrets, and no run overwrites its successor."""

from __future__ import annotations

import io
import itertools
import json
import random
import signal
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import nullcontext, suppress
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from isthmus import store
from isthmus.errors import StoreError, TryAgain
from isthmus.store import File, Place, bucket
from nights import AS_OF, PARTIES, Site
from servers import S3, Azurite, azurite, driver

NIGHT = f"series=s/as_of={AS_OF}"
TABLES = [f"{table}/{NIGHT}/{table}.parquet" for table in ("scores", "ties", "refused", "runs")]
NAMES = [*TABLES, f"runs/{NIGHT}/run.json"]
SECRET = "hush-3f9c1e"


@pytest.fixture(scope="module")
def server() -> Iterator[S3]:
    server = S3()
    yield server
    server.close()


@pytest.fixture
def s3(server: S3, monkeypatch: pytest.MonkeyPatch) -> Iterator[S3]:
    for key, value in {"ENDPOINT_URL": server.url, "ACCESS_KEY_ID": "a", "SECRET_ACCESS_KEY": SECRET}.items():
        monkeypatch.setenv(f"AWS_{key}", value)
    monkeypatch.setenv("AWS_DEFAULT_REGION", "us-east-1")
    monkeypatch.setattr(bucket, "PAUSES", (0.01, 0.02, 0.04, 0.08))
    server.fault = lambda method, path: 0
    yield server
    server.fault = lambda method, path: 0


@pytest.fixture
def place(s3: S3) -> Place:
    name = f"box{time.monotonic_ns()}"
    driver("s3").mkdir(f"s3://{name}")
    s3.asked.clear()
    return store.place(f"s3://{name}/wh")


def publish(place: Place, text: str, guard: store.Guard) -> None:
    def file(name: str) -> File:
        return File(name, lambda path: path.write_text(f"{text} {name}"), Path.touch)

    place.publish(NIGHT, [file(name) for name in NAMES], guard)


def published(place: Place, scheme: str = "s3") -> dict[str, str]:
    """Name -> which run's it is."""
    reader = driver(scheme)
    top = reader._strip_protocol(str(place))
    found = {path.removeprefix(f"{top}/"): reader.cat_file(path).decode() for path in reader.find(top)}
    return {name: text.split()[0] for name, text in found.items() if name in NAMES}


def test_objects_appear_in_order_run_json_last(place: Place, s3: S3) -> None:
    with store.lease(place, "series=s") as held:
        publish(place, "one", held.guard)
    puts = [path.partition("/wh/")[2] for path in s3.puts()]
    assert [path for path in puts if path in NAMES] == NAMES
    assert published(place) == dict.fromkeys(NAMES, "one")


def test_the_same_bytes_are_left_alone(place: Place, s3: S3) -> None:
    with store.lease(place, "series=s") as held:
        publish(place, "one", held.guard)
        s3.asked.clear()
        publish(place, "one", held.guard)
        assert not [path for path in s3.puts() if not path.endswith(("series=s.json", "under-way.json"))]
        publish(place, "two", held.guard)
    assert published(place) == dict.fromkeys(NAMES, "two")


def test_every_third_request_fails(place: Place, s3: S3) -> None:
    count = itertools.count(1)

    def third(*_: str) -> int:
        number = next(count)
        return 0 if number % 3 else (500, 503)[number // 3 % 2]

    s3.fault = third
    place.claim(1, "run.warehouse")
    for text in ("one", "two"):
        with store.lease(place, "series=s") as held:
            publish(place, text, held.guard)
    s3.fault = lambda *_: 0
    assert next(count) > 40
    assert published(place) == dict.fromkeys(NAMES, "two")
    assert place.examine(1, "run.warehouse") == 1


@pytest.mark.parametrize("after", [1, 4])
def test_a_store_that_goes_away_in_between(place: Place, s3: S3, after: int) -> None:
    """Must survive: every object whole, of the old run or the new one, run.json of the old; the next run completes."""
    with store.lease(place, "series=s") as held:
        publish(place, "old", held.guard)
        s3.asked.clear()
        s3.fault = lambda *_: 503 * (sum(path.partition("/wh/")[2] in NAMES for path in s3.puts()) > after)
        with pytest.raises(StoreError, match=r"cannot write s3://box.*503 SlowDown; check that the bucket"):
            publish(place, "new", held.guard)
        s3.fault = lambda *_: 0
        assert published(place) == {name: "new" if at < after else "old" for at, name in enumerate(NAMES)}
        publish(place, "new", held.guard)
    assert published(place) == dict.fromkeys(NAMES, "new")


def test_what_is_too_large_for_one_request_is_guarded_by_the_lease(
    place: Place, s3: S3, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(bucket, "_ONE_REQUEST", 1)
    with pytest.raises(TryAgain, match="taken over"), store.lease(place, "series=s") as held:  # noqa: PT012
        publish(place, "one", held.guard)
        publish(place, "two", held.guard)
        register = place.register("series=s")
        register.swap(register.read(), b'{"token": "successor"}')
        publish(place, "three", held.guard)
    assert published(place) == dict.fromkeys(NAMES, "two")


def test_a_successor_between_check_and_request(place: Place, s3: S3) -> None:
    """Frozen in the middle of a request: what the successor wrote stays, because the request carries a condition."""
    with store.lease(place, "series=s") as held:
        publish(place, "old", held.guard)
    with pytest.raises(TryAgain, match="taken over"), store.lease(place, "series=s") as held:  # noqa: PT012

        def meanwhile(method: str, path: str) -> int:
            if method == "PUT" and path.endswith(NAMES[1]):
                s3.fault = lambda *_: 0
                register = place.register("series=s")
                register.swap(register.read(), b'{"token": "successor"}')
                publish(place, "successor", nullcontext)
            return 0

        s3.fault = meanwhile
        publish(place, "mine", held.guard)
    assert published(place) == dict.fromkeys(NAMES, "successor")


def test_an_answer_that_is_lost(place: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every write arrives and its first answer does not: nothing is taken for another run's."""
    ask, lose = bucket.Bucket._ask, itertools.cycle([True, False])

    def ask_and_lose(self, doing, path, request):
        def twice(url):
            if doing == "write" and next(lose):
                request(url)
                raise TimeoutError
            return request(url)

        return ask(self, doing, path, twice)

    monkeypatch.setattr(bucket.Bucket, "_ask", ask_and_lose)
    for text in ("one", "two"):
        with store.lease(place, "series=s") as held:
            held.renew()
            publish(place, text, held.guard)
    monkeypatch.setattr(bucket.Bucket, "_ask", ask)
    assert published(place) == dict.fromkeys(NAMES, "two")


def test_a_store_that_ignores_conditions_is_refused(place: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(bucket.Bucket, "only_if", lambda *_: {})
    with pytest.raises(StoreError, match="ignores conditional writes"), store.lease(place, "series=s"):
        pass


def test_nobody_answers_or_no_bucket(s3: S3, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(StoreError, match=r"cannot read s3://no-such-bucket/w/layout.json.*NoSuchBucket") as told:
        store.place("s3://no-such-bucket/w").claim(1, "run.warehouse")
    monkeypatch.setenv("AWS_ENDPOINT_URL", "http://127.0.0.1:9")
    began = time.monotonic()
    with pytest.raises(StoreError, match="the store answers") as silent:
        store.place("s3://box/w").examine(1, "run.warehouse")
    assert time.monotonic() - began < 5
    for error in (told, silent):
        assert SECRET not in str(error.value)


# --- kill -9 -------------------------------------------------------------------------------------------------------

# Publishes runs of different sizes, one after the other, until it is killed.
PUBLISHER = """
import itertools, shutil, sys
from pathlib import Path
from isthmus import store
from isthmus.store import bucket

url, prepared, start = sys.argv[1], Path(sys.argv[2]), int(sys.argv[3])
runs = sorted(prepared.iterdir())
place = store.place(url)
print("started", flush=True)
with store.lease(place, "series=s", beat=0.5) as held:
    for at in itertools.count(start):
        files = [store.File(f"{name.split('.')[0]}/series=s/as_of=2026-03-04/{name}",
                            lambda path, name=name: shutil.copy(runs[at % len(runs)] / name, path), Path.touch)
                 for name in ("scores.parquet", "runs.parquet")]
        place.publish("series=s/as_of=2026-03-04", files, held.guard)
"""
KILLS = 12


def test_killed_at_any_instant_the_pointer_names_one_whole_run(tmp_path: Path, place: Place) -> None:
    """Must survive: what current.json names is one run, whole; and each copy is one run's table, whole."""
    home, prepared = f"{place}/.nights/series=s/as_of=2026-03-04", tmp_path / "prepared"
    for at in range(5):
        folder, size = prepared / str(at), 100 * (at + 1)
        folder.mkdir(parents=True)
        scores = pl.DataFrame({"party": [f"{at}-{party}" for party in range(size)], "run_id": [f"run-{at}"] * size})
        scores.write_parquet(folder / "scores.parquet")
        pl.DataFrame({"run_id": [f"run-{at}"], "parties": [size]}).write_parquet(folder / "runs.parquet")
    reader, draw, told = driver("s3"), random.Random(6), Counter[str]()

    def frame(path: str) -> pl.DataFrame:
        return pl.read_parquet(io.BytesIO(reader.cat_file(path)))

    def look() -> None:
        for _ in range(9):
            try:
                named = json.loads(reader.cat_file(f"{home}/current.json"))
                scores, run = (frame(f"{home}/{named[table]}") for table in ("scores", "runs"))
                break
            except FileNotFoundError:  # nothing yet; or two publications since the pointer was read
                told["again"] += 1
                time.sleep(0.05)
        else:
            return
        told["whole" if whole(scores, run) else "wrong"] += 1
        with suppress(FileNotFoundError):
            copy = frame(f"{place}/scores/series=s/as_of=2026-03-04/scores.parquet")
            told[
                "copies" if copy.height == len(set(copy["party"])) and copy["run_id"].n_unique() == 1 else "wrong"
            ] += 1

    for kill in range(KILLS):
        publisher = subprocess.Popen(
            [sys.executable, "-c", PUBLISHER, str(place), str(prepared), str(kill)], stdout=subprocess.PIPE
        )
        assert publisher.stdout
        assert publisher.stdout.readline()
        until = time.monotonic() + draw.uniform(0.5, 2.0)
        while time.monotonic() < until:
            look()
        publisher.send_signal(signal.SIGKILL)
        publisher.wait()
        publisher.stdout.close()
        look()
    print(told)
    assert told["wrong"] == 0
    assert told["whole"] > 2 * KILLS
    assert told["copies"] > KILLS
    if not names_a_whole_copy(place, reader):
        told["left undone"] += 1
    with store.lease(place, "series=s"):
        place.sweep("s")
    assert names_a_whole_copy(place, reader)
    left = {path.rpartition("/")[2] for path in reader.find(home)}
    assert left > set(json.loads(reader.cat_file(f"{home}/current.json")).values())
    assert len(left) <= 5  # and what the pointer before named


def names_a_whole_copy(place: Place, reader: Any) -> bool:
    """Whether the copies are what the pointer names."""
    home = f"{place}/.nights/series=s/as_of=2026-03-04"
    return all(
        reader.exists(f"{place}/{stem}/series=s/as_of=2026-03-04/{stem}.parquet")
        and reader.cat_file(f"{place}/{stem}/series=s/as_of=2026-03-04/{stem}.parquet")
        == reader.cat_file(f"{home}/{name}")
        for stem, name in json.loads(reader.cat_file(f"{home}/current.json")).items()
    )


@pytest.mark.parametrize("after", range(1, 12))
def test_another_nights_run_finishes_what_a_killed_one_left(place: Place, s3: S3, after: int) -> None:
    """Killed after so many writes. Must survive: the night, whole or not at all, once any run has begun."""
    with store.lease(place, "series=s", beat=60) as held:
        publish(place, "old", held.guard)
        s3.asked.clear()
        s3.fault = lambda *_: 503 * (len([path for path in s3.puts() if ".leases" not in path]) > after)
        with pytest.raises(StoreError):
            publish(place, "new", held.guard)
        s3.fault = lambda *_: 0
        place.sweep("s")
    found = set(published(place).values())
    assert found in ({"old"}, {"new"})
    reader = driver("s3")
    home = f"{place}/.nights/{NIGHT}"
    named = json.loads(reader.cat_file(f"{home}/current.json"))
    assert {path.rpartition("/")[2] for path in reader.find(home)} == {"current.json", *named.values()}
    assert reader.cat_file(f"{home}/{named['scores']}").decode().split()[0] in found


def whole(scores: pl.DataFrame, run: pl.DataFrame) -> bool:
    (told,) = run.iter_rows(named=True)
    return scores.height == told["parties"] and set(scores["run_id"]) == {told["run_id"]}


# --- whole nights --------------------------------------------------------------------------------------------------


def night_on(root: Path, url: str) -> Site:
    return Site(root, f'warehouse = "{url}"\n[score]\nmethod = "exact"\n')


def check_night(site: Site, url: str, scheme: str, secret: str) -> None:
    """Scores can be read, run.json is there, and the secret is nowhere."""
    said = site.score("--json")
    assert said.code == 0, said.err
    reader = driver(scheme)
    scores = pl.read_parquet(io.BytesIO(reader.cat_file(f"{url}/{NAMES[0]}")))
    assert sorted(scores["party"]) == PARTIES
    run = json.loads(reader.cat_file(f"{url}/{NAMES[-1]}"))
    assert set(scores["run_id"]) == {run["run_id"]}
    assert run["settings"]["run"]["warehouse"] == url
    told = [said.out.encode(), said.err.encode(), *(reader.cat_file(path) for path in reader.find(url))]
    told += [path.read_bytes() for path in site.root.rglob("*") if path.is_file()]
    assert not [text for text in told if secret.encode() in text]


def test_a_night_on_s3(tmp_path: Path, place: Place, s3: S3) -> None:
    site = night_on(tmp_path, str(place))
    assert site.check().code == 0
    check_night(site, str(place), "s3", SECRET)
    s3.asked.clear()
    assert site.score().code == 0
    put = {path.rpartition("/")[2] for path in s3.puts()}
    told = {name for name in put if not name.endswith(".data")}
    assert told == {"series=s.json", "under-way.json", "current.json", "runs.parquet", "run.json"}
    assert {name.split(".")[0] for name in put - told} == {"runs", "run"}  # the tables are the same bytes
    assert not (tmp_path / "warehouse").exists()
    with store.lease(place, "series=s"):
        said = site.score()
    assert said.code == 75
    assert f"series=s in {place} is held by process" in said.err


@pytest.fixture(scope="module")
def blobs(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Azurite]:
    with azurite(tmp_path_factory.mktemp("azurite")) as server:
        yield server


@pytest.mark.parametrize("scheme", ["abfs", "az"])
def test_a_night_on_azure(tmp_path: Path, blobs: Azurite, monkeypatch: pytest.MonkeyPatch, scheme: str) -> None:
    monkeypatch.setenv("AZURE_STORAGE_CONNECTION_STRING", blobs.connection)
    driver("abfs").mkdir(f"night-{scheme}")
    check_night(
        night_on(tmp_path, f"{scheme}://night-{scheme}/wh"), f"{scheme}://night-{scheme}/wh", "abfs", blobs.secret
    )


def test_azure_goes_away_in_between(blobs: Azurite, monkeypatch: pytest.MonkeyPatch) -> None:
    """Must survive: what was published; the next run completes the night."""
    monkeypatch.setenv("AZURE_STORAGE_CONNECTION_STRING", blobs.connection)
    monkeypatch.setattr(bucket, "PAUSES", (0.01, 0.02))
    driver("abfs").mkdir("killed")
    place = store.place("abfs://killed/wh")
    with store.lease(place, "series=s", beat=60) as held:
        publish(place, "old", held.guard)
        guards = itertools.count(1)

        def guard() -> nullcontext[None]:
            if next(guards) == 3:
                blobs.stop()
            return nullcontext()

        began = time.monotonic()
        with pytest.raises(
            StoreError, match=r"cannot write abfs://killed/wh/.nights/.*ties.parquet.*the store answers"
        ) as told:
            publish(place, "new", guard)
        assert time.monotonic() - began < 10
        assert blobs.secret not in str(told.value)
        blobs.start()
        held.check()
        assert published(place, "abfs") == dict.fromkeys(NAMES, "old")
        publish(place, "new", held.guard)
        assert published(place, "abfs") == dict.fromkeys(NAMES, "new")


def test_azure_denies_a_second(blobs: Azurite, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("AZURE_STORAGE_CONNECTION_STRING", blobs.connection)
    driver("abfs").mkdir("lease")
    place = store.place("abfs://lease/wh")
    with store.lease(place, "series=s") as held:
        held.renew()
        with pytest.raises(TryAgain, match="held by process"), store.lease(place, "series=s"):
            pass
        register = place.register("series=s")
        seen = register.read()
        register.swap(seen, b'{"token": "successor"}')
        with pytest.raises(TryAgain, match="taken over"):
            held.check()


def test_an_address_with_a_password_is_refused_without_saying_it(tmp_path: Path) -> None:
    for url in (
        f"s3://me:{SECRET}@box/wh",
        f"abfs://box/wh?sig={SECRET}",
        f"s3://box/wh#{SECRET}",
        f"ftp://{SECRET}@x/y",
    ):
        said = night_on(tmp_path, url).score()
        assert said.code == 78
        assert "run.warehouse" in said.err
        assert SECRET not in said.out + said.err
