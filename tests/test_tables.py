"""What is published is what is declared, to every reader."""

from __future__ import annotations

from pathlib import Path

import duckdb
import polars as pl
import pytest

from isthmus.tables import LAYOUT, PARTITION, REFUSED, RUNS, SCORES, TABLES, TIES, conform
from nights import AS_OF, BETWEEN, DAYS, PAIRS, PARTIES, Site, rows

# The names that people script against; more may join, none may go.
CONTRACT = {
    "scores": """party betweenness lower upper std_error pairs rank rank_best rank_worst top degree degree_in degree_out
        contacts_in contacts_out amount_in amount_out component component_size first_seen last_seen run_id""",
    "ties": "sender receiver contacts amount days first_seen last_seen run_id",
    "refused": "file row reason run_id",
    "parties": "party kind side label fully_observed run_id",
    "runs": """run_id window_start definition version method reason samples seed confidence half_width_widest
        half_width_median stopped_because parties ties rows_read rows_used rows_refused rows_filtered rows_duplicate
        outcomes seconds peak_memory_bytes started_at finished_at""",
}
DUCKDB_TYPES = {
    pl.String: "VARCHAR",
    pl.Int64: "BIGINT",
    pl.Float64: "DOUBLE",
    pl.Boolean: "BOOLEAN",
    pl.Date: "DATE",
    pl.Datetime: "TIMESTAMP WITH TIME ZONE",
}
NESTED = {
    "outcomes": 'STRUCT(outcome VARCHAR, reason VARCHAR, "rows" BIGINT)[]',
    "seconds": 'STRUCT(stage VARCHAR, "seconds" DOUBLE)[]',
    "gates": 'STRUCT(gate VARCHAR, state VARCHAR, figure DOUBLE, "limit" DOUBLE)[]',
}


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A night with amounts, a party that only sends, a pair apart, and two refused rows."""
    site = Site(tmp_path_factory.mktemp("tables"), "[gates]\nrefused_limit = 0.5\n[score]\ntop = 2")
    day = rows(DAYS[3], [*PAIRS, ("gil@k8", "ada@k1"), ("hob@k9", "ivy@k0"), ("", "ada@k1"), ("ada@k1", "")])
    site.write(day, DAYS[3])
    assert site.score().code == 0
    return site


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A night of sampled paths without amounts."""
    site = Site(tmp_path_factory.mktemp("plain"))
    site.settings('[score]\nmethod = "paths"\nsamples = 200', columns="")
    assert site.score().code == 0
    return site


def folder(site: Site, table: str) -> str:
    return str(site.warehouse / table / "*" / "*" / f"{table}.parquet")


@pytest.mark.parametrize("table", TABLES)
def test_the_names_of_the_contract_are_declared(table: str) -> None:
    assert [name for name in CONTRACT[table].split() if name not in TABLES[table].schema] == []


@pytest.mark.parametrize("which", ["site", "plain"])
@pytest.mark.parametrize("table", TABLES)
def test_files_hold_the_declared_columns_types_and_order(
    request: pytest.FixtureRequest, which: str, table: str
) -> None:
    site: Site = request.getfixturevalue(which)
    declared = TABLES[table]
    frame = site.table(table)
    assert list(frame.schema.items()) == list(declared.schema.items())
    for column in declared.columns:
        assert column.nullable or frame[column.name].null_count() == 0
    if declared.sort:
        assert frame.equals(frame.sort(declared.sort))
    assert frame["run_id"].unique().to_list() in ([], site.table("runs")["run_id"].to_list())


@pytest.mark.parametrize("table", TABLES)
def test_duckdb_reads_types_and_partitions(site: Site, table: str) -> None:
    told = duckdb.sql(f"DESCRIBE SELECT * FROM read_parquet('{folder(site, table)}', hive_partitioning = true)")
    types = {name: kind for name, kind, *_ in told.fetchall()}
    columns = (*TABLES[table].columns, *PARTITION)
    expected = {column.name: NESTED.get(column.name) or DUCKDB_TYPES[type(column.type)] for column in columns}
    assert types == expected
    where = duckdb.sql(
        f"SELECT DISTINCT series, as_of FROM read_parquet('{folder(site, table)}', hive_partitioning = true)"
    )
    assert where.fetchall() == [("s", AS_OF)]


@pytest.mark.parametrize("table", TABLES)
def test_polars_reads_types_and_partitions(site: Site, table: str) -> None:
    frame = pl.read_parquet(
        folder(site, table), hive_partitioning=True, hive_schema={"series": pl.String, "as_of": pl.Date}
    )
    assert frame.schema == TABLES[table].schema | {column.name: column.type for column in PARTITION}
    assert frame.select("series", "as_of").unique().rows() == [("s", AS_OF)]


def test_scores_mean_what_they_say(site: Site) -> None:
    by_party = {row["party"]: row for row in site.table("scores").iter_rows(named=True)}
    assert sorted(by_party) == sorted([*PARTIES, "gil@k8", "hob@k9", "ivy@k0"])
    sender = by_party["gil@k8"]
    assert (sender["betweenness"], sender["pairs"], sender["std_error"]) == (0.0, 0.0, 0.0)
    assert (sender["degree"], sender["degree_in"], sender["degree_out"]) == (1, 0, 1)
    assert (sender["contacts_in"], sender["contacts_out"]) == (0, 1)
    assert (sender["amount_in"], sender["amount_out"]) == (0.0, 18.0)  # 0 is computed; null would be: not known
    receiver = by_party["ivy@k0"]
    assert (receiver["contacts_out"], receiver["amount_out"], receiver["amount_in"]) == (0, 0.0, 19.0)
    between = by_party[BETWEEN]
    # of the 9 · 8 ordered pairs of others: from ada, ben, cas or gil to dov, eli or fay
    assert between["pairs"] == pytest.approx(12)
    assert between["betweenness"] == between["lower"] == between["upper"] == pytest.approx(12 / 72)
    assert (between["contacts_in"], between["contacts_out"], between["amount_in"]) == (4, 4, 4 * 13.0)
    assert (between["component"], between["component_size"]) == (0, 8)
    assert (by_party["hob@k9"]["component"], by_party["hob@k9"]["component_size"]) == (1, 2)
    assert str(between["first_seen"]) == "2026-03-01 12:03:00+00:00"
    assert str(between["last_seen"]) == "2026-03-04 12:04:00+00:00"
    assert {row["top"] for row in by_party.values()} <= {"in", "out", "open"}


def test_ties_refused_and_runs_mean_what_they_say(site: Site) -> None:
    ties = {(row["sender"], row["receiver"]): row for row in site.table("ties").iter_rows(named=True)}
    assert set(ties) == {*PAIRS, ("gil@k8", "ada@k1"), ("hob@k9", "ivy@k0")}
    tie = ties[PAIRS[0]]
    assert (tie["contacts"], tie["amount"], tie["days"]) == (4, 40.0, 4)
    refused = site.table("refused").drop("run_id").rows()
    name = "dt=2026-03-04/part-0.parquet"
    assert refused == [(name, 10, "sender is empty"), (name, 11, "receiver is empty")]
    run = site.table("runs").row(0, named=True)
    assert run["rows_read"] == 36
    assert (run["rows_used"], run["rows_refused"], run["rows_filtered"], run["rows_duplicate"]) == (34, 2, 0, 0)
    assert (run["parties"], run["ties"], run["window_start"]) == (10, 10, DAYS[0])
    assert (run["method"], run["confidence"], run["half_width_widest"]) == ("exact", 1.0, 0.0)
    assert [part["stage"] for part in run["seconds"]] == ["survey", "read", "combine", "graph", "plan", "score"]
    assert run["started_at"] < run["finished_at"]


def test_without_amounts_they_are_null_and_without_exactness_errors_are_not_0(plain: Site) -> None:
    scores = plain.table("scores")
    assert scores["amount_in"].null_count() == scores["amount_out"].null_count() == scores.height
    assert plain.table("ties")["amount"].null_count() == len(PAIRS)
    assert (scores["upper"] > scores["betweenness"]).any()
    assert (scores["std_error"] > 0).any()
    run = plain.table("runs").row(0, named=True)
    assert (run["method"], run["samples"], run["confidence"]) == ("paths", 200, 0.95)
    assert run["half_width_widest"] > 0


def test_conform_orders_columns_and_rows(site: Site) -> None:
    scores = site.table("scores")
    mixed = scores.select(reversed(scores.columns)).reverse()
    assert conform(mixed, SCORES).equals(scores)


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda frame: frame.drop("rank"), "missing rank"),
        (lambda frame: frame.with_columns(extra=1), "unknown extra"),
        (lambda frame: frame.with_columns(pl.col("rank").cast(pl.UInt32)), "rank is UInt32, not Int64"),
        (lambda frame: frame.with_columns(pl.col("first_seen").dt.replace_time_zone(None)), "first_seen is Datetime"),
        (lambda frame: frame.with_columns(pl.lit(None, pl.Float64).alias("lower")), "lower holds nulls"),
        (lambda frame: frame.drop("top").rename({"pairs": "pear"}), "missing pairs; missing top; unknown pear"),
    ],
)
def test_conform_refuses(site: Site, change, told: str) -> None:
    with pytest.raises(AssertionError, match=f"table scores breaks its declaration: .*{told}"):
        conform(change(site.table("scores")), SCORES)


def test_nulls_pass_where_they_may_stand(plain: Site) -> None:
    assert conform(plain.table("ties"), TIES).height == len(PAIRS)
    assert conform(plain.table("refused"), REFUSED).height == 0


def test_every_column_has_a_meaning_and_the_marker_the_layout(site: Site) -> None:
    for table in TABLES.values():
        assert table.meaning
        assert all(column.meaning for column in table.columns)
        assert len(table.schema) == len(table.columns)
        assert not {column.name for column in PARTITION} & table.schema.keys()
    assert RUNS.schema["seconds"] == pl.List(pl.Struct({"stage": pl.String, "seconds": pl.Float64}))
    assert (site.warehouse / "layout.json").read_text() == f'{{"layout": {LAYOUT}}}\n'


def test_an_apostrophe_in_the_path_does_not_break_the_query(site: Site, tmp_path: Path) -> None:
    from isthmus.publish.night import Night
    from isthmus.publish.queries import top_brokers

    moved = tmp_path / "it's here"
    moved.symlink_to(site.warehouse)
    first = duckdb.sql(top_brokers(Night.of(moved, "s", AS_OF), first=3)).fetchall()
    assert [row[0] for row in first] == [1, 2, 3]
