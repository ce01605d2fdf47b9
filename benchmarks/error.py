"""Error of the sampled methods against exact betweenness, beside the error that they state, on the open graphs.

    python benchmarks/error.py                      measure what is not yet in error.jsonl, then table and picture
    python benchmarks/error.py --report             table and picture only, from error.jsonl
    python benchmarks/error.py --graph email-Enron --samples 8192 --seeds 1

Each measurement is a process of its own and one JSON line. Errors are on Freeman's scale: shares of pairs, 0..1.
`observed` is the largest error of any party; `stated` is the farthest that any party's interval reaches from its
value. The statement is true of a measurement when every party's exact value lies in its interval: `held`.
"""

from __future__ import annotations

import argparse
import itertools
import json
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import polars as pl

from bench import warm_up
from isthmus.betweenness import betweenness
from isthmus.errors import SettingsError
from isthmus.settings import Engine, Method
from open_graphs import READERS, exact, open_graph

HERE = Path(__file__).parent
LINES, TABLE, PICTURE = HERE / "error.jsonl", HERE / "error.md", HERE / "error.svg"
METHODS = ("pivots", "paths")
KEY = ("graph", "engine", "method", "asked", "seed")
ROUNDING = 1e-11  # exact values are themselves sums of floats


def measure(graph: str, engine: Engine, method: Method, samples: int, seed: int) -> dict[str, object]:
    """One measurement. Both times include planning; `kept_of_top_100` is the share of the true first 100 found."""
    told: dict[str, object] = {"graph": graph, "engine": engine, "method": method, "asked": samples, "seed": seed}
    truth, opened = exact(graph), open_graph(graph)
    warm_up(opened, method, engine)  # so that loading or compiling the engine is not counted
    start, spent = time.perf_counter(), time.process_time()
    try:
        found = betweenness(opened, method=method, engine=engine, samples=samples, top=0, seed=seed, minutes=60.0)
    except SettingsError as error:
        return told | {"refused": str(error)}
    seconds, spent = time.perf_counter() - start, time.process_time() - spent
    value = found.betweenness
    off = np.abs(value - truth)
    reach = np.maximum(found.upper - value, value - found.lower)
    first = np.argsort(-truth, kind="stable")[:100]
    figures = {
        "observed": off.max(),
        "observed_rms": np.sqrt(np.mean(off**2)),
        "stated": reach.max(),
        "stated_median_top_100": np.median(reach[first]),
        "seconds": seconds,
        "cpu_seconds": spent,
    }
    return told | {
        "samples": found.samples,
        "held": bool(np.all((found.lower <= truth + ROUNDING) & (truth <= found.upper + ROUNDING))),
        "kept_of_top_100": len(set(first) & set(np.argsort(-value, kind="stable")[:100])) / len(first),
        **{name: float(f"{figure:.5g}") for name, figure in figures.items()},
    }


def collect(asked: argparse.Namespace) -> None:
    """Run every combination that error.jsonl does not hold yet."""
    kept = [json.loads(line) for line in LINES.read_text().splitlines()] if LINES.exists() else []
    done = {tuple(line[key] for key in KEY) for line in kept}
    seeds = range(1, asked.seeds + 1)
    for graph, samples, method, seed in itertools.product(asked.graph, asked.samples, asked.method, seeds):
        if (graph, asked.engine, method, samples, seed) in done:
            continue
        one = ["--one", "--graph", graph, "--engine", asked.engine, "--method", method]
        command = [sys.executable, __file__, *one, "--samples", str(samples), "--seeds", str(seed)]
        line = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True).stdout
        with LINES.open("a") as lines:
            lines.write(line)
        print(line, end="", flush=True)


def summarise() -> pl.DataFrame:
    """Worst over the seeds for each graph, engine, method and sample size."""
    lines = pl.read_ndjson(LINES, infer_schema_length=None)
    if "refused" in lines.columns:
        lines = lines.filter(pl.col("refused").is_null())
    order = pl.col("graph").replace_strict({name: at for at, name in enumerate(READERS)}, return_dtype=pl.Int64)
    return (
        lines.group_by("graph", "engine", "method", "samples")
        .agg(
            pl.len().alias("seeds"),
            pl.col("observed", "stated", "stated_median_top_100").max(),
            pl.col("held").sum(),
            pl.col("kept_of_top_100").mean(),
            pl.col("cpu_seconds").median(),
        )
        .sort(order, "engine", "method", "samples")
    )


def write_table(summary: pl.DataFrame) -> None:
    head = (
        "graph",
        "engine",
        "method",
        "samples",
        "worst error",
        "stated",
        "stated / worst",
        "held",
        "true top 100 found",
        "CPU s",
    )
    lines = [f"| {' | '.join(head)} |", "|---|---|---|" + "---:|" * (len(head) - 3)]
    for row in summary.iter_rows(named=True):
        cells = [
            row["graph"],
            row["engine"],
            row["method"],
            f"{row['samples']:,}",
            f"{row['observed']:.2g}",
            f"{row['stated']:.2g}",
            f"{row['stated'] / row['observed']:.1f}",
            f"{row['held']} of {row['seeds']}",
            f"{row['kept_of_top_100']:.0%}",
            f"{row['cpu_seconds']:.1f}",
        ]
        lines.append(f"| {' | '.join(cells)} |")
    TABLE.write_text("\n".join(lines) + "\n")


def draw(summary: pl.DataFrame) -> None:
    """One panel per graph and engine; colour and marker tell the method, solid is observed, dashed is stated."""
    import matplotlib

    matplotlib.use("svg")
    import matplotlib.pyplot as plt

    # deterministic file: real text, no date, fixed ids
    plt.rcParams |= {"svg.fonttype": "none", "svg.hashsalt": "isthmus", "font.family": "sans-serif", "font.size": 10}
    looks = {"pivots": ("#0072B2", "o"), "paths": ("#D55E00", "^")}  # blue and vermilion: told apart by all eyes
    graphs = summary["graph"].unique(maintain_order=True).to_list()
    engines = summary["engine"].unique(maintain_order=True).to_list()
    figure, panels = plt.subplots(
        len(engines),
        len(graphs),
        figsize=(2.9 * len(graphs), 3.3 * len(engines) + 0.7),
        sharey=True,
        squeeze=False,
        layout="constrained",
    )
    for (row, engine), (column, graph) in itertools.product(enumerate(engines), enumerate(graphs)):
        panel = panels[row][column]
        for method, (colour, marker) in looks.items():
            drawn = summary.filter(graph=graph, engine=engine, method=method).sort("samples")
            if drawn.is_empty():
                continue
            x = drawn["samples"].to_numpy()
            panel.loglog(x, drawn["stated"].to_numpy(), "--", color=colour, lw=1.6, label=f"{method}, stated")
            panel.loglog(
                x, drawn["observed"].to_numpy(), "-", color=colour, marker=marker, lw=1.6, label=f"{method}, observed"
            )
        sizes = summary.filter(graph=graph, engine=engine)["samples"].unique().sort().to_list()
        panel.set_xticks(sizes, [f"{size:,}" for size in sizes])
        panel.tick_params(axis="x", which="minor", bottom=False, labelbottom=False)
        panel.set_title(graph if len(engines) == 1 else f"{graph}, {engine}", fontsize=10)
        panel.grid(True, which="major", color="#dddddd", lw=0.6)
        panel.spines[["top", "right"]].set_visible(False)
        if row == len(engines) - 1:
            panel.set_xlabel("samples")
        if column == 0:
            panel.set_ylabel("largest error, share of pairs")
    handles, labels = panels[0][0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower center", ncols=4 if len(graphs) > 2 else 2, frameon=False)
    figure.savefig(PICTURE, metadata={"Date": None})


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--graph", nargs="+", choices=READERS, default=list(READERS))
    parser.add_argument("--engine", default="networkit", help="as in the settings")
    parser.add_argument("--method", nargs="+", choices=METHODS, default=list(METHODS))
    parser.add_argument("--samples", nargs="+", type=int, default=[128, 512, 2048])
    parser.add_argument("--seeds", type=int, default=3, help="how many, from 1 on")
    parser.add_argument("--report", action="store_true", help="measure nothing")
    parser.add_argument("--one", action="store_true", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one:
        print(json.dumps(measure(asked.graph[0], asked.engine, asked.method[0], asked.samples[0], asked.seeds)))
        return
    if not asked.report:
        collect(asked)
    summary = summarise()
    write_table(summary)
    draw(summary)
    print(f"wrote {TABLE.name} and {PICTURE.name}")


if __name__ == "__main__":
    main()
