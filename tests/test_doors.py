"""One night in this process, in local processes and on a running cluster: the same files, the same refusals."""

from __future__ import annotations

import contextlib
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from isthmus import cluster
from nights import DAYS, PAIRS, Site, rows

MORE = '[score]\nmethod = "exact"\n[gates]\nrefused_limit = 0.5\n'


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextlib.contextmanager
def process(*arguments: str) -> Iterator[subprocess.Popen[bytes]]:
    """A Dask command that is surely gone afterwards."""
    started = subprocess.Popen([sys.executable, "-m", *arguments], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        yield started
    finally:
        started.terminate()
        try:
            started.wait(10)
        except subprocess.TimeoutExpired:
            started.kill()
            started.wait()


@pytest.fixture(scope="module")
def scheduler(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The address of a scheduler with two workers, each a process of its own, as an operator would start them."""
    address = f"tcp://127.0.0.1:{free_port()}"
    here = ("--host", "127.0.0.1", "--no-dashboard")
    home = tmp_path_factory.mktemp("dask")
    with contextlib.ExitStack() as stack:
        stack.enter_context(process("distributed.cli.dask_scheduler", "--port", address.rpartition(":")[2], *here))
        for number in range(2):
            worker = ("distributed.cli.dask_worker", address, "--nthreads", "1", "--no-nanny", *here)
            stack.enter_context(process(*worker, "--local-directory", str(home / str(number))))
        _wait_for_workers(address, 2)
        yield address


def _wait_for_workers(address: str, workers: int) -> None:
    from distributed import Client

    stop = time.monotonic() + 60
    while True:
        with contextlib.suppress(OSError), Client(address, timeout="5s", set_as_default=False) as client:
            client.wait_for_workers(workers, timeout=max(1, stop - time.monotonic()))
            return
        assert time.monotonic() < stop, "the scheduler did not come up"
        time.sleep(0.2)


def make_site(root: Path, run: str = "") -> Site:
    """Several files a day and some dirt; `run` joins the section [run]."""
    root.mkdir()
    site = Site(root, f"{run}\n{MORE}")
    for at, day in enumerate(DAYS):
        dirty = rows(day, [*PAIRS[at:], ("", "Ada"), ("Ada", "Ada")])
        dirty.write_parquet(site.file(day).with_name("part-1.parquet"))
    return site


@pytest.fixture(params=["workers", "scheduler"])
def door(request: pytest.FixtureRequest) -> str:
    """The line in [run] that opens it."""
    return "workers = 2" if request.param == "workers" else f'scheduler = "{request.getfixturevalue("scheduler")}"'


def test_every_door_publishes_the_same_bytes(tmp_path: Path, door: str) -> None:
    found = []
    for name, run in (("here", ""), ("there", door)):
        site = make_site(tmp_path / name, run)
        said = site.score()
        assert said.code == 0, said.err
        files = site.published()
        found.append({file: data for file, data in files.items() if file.endswith(".parquet") and "runs" not in file})
    assert len(found[0]) == 3
    assert found[0] == found[1]


def test_an_error_in_a_worker_arrives_as_itself(tmp_path: Path, door: str) -> None:
    """Of a footer read in a task, and of pages read in a later one."""
    told = []
    for name, run in (("here", ""), ("there", door)):
        site = make_site(tmp_path / name, run)
        whole = site.file(DAYS[2]).read_bytes()
        for broken in (whole[:-30], b"PAR1" + b"\xff" * 200 + whole[204:]):
            site.file(DAYS[2]).write_bytes(broken)
            said = site.score()
            assert said.code == 65, said.err
            told.append([line for line in said.err.splitlines() if line.startswith("isthmus:")])
            assert site.published().keys() == {"layout.json"}
    assert told[:2] == told[2:]
    for lines in told:
        assert len(lines) == 1
        assert "dt=2026-03-03/part-0.parquet is not whole Parquet" in lines[0]


def test_a_scheduler_that_does_not_answer(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Nobody at the address, and somebody who accepts and says nothing."""
    monkeypatch.setattr(cluster, "ANSWER_SECONDS", 1)
    with socket.socket() as mute:
        mute.bind(("127.0.0.1", 0))
        mute.listen()
        for name, port in (("nobody", free_port()), ("mute", mute.getsockname()[1])):
            site = make_site(tmp_path / name, f'scheduler = "tcp://127.0.0.1:{port}"')
            began = time.monotonic()
            said = site.score()
            assert said.code == 74
            assert f"no Dask scheduler answers at run.scheduler = 'tcp://127.0.0.1:{port}'" in said.err
            assert time.monotonic() - began < 10


def test_an_address_that_is_none(tmp_path: Path) -> None:
    site = make_site(tmp_path / "odd", 'scheduler = "nonsense://x:y"')
    assert site.score().code == 74
