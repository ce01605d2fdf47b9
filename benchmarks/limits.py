"""How close the intervals come to the limit, what memory takes, the million parties, what the plan's word is worth.

    python benchmarks/limits.py                                 what limits.jsonl does not hold yet, then limits.md
    python benchmarks/limits.py --report                        the tables only
    python benchmarks/limits.py --kinds memory --graphs email-Enron --again

Each measurement is a process of its own and one JSON line. With n intervals at once and a normal error, a half-width
cannot be under z * standard error, z = the normal quantile of 1 - delta / 2n: `closeness` is half-width / (z *
standard error) over the 100 highest estimates, so 1 is the limit.
"""

from __future__ import annotations

import argparse
import json
import time
from pathlib import Path
from typing import Any

import numpy as np
from scipy.special import ndtri

from bench import (
    MEMORY,
    SCALE_FREE,
    THREE,
    WEIGHTED,
    Cell,
    Line,
    any_graph,
    collect,
    markdown,
    named,
    peak_from_here,
    planned,
    read_lines,
    scores,
    status,
    warm_up,
    when_and_where,
)
from isthmus.betweenness import Estimate, betweenness, make_plan, measure
from isthmus.betweenness.engine_numba import blocks
from isthmus.betweenness.engine_numba import exact as exact_method
from isthmus.cluster import Here
from isthmus.graph import Graph
from open_graphs import READERS, exact

HERE = Path(__file__).parent
LINES, TABLE = HERE / "limits.jsonl", HERE / "limits.md"
THREADS = 2
PATHS = 1_000_000
RANDOM = "random, 400,000 parties"
NEVER = 1e-12  # a half-width that no interval reaches, so that only the number of samples ends an open-ended run
ROUNDING = 1e-11  # exact values are themselves sums of floats

# what ends the run, and what it is told: for `paths`; for `pivots` the share of sources, and whether it may look
PATH_RULES: dict[str, dict[str, Any]] = {
    "samples": {"samples": PATHS},
    "top 10": {"samples": PATHS, "top": 10},
    "half_width": {"half_width": 0.001},
    "minutes": {"minutes": 0.1},
}
PIVOT_SHARES = {"n/50": 50, "n/10": 10, "n/2": 2}
OPEN_END = "open end"
MEMORY_CASES = (
    ("email-Enron", 64, 1),
    ("email-Enron", 64, 2),
    ("email-Enron", 8, 1),
    ("cond-mat-2005", 64, 2),
    ("packages", 64, 2),
    (RANDOM, 64, 1),
    (RANDOM, 64, 2),
    (WEIGHTED, 1, 1),
    (WEIGHTED, 1, 2),
)
KINDS: dict[str, list[Cell]] = {
    "paths": [(graph, rule) for graph in THREE for rule in PATH_RULES],
    "pivots": [
        (graph, share, end) for graph in ("as-22july06", "email-Enron", "cond-mat-2005")
        for share in PIVOT_SHARES for end in ("samples", OPEN_END)
    ],
    "memory": [(graph, str(lanes), str(threads)) for graph, lanes, threads in MEMORY_CASES],
    "prediction": [
        *((graph, method) for graph in READERS for method in ("paths", "pivots", "exact")),
        (WEIGHTED, "pivots"),
        (WEIGHTED, "exact"),
    ],
    "large": [(SCALE_FREE,)],
}  # fmt: skip


def closeness(found: Estimate) -> np.ndarray[Any, np.dtype[np.float64]]:
    """half-width / (z * standard error) of the 100 highest estimates that have an error."""
    z = -ndtri((1 - found.confidence) / (2 * len(found.parties)))
    first = np.argsort(-found.betweenness, kind="stable")[:100]
    first = first[found.std_error[first] > 0]
    return np.asarray(found.half_widths[first] / (z * found.std_error[first]))


def paths(name: str, rule: str) -> Line:
    return sampled(name, "paths", PATH_RULES[rule])


def pivots(name: str, share: str, end: str) -> Line:
    keys = {"samples": any_graph(name).n // PIVOT_SHARES[share]}
    return sampled(name, "pivots", keys | ({"half_width": NEVER} if end == OPEN_END else {}))


def sampled(name: str, method: str, keys: dict[str, Any]) -> Line:
    """One sampled run; whether its statement held as well, for the exact values are at hand."""
    graph, truth = any_graph(name), exact(name)
    warm_up(graph, method)
    start = time.perf_counter()
    found = betweenness(graph, **{"method": method, "top": 0, "minutes": 30.0, "threads": THREADS, **keys})
    seconds = time.perf_counter() - start
    ratios = closeness(found)
    held = np.all((found.lower <= truth + ROUNDING) & (truth <= found.upper + ROUNDING))
    return {
        "samples": found.samples,
        "stopped_because": found.stopped_because,
        "median": round(float(np.median(ratios)), 3),
        "highest": round(float(ratios.max()), 3),
        "widest": float(found.half_widths.max()),
        "held": bool(held),
        "seconds": round(seconds, 2),
    }


def memory(name: str, lanes: str, threads: str) -> Line:
    """Growth of the resident set while blocks of the exact method run, beside the formula for what they take."""
    if name == RANDOM:
        draw = np.random.default_rng(1)
        tail, head = draw.integers(0, 400_000, (2, 1_600_000))
        apart = tail != head
        graph = Graph.from_arcs(named(400_000), tail[apart], head[apart], directed=False)
    else:
        graph = any_graph(name)
    warm_up(graph, "exact")
    job = blocks.job_for(graph, int(lanes), scores(method="exact"))
    reduced, work = blocks.load_exact(job)
    left = reduced.arrays
    some = np.unique(np.linspace(0, work.blocks - 1, 4 * int(threads)).astype(int)).tolist()
    total = np.zeros(left.n)
    grown = peak_from_here()
    for part in Here(int(threads)).stream(blocks.exact_block, ((job, index) for index in some)):
        total += part.score
    each = exact_method.bytes_per_thread(left.n, left.arcs, int(lanes), weighted=left.out_lengths is not None)
    return {"parties": left.n, "arcs": left.arcs, "measured": grown(), "formula": each * int(threads)}


def prediction(name: str, method: str) -> Line:
    """What the plan says of time and memory, and what came of it."""
    graph = any_graph(name)
    warm_up(graph, method)
    grown = peak_from_here()
    score = scores(method=method, samples={"paths": PATHS, "pivots": graph.n // 10}.get(method, 0))
    plan, planning = planned(graph, score, THREADS)
    start = time.perf_counter()
    measure(graph, plan, score)
    return {
        "planning": round(planning, 3),
        "predicted_seconds": plan.predicted_seconds,
        "seconds": time.perf_counter() - start,
        "predicted_bytes": plan.predicted_bytes,
        "bytes": grown(),
    }


def large(name: str) -> Line:
    """95 % intervals for a million parties by `auto` in three minutes of scoring; all of it under the clock."""
    start = time.perf_counter()
    graph = any_graph(name)
    score = scores(minutes=3.0, confidence=0.95)
    plan = make_plan(graph, score, THREADS, MEMORY // 2)
    planning = time.perf_counter() - start
    found = measure(graph, plan, score)
    return {
        "parties": graph.n,
        "ties": graph.ties,
        "method": found.method,
        "samples": found.samples,
        "planning": round(planning, 1),
        "seconds": round(time.perf_counter() - start, 1),
        "peak_bytes": status("VmHWM"),
        "predicted_bytes": plan.predicted_bytes,
        "widest": float(found.half_widths.max()),
        "half_width_median": float(np.median(found.half_widths)),
        "median": round(float(np.median(closeness(found))), 3),
        "reason": plan.reason,
    }


MEASURES = {"paths": paths, "pivots": pivots, "memory": memory, "prediction": prediction, "large": large}


# Tables ----------------------------------------------------------------------------------------------------------


def mib(count: float) -> str:
    return f"{count / 2**20:,.1f} MiB"


def row_of(kind: str, cell: Cell, line: Line) -> list[str]:
    """One row of the table of a kind."""
    if kind in ("paths", "pivots"):
        figures = [f"{line['samples']:,}", line["stopped_because"], f"{line['median']:.2f}", f"{line['highest']:.2f}"]
        return [*cell, *figures, f"{line['widest']:.2g}", "yes" if line["held"] else "**no**", f"{line['seconds']:.1f}"]
    if kind == "memory":
        ratio = line["measured"] / line["formula"]
        return [cell[0], *cell[1:], f"{line['parties']:,}", mib(line["measured"]), mib(line["formula"]), f"{ratio:.2f}"]
    if kind == "prediction":
        seconds, size = (line["predicted_seconds"], line["seconds"]), (line["predicted_bytes"], line["bytes"])
        figures = [f"{line['planning']:.2f}", *(f"{one:.2f}" for one in seconds), f"{seconds[0] / seconds[1]:.2f}"]
        return [*cell, *figures, *map(mib, size), f"{size[0] / size[1]:.2f}"]
    figures = [f"{line['parties']:,}", f"{line['ties']:,}", line["method"], f"{line['samples']:,}"]
    figures += [f"{line['planning']:.0f}", f"{line['seconds']:.0f}", f"{line['peak_bytes'] / 2**30:.2f} GiB"]
    return [*figures, f"{line['widest']:.2g}", f"{line['half_width_median']:.2g}", f"{line['median']:.2f}"]


SEEN = ["samples", "stopped by", "median", "highest", "widest half-width", "held", "s"]
HEADS: dict[str, tuple[str, str, list[str]]] = {
    "paths": (
        "Paths: half-width / (z * standard error), top 100",
        "Asked for: 1.1 or less for the rule `samples`, 1.25 or less for the others.",
        ["graph", "rule", *SEEN],
    ),
    "pivots": (
        "Pivots: half-width / (z * standard error), top 100",
        "Asked for: a median of 2 or less at n/10 and 1.5 or less at n/2, on as-22july06 and email-Enron.",
        ["graph", "sources", "end", *SEEN],
    ),
    "memory": (
        "Memory of exact, all threads together, beside the graph",
        "Asked for: within 20 % of the formula.",
        ["graph", "lanes", "threads", "parties as reduced", "measured", "formula", "measured / formula"],
    ),
    "prediction": (
        "The plan's prediction",
        "Asked for: a ratio, predicted / taken, between 0.5 and 2.",
        ["graph", "method", "planning s", "predicted s", "taken s", "ratio", "predicted", "grown by", "ratio"],
    ),
    "large": (
        "A million parties, `auto`, `minutes = 3`",
        "Asked for: 95 % intervals for all parties within 10 minutes and 8 GiB.",
        ["parties", "ties", "method", "samples", "planning s", "all s", "peak", "widest", "median", "closeness"],
    ),
}


def write_tables() -> None:
    """limits.md, from the lines."""
    lines = read_lines(LINES)
    text = [when_and_where(lines.values())]
    for kind, cells in KINDS.items():
        rows = [row_of(kind, cell, lines[kind, *cell]) for cell in cells if (kind, *cell) in lines]
        title, asked, head = HEADS[kind]
        if rows:
            text.append(f"## {title}\n{asked}\n\n{markdown(head, rows)}")
    if said := [line["reason"] for cell, line in lines.items() if cell[0] == "large"]:
        text.append(f"The plan's reason: {said[0]}.\n")
    TABLE.write_text("\n".join(text))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--kinds", nargs="+", choices=KINDS, default=list(KINDS))
    parser.add_argument("--graphs", nargs="+", help="only these")
    parser.add_argument("--again", action="store_true", help="also what limits.jsonl holds already")
    parser.add_argument("--report", action="store_true", help="measure nothing")
    parser.add_argument("--one", nargs="+", metavar="NAME", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one:
        kind, *cell = asked.one
        print(json.dumps(MEASURES[kind](*cell)))
        return
    if not asked.report:
        cells: list[Cell] = [
            (kind, *cell) for kind in asked.kinds for cell in KINDS[kind] if not asked.graphs or cell[0] in asked.graphs
        ]
        collect(__file__, LINES, cells, asked.again)
    write_tables()
    print(TABLE.read_text())


if __name__ == "__main__":
    main()
