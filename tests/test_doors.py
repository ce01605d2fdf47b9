"""One night in this process, in local processes and on a running cluster: the same files, the same refusals."""

from __future__ import annotations

import contextlib
import json
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from isthmus import cluster
from isthmus.betweenness import make_plan, measure
from isthmus.betweenness.engine_numba import exact, paths, pivots, reductions
from isthmus.cluster import open_door
from isthmus.errors import SettingsError, StoreError
from isthmus.graph import Graph
from isthmus.nightly import run_night
from isthmus.settings import Score, load
from isthmus.watch import Watch
from nights import AS_OF, DAYS, PAIRS, Site, rows

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


def test_a_scheduler_without_workers_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    """Not waited for without end."""
    monkeypatch.setattr(cluster, "WORKER_SECONDS", 1)
    address = f"tcp://127.0.0.1:{free_port()}"
    command = ("distributed.cli.dask_scheduler", "--port", address.rpartition(":")[2], "--host", "127.0.0.1")
    with process(*command, "--no-dashboard"):
        _wait_for_workers(address, 0)
        with pytest.raises(StoreError, match="has no worker after 1 s"), cluster.open_door(scheduler=address):
            pass


def _wait_for_workers(address: str, workers: int) -> None:
    from distributed import Client

    stop = time.monotonic() + 60
    while True:
        with contextlib.suppress(OSError), Client(address, timeout="5s", set_as_default=False) as client:
            if workers:
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
def keys(request: pytest.FixtureRequest) -> dict[str, Any]:
    """The keys in [run] that open a door."""
    return {"workers": 2} if request.param == "workers" else {"scheduler": request.getfixturevalue("scheduler")}


@pytest.fixture
def door(keys: dict[str, Any]) -> str:
    """The line in [run] that opens it."""
    return "\n".join(f"{key} = {json.dumps(value)}" for key, value in keys.items())


@pytest.fixture(scope="module")
def graph(tmp_path_factory: pytest.TempPathFactory) -> Graph:
    """A snapshot of some thousand parties: several blocks of work for every method."""
    n = 6000
    tail, head = (n * np.random.default_rng(6).random((2, 5 * n)) ** 1.3).astype(np.int64)
    parties = pl.Series("party", [f"p{i:04d}" for i in range(n)])
    kept = tail != head
    folder = tmp_path_factory.mktemp("snapshot")
    Graph.from_arcs(parties, tail[kept], head[kept], directed=True).save(folder)
    return Graph.open(folder)


@pytest.fixture
def two_workers(tmp_path: Path) -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """A scheduler whose workers may be killed."""
    address = f"tcp://127.0.0.1:{free_port()}"
    here = ("--host", "127.0.0.1", "--no-dashboard")
    with contextlib.ExitStack() as stack:
        stack.enter_context(process("distributed.cli.dask_scheduler", "--port", address.rpartition(":")[2], *here))
        worker = ("distributed.cli.dask_worker", address, "--nthreads", "1", "--no-nanny", *here)
        workers = [
            stack.enter_context(process(*worker, "--local-directory", str(tmp_path / f"dask{at}"))) for at in range(2)
        ]
        _wait_for_workers(address, 2)
        yield address, workers


@pytest.mark.parametrize("method", ["exact", "pivots", "paths"])
def test_a_worker_killed_while_measuring(graph: Graph, two_workers: Any, method: Any) -> None:
    address, workers = two_workers
    score = Score(method=method, samples={"exact": 0, "pivots": 4000, "paths": 40_000}[method], top=0)
    plan = make_plan(graph, score, 1, 2**34)
    here = measure(graph, plan, score)
    killed: list[float] = []

    def kill(share: float) -> None:
        if 0 < share < 1 and not killed:
            killed.append(share)
            workers[0].kill()

    with open_door(scheduler=address) as door:
        there = measure(graph, plan, score, progress=kill, door=door)
    assert killed
    for column in ("betweenness", "lower", "upper", "std_error"):
        assert getattr(there, column).tobytes() == getattr(here, column).tobytes()


def test_a_worker_killed_while_reading(tmp_path: Path, two_workers: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    address, workers = two_workers
    here, there = make_site(tmp_path / "here"), make_site(tmp_path / "there", f'scheduler = "{address}"')
    assert here.score().code == 0
    killed: list[float] = []

    def kill(stage: str, share: float) -> None:
        if stage == "read" and 0 < share < 1 and not killed:
            killed.append(share)
            workers[0].kill()

    run_night(load(there.config), AS_OF, Watch(tell=kill))
    assert killed
    for name in ("scores", "ties", "refused"):
        assert there.table(name).equals(here.table(name))


def test_workers_that_need_more_than_their_memory_are_told_of(tmp_path: Path) -> None:
    """Not waited for: each of two may take half of it, which is less than an empty worker takes."""
    with (
        open_door(workers=2, threads=1, scratch=str(tmp_path), memory=2 * 2**28) as door,
        pytest.raises(SettingsError, match=r"workers died again and again .* each may take 0.25 GiB; raise run.memory"),
    ):
        door.run(_swallow, [2**29] * 2)


def _swallow(size: int) -> int:
    held = np.ones(size, np.uint8)
    time.sleep(5)
    return int(held[-1])


def test_every_door_measures_the_same_bits(graph: Graph, keys: dict[str, Any]) -> None:
    """Also where only some of the workers hold the graph, or a run is given up half-way and another begins."""
    reduced = reductions.reduce(graph)
    assert exact.make_plan(reduced).blocks > 2
    scores = [
        Score(method="exact"),
        Score(method="pivots", samples=5 * pivots.BLOCK, top=0),
        Score(method="paths", samples=3 * paths.MOST + 100, top=0),
        Score(method="paths", samples=3 * paths.MOST + 100, top=0, max_hops=4, seed=9),
    ]
    plans = [make_plan(graph, score, 1, 2**33) for score in scores]
    with open_door(**keys) as door:
        with pytest.raises(ZeroDivisionError):
            measure(graph, plans[1], scores[1], progress=lambda share: 1 / (share < 0.3), door=door)
        for score, plan in zip(scores, plans, strict=True):
            here, there = measure(graph, plan, score), measure(graph, plan, score, door=door)
            assert here.samples == there.samples == (score.samples or graph.n)
            for column in ("betweenness", "lower", "upper", "std_error"):
                assert getattr(here, column).tobytes() == getattr(there, column).tobytes(), (score, column)


def test_a_graph_that_is_only_in_memory_cannot_travel(keys: dict[str, Any]) -> None:
    """The error arrives as itself, and says what to do."""
    parties = pl.Series("party", list("abcde"))
    alone = Graph.from_arcs(parties, np.arange(5), (np.arange(5) + 1) % 5, directed=False)
    score = Score(method="exact")
    with open_door(**keys) as door, pytest.raises(SettingsError, match="save and open it first"):
        measure(alone, make_plan(alone, score, 1, 2**33), score, door=door)


def test_every_door_publishes_the_same_bytes(tmp_path: Path, door: str) -> None:
    found = []
    for name, run in (("here", ""), ("there", door)):
        site = make_site(tmp_path / name, run)
        said = site.score()
        assert said.code == 0, said.err
        files = site.published()
        found.append({file: data for file, data in files.items() if file.endswith(".parquet") and "runs" not in file})
    assert len(found[0]) == 4
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
