"""One run at a time, and a run that lost its lease changes nothing."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path

import pytest

from isthmus import store
from isthmus.errors import StoreError, TryAgain
from isthmus.store import Folder, Place, leases
from isthmus.store import bucket as bucket_module
from isthmus.store import folder as folder_module
from nights import AS_OF, Site
from servers import S3, driver

NAME = "series=s"
NIGHT = "series=s/as_of=2026-03-04"
FILES = [f"scores/{NIGHT}/scores.parquet", f"runs/{NIGHT}/run.json"]
QUICK = {"beat": 0.05, "limit": 0.4}


@pytest.fixture(scope="module")
def s3() -> Iterator[S3]:
    server = S3()
    yield server
    server.close()


@pytest.fixture(params=["folder", "s3"])
def site_of_leases(request: pytest.FixtureRequest, tmp_path: Path) -> Place:
    """A folder, or an object store: the lease means the same on both."""
    if request.param == "folder":
        return Folder(tmp_path)
    server: S3 = request.getfixturevalue("s3")
    patched = request.getfixturevalue("monkeypatch")
    for key, value in {"ENDPOINT_URL": server.url, "ACCESS_KEY_ID": "a", "SECRET_ACCESS_KEY": "b"}.items():
        patched.setenv(f"AWS_{key}", value)
    patched.setenv("AWS_DEFAULT_REGION", "us-east-1")
    name = f"lease{time.monotonic_ns()}"
    driver("s3").mkdir(f"s3://{name}")
    return store.place(f"s3://{name}/wh")


def record(place: Place) -> dict:
    return json.loads(place.register(NAME).read().text or b"{}")


def write(place: Place, **changed: object) -> None:
    """A holder on another machine."""
    register = place.register(NAME)
    holder = {"token": "t", "host": "far", "machine": "far", "pid": 7, "started": "2026-03-04T02:00:00+00:00"} | changed
    register.swap(register.read(), json.dumps(holder).encode())


def old(place: Place, monkeypatch: pytest.MonkeyPatch, age: float) -> None:
    """As if the store's own clock said so."""
    for kind in (folder_module.LockedFile, bucket_module.ConditionalObject):
        monkeypatch.setattr(kind, "age", lambda _: age)


def test_the_second_is_told_at_once_who_holds_it(site_of_leases: Place) -> None:
    with store.lease(site_of_leases, NAME):
        began = time.monotonic()
        told = rf"{NAME} in {site_of_leases} is held by process {os.getpid()} on .* since 20.*T.*run the same command"
        with pytest.raises(TryAgain, match=told), store.lease(site_of_leases, NAME):
            pass
        assert time.monotonic() - began < 2
        with store.lease(site_of_leases, "series=other"):
            pass
    with store.lease(site_of_leases, NAME):
        pass


def test_of_many_at_once_one_gets_it(site_of_leases: Place) -> None:
    started, inside, denied = threading.Barrier(6), [], []

    def run() -> None:
        started.wait()
        try:
            with store.lease(site_of_leases, NAME):
                inside.append(1)
                while len(inside) + len(denied) < 6:
                    time.sleep(0.01)
        except TryAgain:
            denied.append(1)

    threads = [threading.Thread(target=run) for _ in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(20)
    assert (len(inside), len(denied)) == (1, 5)


def test_the_heart_beats_and_the_end_is_told(site_of_leases: Place) -> None:
    with store.lease(site_of_leases, NAME, **QUICK) as held:
        first = record(site_of_leases)
        time.sleep(0.5)
        then = record(site_of_leases)
        assert then["token"] == first["token"]
        assert then["beat"] > first["beat"]
        held.check()
    assert record(site_of_leases)["token"] == ""


def test_far_and_young_is_alive(site_of_leases: Place) -> None:
    write(site_of_leases)
    began = time.monotonic()
    with pytest.raises(TryAgain, match="process 7 on far since 2026-03-04T02"), store.lease(site_of_leases, NAME):
        pass
    assert time.monotonic() - began < 2


@pytest.mark.parametrize("age", [1e6, -1e6])
def test_far_and_silent_is_taken_over(site_of_leases: Place, monkeypatch: pytest.MonkeyPatch, age: float) -> None:
    write(site_of_leases)
    old(site_of_leases, monkeypatch, age)
    began = time.monotonic()
    with store.lease(site_of_leases, NAME, **QUICK):
        assert time.monotonic() - began >= QUICK["limit"]
        assert record(site_of_leases)["host"] != "far"


@pytest.mark.parametrize("age", [1e6, -1e6])
def test_a_clock_that_jumps_steals_nothing(site_of_leases: Place, monkeypatch: pytest.MonkeyPatch, age: float) -> None:
    """The store's clock, and this machine's, say that the heartbeat is long ago; it moves all the same."""
    with store.lease(site_of_leases, NAME, beat=0.05) as held:
        old(site_of_leases, monkeypatch, age)
        now = time.time()
        monkeypatch.setattr(time, "time", lambda: now + age)
        with pytest.raises(TryAgain, match="is held by"), store.lease(site_of_leases, NAME, **QUICK):
            pass
        held.check()


def test_the_file_systems_own_clock_tells_the_age(tmp_path: Path) -> None:
    write(Folder(tmp_path))
    register = Folder(tmp_path).register(NAME)
    assert 0 <= register.age() < 5
    os.utime(tmp_path / ".leases" / f"{NAME}.json", (1, 1))
    assert register.age() > 1e8


def test_a_lease_that_cannot_be_read_counts_as_held(site_of_leases: Place, monkeypatch: pytest.MonkeyPatch) -> None:
    register = site_of_leases.register(NAME)
    register.swap(register.read(), b"\xff{")
    with pytest.raises(TryAgain), store.lease(site_of_leases, NAME):
        pass
    old(site_of_leases, monkeypatch, 1e6)
    with store.lease(site_of_leases, NAME, **QUICK):
        pass


def test_a_store_without_conditions_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(folder_module.LockedFile, "swap", lambda self, seen, text: seen)
    with pytest.raises(StoreError, match="ignores conditional writes"), store.lease(Folder(tmp_path), NAME):
        pass


def publish(place: Place, text: str, guard: store.Guard) -> None:
    place.publish(NIGHT, [store.File(name, lambda path: path.write_text(text), Path.touch) for name in FILES], guard)


def test_who_lost_it_cannot_publish(site_of_leases: Place) -> None:
    told = "taken over from this run by process 7 on far"
    with pytest.raises(TryAgain, match=told), store.lease(site_of_leases, NAME) as held:  # noqa: PT012
        publish(site_of_leases, "one", held.guard)
        write(site_of_leases)
        publish(site_of_leases, "two", held.guard)
    assert record(site_of_leases)["host"] == "far"  # and it does not give away what it does not hold
    if isinstance(site_of_leases, Folder):
        assert {(site_of_leases.path / name).read_text() for name in FILES} == {"one"}
    else:
        assert {driver("s3").cat_file(f"{site_of_leases}/{name}") for name in FILES} == {b"one"}


def test_who_lost_it_is_stopped_at_work(site_of_leases: Place) -> None:
    began = time.monotonic()
    with pytest.raises(TryAgain, match="taken over"), store.lease(site_of_leases, NAME, **QUICK):  # noqa: PT012
        write(site_of_leases)
        time.sleep(10)
    assert time.monotonic() - began < 5


# --- processes that die and freeze ---------------------------------------------------------------------------------

# `freeze` stops the process while none of its heartbeats holds the lock; what follows otherwise is a test of its own
FREEZE = """
import os, signal, sys, threading, time
from contextlib import contextmanager
from isthmus.store import folder
locked, hold = threading.RLock(), folder.LockedFile.hold

@contextmanager
def held(self):
    with locked, hold(self):
        yield

def freeze():
    with locked:
        os.kill(os.getpid(), signal.SIGSTOP)

folder.LockedFile.hold = held
"""
HOLDER = f"""{FREEZE}
from isthmus import store
from isthmus.errors import IsthmusError
place, how = store.Folder(__import__("pathlib").Path(sys.argv[1])), sys.argv[2]

def write(path):
    path.write_text("first")
    if how == "writing":
        freeze()
try:
    with store.lease(place, "series=s", beat=0.05) as held:
        print("held", flush=True)
        if how == "locked":
            with held.guard():
                os.kill(os.getpid(), signal.SIGSTOP)
        elif how == "working":
            freeze()
        elif how == "dies":
            time.sleep(60)
        files = [store.File(name, write, lambda path: path.touch()) for name in sys.argv[3:]]
        place.publish("series=s/as_of=2026-03-04", files, held.guard)
except IsthmusError as error:
    print(error, file=sys.stderr)
    sys.exit(error.exit_code)
"""


@contextmanager
def started(program: str, *arguments: object) -> Iterator[subprocess.Popen[str]]:
    command = [sys.executable, "-c", program, *map(str, arguments)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        yield process
    finally:
        process.kill()
        process.communicate()


@contextmanager
def holder(root: Path, how: str) -> Iterator[subprocess.Popen[str]]:
    with started(HOLDER, root, how, *FILES) as process:
        assert process.stdout
        assert process.stdout.readline() == "held\n"
        yield process


def frozen(process: subprocess.Popen[str]) -> None:
    while Path(f"/proc/{process.pid}/stat").read_text().rpartition(")")[2].split()[0] != "T":
        time.sleep(0.01)


needs_proc = pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="processes are told by /proc")


@needs_proc
def test_a_dead_holder_is_followed_at_once(tmp_path: Path) -> None:
    with holder(tmp_path, "dies") as process:
        with pytest.raises(TryAgain, match=f"process {process.pid} on"), store.lease(Folder(tmp_path), NAME):
            pass
        process.kill()
        process.wait()
        began = time.monotonic()
        with store.lease(Folder(tmp_path), NAME):
            assert time.monotonic() - began < 1


def taken_when_silent(place: Place) -> AbstractContextManager[store.Lease]:
    """The lease of a holder that is frozen; until its heartbeat is old, others are denied."""
    with pytest.raises(TryAgain), store.lease(place, NAME):
        pass
    time.sleep(QUICK["limit"] + 0.2)
    return store.lease(place, NAME, **QUICK)


@needs_proc
@pytest.mark.parametrize("how", ["working", "writing"])
def test_a_frozen_holder_that_wakes_up_changes_nothing(tmp_path: Path, how: str) -> None:
    """Must survive: the successor's night, to the byte."""
    place = Folder(tmp_path)
    with holder(tmp_path, how) as process:
        frozen(process)
        with taken_when_silent(place) as held:
            place.sweep("s")
            publish(place, "second", held.guard)
            process.send_signal(signal.SIGCONT)
            err = process.communicate(timeout=20)[1]
            held.check()
    assert process.returncode == 75, err
    assert f"taken over from this run by process {os.getpid()}" in err
    assert {(tmp_path / name).read_text() for name in FILES} == {"second"}
    place.sweep("s")  # an interrupt that comes in the instant after a folder was made leaves it to the next run
    assert {(tmp_path / name).read_text() for name in FILES} == {"second"}
    assert len(list((tmp_path / ".nights" / NIGHT).iterdir())) == 2


@needs_proc
def test_frozen_at_the_switch_it_keeps_the_lock(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Nobody can take over between its check and its switch; when it wakes up, its night is published."""
    monkeypatch.setattr(folder_module, "_PATIENCE", 0.2)
    with holder(tmp_path, "locked") as process:
        frozen(process)
        time.sleep(QUICK["limit"] + 0.2)
        told = "locked by a run that does not move"
        with pytest.raises(TryAgain, match=told), store.lease(Folder(tmp_path), NAME, **QUICK):
            pass
        process.send_signal(signal.SIGCONT)
        process.communicate(timeout=20)
    assert process.returncode == 0
    assert {(tmp_path / name).read_text() for name in FILES} == {"first"}


FROZEN_NIGHT = f"""{FREEZE}
from isthmus import cli, nightly
from isthmus.store import leases
leases.BEAT = 0.05
measure = nightly.measure
nightly.measure = lambda *arguments, **more: freeze() or measure(*arguments, **more)
cli.main(sys.argv[1:])
"""


@needs_proc
def test_a_whole_night_that_freezes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = Site(tmp_path, '[score]\nmethod = "exact"\n')
    monkeypatch.setattr(leases, "LIMIT", 0.4)
    with started(FROZEN_NIGHT, "score", site.config, "--as-of", AS_OF) as process:
        frozen(process)
        time.sleep(0.6)
        said = site.score()
        assert said.code == 0, said.err
        before = site.published()
        process.send_signal(signal.SIGCONT)
        err = process.communicate(timeout=60)[1]
    assert process.returncode == 75, err
    assert "taken over from this run" in err
    assert site.published() == before


def test_two_nights_at_once(tmp_path: Path) -> None:
    site = Site(tmp_path, '[score]\nmethod = "exact"\n')
    with store.lease(Folder(site.warehouse), "series=s"):
        said = site.score()
    assert said.code == 75
    assert f"held by process {os.getpid()} on" in said.err
    assert site.published().keys() <= {"layout.json"}
    assert site.score().code == 0
