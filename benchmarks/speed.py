"""Speed beside named peers: same graph, same machine, same number of threads, medians of three turns.

    python benchmarks/speed.py                              what speed.jsonl does not hold yet, then speed.md
    python benchmarks/speed.py --report                     the table only
    python benchmarks/speed.py --rows exact pivots --graphs as-22july06 --again

Each side of a row is a process of its own and one JSON line. Left out of all times: importing, compiling or loading
kernels (the row `start` states that apart), reading the graph, the peer's own graph being built. Ours begins with the
bare graph, so all preparation counts; what planning takes is stated beside it. A peer that would take longer than
--cap seconds is timed on a sample of its sources or paths and scaled; its line and the table say so.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bench import (
    SCALE_FREE,
    THREE,
    WEIGHTED,
    Cell,
    Line,
    any_graph,
    collect,
    ends,
    fresh,
    markdown,
    planned,
    read_lines,
    scores,
    turns,
    warm_up,
    when_and_where,
)
from isthmus.betweenness import betweenness
from isthmus.graph import Graph
from open_graphs import READERS, exact

HERE = Path(__file__).parent
LINES, TABLE = HERE / "speed.jsonl", HERE / "speed.md"
OURS, PEER = "isthmus", "peer"
THREADS = 2
SAMPLE = 600  # sources of the sampled peer, and of a peer that is scaled
PATHS = 1_000_000
TOP, DELTA = 10, 0.05


@dataclass(frozen=True)
class Row:
    """One comparison. `unit`: what is counted per second, or "" when whole runs are compared."""

    work: str
    peer: str
    at_least: float
    graphs: tuple[str, ...]
    unit: str = ""


ROWS = {
    "start": Row("start of a process, four parties", "NetworKit exact", 0, ("exact", "pivots", "paths")),
    "paths": Row("paths, 2 threads", "NetworKit KadabraBetweenness", 2, THREE, "samples"),
    "pivots": Row("pivots, 2 threads", "NetworKit EstimateBetweenness", 10, THREE, "sources"),
    "directed": Row("exact, directed, 2 threads", "NetworKit Betweenness", 10, ("packages",)),
    "weighted": Row("exact, weighted, 2 threads", "NetworKit Betweenness", 2, (WEIGHTED,)),
    "top": Row("top 10 settled", "NetworKit ApproxBetweenness", 10, ("email-Enron", SCALE_FREE)),
    "one thread": Row("exact, 1 thread", "igraph betweenness", 5, THREE),
    "exact": Row("exact, 2 threads", "NetworKit Betweenness", 20, THREE),
}


# Ours ------------------------------------------------------------------------------------------------------------


def ours(row: str, graph: Graph) -> Line:
    """The run of `isthmus` that a row compares: seconds of each turn, and of planning."""
    if row == "top":
        return time_to_top(graph)
    method = row if row in ("paths", "pivots") else "exact"
    samples = {"paths": PATHS, "pivots": graph.n // 10}.get(row, 0)
    warm_up(graph, method)
    score = scores(method=method, samples=samples)
    plan, planning = planned(graph, score, 1 if row == "one thread" else THREADS)
    seconds = turns(lambda: fresh(graph, plan, score))
    return {"seconds": seconds, "done": samples or 1, "plan_seconds": round(planning, 3), "threads": plan.threads}


def time_to_top(graph: Graph) -> Line:
    """From the bare graph, planning included, until the first ten are settled, by whichever method `auto` takes."""
    for method in ("exact", "pivots", "paths"):
        warm_up(graph, method)
    start = time.perf_counter()
    found = betweenness(graph, top=TOP, minutes=20.0, threads=THREADS)
    seconds = round(time.perf_counter() - start, 3)
    told = {"method": found.method, "samples": found.samples, "stopped_because": found.stopped_because}
    settled = int((found.frame(TOP)["top"] == "in").sum())
    return {"seconds": [seconds], "done": 1, **told, "settled": settled, "gap": gap(found.betweenness)}


def gap(values: np.ndarray[Any, np.dtype[np.float64]]) -> float:
    """Between the 10th and the 11th value."""
    first = np.sort(values)[::-1]
    return float(first[TOP - 1] - first[TOP])


# Peers -----------------------------------------------------------------------------------------------------------


def peer(row: str, name: str, graph: Graph, cap: float) -> Line:
    """The same work by the named peer."""
    if row == "one thread":
        return by_igraph(graph, cap)
    import networkit as nk

    nk.setNumberOfThreads(THREADS)
    tail, head, lengths = ends(graph)
    weighted = graph.out_lengths is not None
    made = nk.GraphFromCoo((lengths, (tail, head)), n=graph.n, weighted=weighted, directed=graph.directed)

    def some_sources() -> object:
        # draws one source more than it is asked for
        return nk.centrality.EstimateBetweenness(made, SAMPLE - 1, parallel=True).run()

    if row == "pivots":
        return {"seconds": turns(some_sources), "done": SAMPLE}
    if row == "paths":
        drawn = []

        def kadabra() -> None:
            algorithm = nk.centrality.KadabraBetweenness(made, 0.005, 0.1)
            algorithm.run()
            drawn.append(algorithm.getNumberOfIterations())

        seconds = turns(kadabra)
        each = [took / count for took, count in zip(seconds, drawn, strict=True)]
        return {"seconds": [one * PATHS for one in each], "done": PATHS, "drawn": drawn}
    if row == "top":
        return by_sampled_paths(made, name)
    return whole_or_scaled(lambda: nk.centrality.Betweenness(made).run(), some_sources, graph.n, cap)


def by_igraph(graph: Graph, cap: float) -> Line:
    import igraph

    tail, head, _ = ends(graph)
    made = igraph.Graph(n=graph.n, edges=np.column_stack([tail, head]), directed=graph.directed)
    some = np.random.default_rng(1).choice(graph.n, SAMPLE, replace=False).tolist()
    return whole_or_scaled(made.betweenness, lambda: made.betweenness(sources=some), graph.n, cap)


def whole_or_scaled(whole: Callable[[], object], some: Callable[[], object], n: int, cap: float) -> Line:
    """The whole run, or if that would take longer than `cap`, SAMPLE of its n sources and the time scaled to all."""
    scaled = [took * n / SAMPLE for took in turns(some)]
    if statistics.median(scaled) > cap:
        return {"seconds": scaled, "done": 1, "scaled": f"{SAMPLE} of its {n:,} sources"}
    return {"seconds": turns(whole), "done": 1}


def by_sampled_paths(made: Any, name: str) -> Line:
    """Riondato and Kornaropoulos at half the gap between the 10th and 11th: the width that would settle the ten.

    Samples needed times measured seconds per sample, for it would take days; on one thread, it has no other.
    """
    import networkit as nk

    def run(width: float) -> tuple[int, float]:
        algorithm = nk.centrality.ApproxBetweenness(made, width, DELTA, 1.0)
        start = time.perf_counter()
        algorithm.run()
        return int(algorithm.numberOfSamples()), time.perf_counter() - start

    few, setting_up = run(1.0)  # as good as nothing but the search for the diameter
    many, taken, width = few, setting_up, 1.0
    while taken - setting_up < 10.0:
        width /= 2
        many, taken = run(width)
    each = (taken - setting_up) / (many - few)
    told = None if name in READERS else read_lines(LINES)["top", name, OURS]
    # its scale is all n (n - 1) pairs; the difference, a factor of (n - 2) / n, is nothing here
    wanted = (gap(exact(name)) if told is None else told["gap"]) / 2
    needed = math.ceil(many * (width / wanted) ** 2)
    return {
        "seconds": [setting_up + needed * each],
        "done": 1,
        "scaled": f"{many:,} of the {needed:.2g} paths it needs for ±{wanted:.2g}",
        "gap_from": "exact values" if told is None else "our estimate",
        "seconds_per_path": each,
    }


# Start of a process ----------------------------------------------------------------------------------------------

TINY = """
import polars as pl
from isthmus import Graph, betweenness
ties = pl.DataFrame({"sender": ["a", "b", "c"], "receiver": ["b", "c", "d"]})
betweenness(Graph.from_ties(ties), method="%s", samples=4)
"""
TINY_PEER = """
import networkit as nk
graph = nk.Graph(4)
for end in range(3):
    graph.addEdge(end, end + 1)
nk.centrality.Betweenness(graph).run()
"""


def start(method: str, side: str) -> Line:
    """Seconds from nothing to four scores: with kernels on disk, and (`cold`) compiled the first time."""
    program = TINY_PEER if side == PEER else TINY % method

    def run(cache: str) -> None:
        subprocess.run([sys.executable, "-c", program], check=True, env=os.environ | {"ISTHMUS_KERNEL_CACHE": cache})

    with tempfile.TemporaryDirectory() as cache:
        first = time.perf_counter()
        run(cache)
        cold = round(time.perf_counter() - first, 2)
        warm = turns(lambda: run(cache))
    return {"seconds": warm, "done": 1} | ({} if side == PEER else {"cold_seconds": cold})


# Table -----------------------------------------------------------------------------------------------------------


def cell_text(line: Line, row: Row) -> str:
    seconds = statistics.median(line["seconds"])
    if row.unit:
        return f"{line['done'] / seconds:,.0f} {row.unit}/s"
    if seconds > 2 * 86_400:
        return f"{seconds / 86_400:,.0f} days"
    return f"{seconds:,.2f} s" if seconds < 100 else f"{seconds:,.0f} s"


def remarks(ours: Line, theirs: Line) -> str:
    said = [f"turns {len(ours['seconds'])}, {len(theirs['seconds'])}"]
    if "plan_seconds" in ours:
        said.append(f"our plan {ours['plan_seconds']:.1f} s more")
    if "method" in ours:
        said.append(f"ours: {ours['method']}, stopped by {ours['stopped_because']}, {ours['settled']} settled")
    if "cold_seconds" in ours:
        said.append(f"ours {ours['cold_seconds']:.1f} s when it has to compile")
    if "scaled" in theirs:
        said.append(f"**peer scaled** from {theirs['scaled']}")
    if "drawn" in theirs:
        said.append(f"the peer drew {statistics.median(theirs['drawn']):,.0f}")
    if "gap_from" in theirs:
        said.append(f"gap between ranks 10 and 11 from {theirs['gap_from']}; peer on one thread")
    return "; ".join(said)


def write_table() -> None:
    """speed.md, from the lines."""
    lines = read_lines(LINES)
    rows = []
    for name, row in ROWS.items():
        for graph in row.graphs:
            if not {(name, graph, OURS), (name, graph, PEER)} <= lines.keys():
                continue
            mine, theirs = lines[name, graph, OURS], lines[name, graph, PEER]
            each = [statistics.median(line["seconds"]) / line["done"] for line in (mine, theirs)]
            asked = f"{row.at_least:g}" if row.at_least else ""
            times = f"{each[1] / each[0]:,.1f}"
            texts = [cell_text(line, row) for line in (mine, theirs)]
            rows.append([row.work, graph, row.peer, *texts, times, asked, remarks(mine, theirs)])
    head = ["work", "graph", "peer", "isthmus", "peer's", "times as fast", "at least", "remarks"]
    TABLE.write_text(f"{when_and_where(lines.values())}\n{markdown(head, rows)}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rows", nargs="+", choices=ROWS, default=list(ROWS))
    parser.add_argument("--graphs", nargs="+", help="only these")
    parser.add_argument("--cap", type=float, default=420.0, help="seconds that one run of a peer may take")
    parser.add_argument("--again", action="store_true", help="also what speed.jsonl holds already")
    parser.add_argument("--report", action="store_true", help="measure nothing")
    parser.add_argument("--one", nargs=3, metavar=("ROW", "GRAPH", "SIDE"), help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one:
        row, name, side = asked.one
        if row == "start":
            print(json.dumps(start(name, side)))
        else:
            graph = any_graph(name)
            print(json.dumps(ours(row, graph) if side == OURS else peer(row, name, graph, asked.cap)))
        return
    if not asked.report:
        cells: list[Cell] = [
            (row, graph, side)
            for row in asked.rows
            for graph in ROWS[row].graphs
            if not asked.graphs or graph in asked.graphs
            for side in (OURS, PEER)
        ]
        collect(__file__, LINES, cells, asked.again, "--cap", str(asked.cap))
    write_table()
    print(TABLE.read_text())


if __name__ == "__main__":
    main()
