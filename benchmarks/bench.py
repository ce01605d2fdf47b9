"""What the benchmarks of speed and of limits share: graphs, turns, the machine, and one JSON line per process."""

from __future__ import annotations

import json
import os
import platform
import re
import subprocess
import sys
import time
from collections.abc import Callable, Iterable
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl

from isthmus.betweenness import Estimate, Plan, betweenness, make_plan, measure
from isthmus.betweenness.engine_numba.blocks import forget
from isthmus.graph import Graph
from isthmus.settings import Engine, Method, Score
from open_graphs import DATA, READERS, collection_file, open_graph, read_gt

THREE = ("as-22july06", "email-Enron", "cond-mat-2005")
WEIGHTED, SCALE_FREE = "cond-mat-2005 weighted", "scale-free"
MEMORY = 16 * 2**30
TURNS, ENOUGH = 3, 60.0  # turns of a measurement; fewer once so many seconds are spent

Line = dict[str, Any]
Cell = tuple[str, ...]


def any_graph(name: str) -> Graph:
    """An open graph, or one of the two made here, kept beside them. In either case mapped from disk."""
    if name in READERS:
        return open_graph(name)
    folder = DATA / "graphs" / name.replace(" ", "-")
    if not (folder / "graph.json").exists():
        made = weighted_coauthors() if name == WEIGHTED else scale_free()
        made.save(folder)
    return Graph.open(folder)


def named(n: int) -> pl.Series:
    return pl.Series("party", [f"{at:07d}" for at in range(n)])


def scale_free(n: int = 1_000_000, ties: int = 10_000_000, seed: int = 1, exponent: float = 2.5) -> Graph:
    """Ends drawn in proportion to expected degrees that follow a power law (Chung and Lu 2002); repeats merged."""
    draw = np.random.default_rng(seed)
    ladder = np.cumsum((np.arange(n) + 10.0) ** (-1 / (exponent - 1)))
    tail, head = (np.minimum(np.searchsorted(ladder, draw.random(ties) * ladder[-1]), n - 1) for _ in range(2))
    shuffled = draw.permutation(n)  # so that a party's number does not tell its degree
    apart = tail != head
    return Graph.from_arcs(named(n), shuffled[tail[apart]], shuffled[head[apart]], directed=False)


def weighted_coauthors() -> Graph:
    """cond-mat-2005 with its own weights as strengths; the two ties whose weight is infinite count as 1."""
    raw = collection_file("cond-mat-2005")
    n, tail, head, directed = read_gt(raw)
    # the weights are the file's last property, one float64 per tie
    strength = np.frombuffer(raw, "<f8", len(tail), len(raw) - 8 * len(tail))
    apart = tail != head
    strength = np.where(np.isfinite(strength), strength, 1.0)[apart]
    return Graph.from_arcs(named(n), tail[apart], head[apart], strength, directed=directed)


def ends(graph: Graph) -> tuple[Any, Any, Any]:
    """Tails, heads and lengths, every undirected tie once."""
    tail = np.repeat(np.arange(graph.n), np.diff(graph.out_ptr))
    once = np.ones(graph.arcs, np.bool_) if graph.directed else tail < graph.out_adj
    lengths = np.ones(graph.arcs) if graph.out_lengths is None else graph.out_lengths.astype(np.float64)
    return tail[once], graph.out_adj[once].astype(np.int64), lengths[once]


def warm_up(graph: Graph, method: Method, engine: Engine = "numba") -> None:
    """Have all kernels of a method compiled, or loaded, before a clock runs: on a ring, large enough for all."""
    ring = np.arange(300)
    strength = None if graph.out_lengths is None else np.ones(ring.size)
    small = Graph.from_arcs(named(ring.size), ring, (ring + 1) % ring.size, strength, directed=graph.directed)
    betweenness(small, method=method, engine=engine, samples=256, top=0)


def planned(graph: Graph, score: Score, threads: int) -> tuple[Plan, float]:
    """The plan, and the seconds that making it took."""
    start = time.perf_counter()
    plan = make_plan(graph, score, threads, MEMORY)
    return plan, time.perf_counter() - start


def fresh(graph: Graph, plan: Plan, score: Score) -> Estimate:
    """Measure from the bare graph: what planning has prepared is dropped first, so that it is counted."""
    forget()
    return measure(graph, plan, score)


def turns(work: Callable[[], object]) -> list[float]:
    """Wall seconds of each turn."""
    taken: list[float] = []
    while len(taken) < TURNS and (not taken or sum(taken) + taken[-1] <= ENOUGH):
        start = time.perf_counter()
        work()
        taken.append(round(time.perf_counter() - start, 4))
    return taken


def status(key: str) -> int:
    """A figure of this process in bytes: VmRSS now, VmHWM at most."""
    found = re.search(rf"^{key}:\s+(\d+) kB", Path("/proc/self/status").read_text(), flags=re.MULTILINE)
    assert found is not None
    return int(found[1]) * 1024


def peak_from_here() -> Callable[[], int]:
    """Forget the peak so far; the function returned tells how many bytes it has grown since."""
    Path("/proc/self/clear_refs").write_text("5")
    before = status("VmRSS")
    return lambda: status("VmHWM") - before


def machine() -> str:
    """Date, processor, memory, versions: one line for people."""
    told = dict(re.findall(r"^([^:\n]+):\s+(.*)$", subprocess.check_output(["lscpu"], text=True), re.MULTILINE))
    memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30
    libraries = ", ".join(f"{name} {version(name)}" for name in ("numba", "numpy", "networkit", "igraph"))
    guest = f", {told['Hypervisor vendor']} guest" if "Hypervisor vendor" in told else ""
    return (
        f"{datetime.now(UTC):%-d %B %Y}; {os.cpu_count()} cores of {told['Model name']} (family {told['CPU family']}, "
        f"model {told['Model']}{guest}), L3 {told.get('L3 cache', 'unknown')}, {memory:.0f} GiB; "
        f"Python {platform.python_version()}, {libraries}"
    )


def read_lines(path: Path) -> dict[Cell, Line]:
    """The last line of each measurement."""
    lines = [json.loads(line) for line in path.read_text().splitlines()] if path.exists() else []
    return {tuple(line["cell"]): line for line in lines}


def collect(script: str, path: Path, cells: Iterable[Cell], again: bool, *options: str) -> None:
    """Measure each cell that has no line yet (or every one, `again`) in a process of its own."""
    for cell in cells:
        if not again and cell in read_lines(path):
            continue
        load = os.getloadavg()[0]
        command = [sys.executable, script, *options, "--one", *cell]
        told = json.loads(subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True).stdout)
        line = json.dumps({"cell": cell, "load": round(load, 1), "machine": machine(), **told})
        with path.open("a") as lines:
            lines.write(line + "\n")
        print(line, flush=True)


def markdown(head: list[str], rows: list[list[str]]) -> str:
    """A table; columns in which everything begins with a digit stand on the right."""
    figures = [all(text[:1].isdigit() for text in column if text) for column in zip(*rows, strict=True)]
    rule = "".join("|---:" if right else "|---" for right in figures) + "|"
    lines = [f"| {' | '.join(row)} |" for row in (head, *rows)]
    return "\n".join([lines[0], rule, *lines[1:]]) + "\n"


def when_and_where(lines: Iterable[Line]) -> str:
    """Machines and dates of the lines, and the heaviest load that one of them met."""
    lines = list(lines)
    places = "\n".join(f"{place}." for place in dict.fromkeys(line["machine"] for line in lines))
    busiest = max((line["load"] for line in lines), default=0.0)
    return (
        f"{places}\nLoad of the machine when a measurement began, its own earlier work included: {busiest} at most.\n"
    )


def scores(**keys: Any) -> Score:
    """Settings of a run that only its number of samples ends, unless told otherwise."""
    return Score(**{"top": 0, "minutes": 60.0, **keys})
