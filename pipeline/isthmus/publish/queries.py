"""SQL that answers the first questions on the published tables, for DuckDB and anything that reads hive folders."""

from __future__ import annotations

from isthmus.publish.night import Night

__all__ = ["top_brokers"]


def top_brokers(night: Night, first: int = 10) -> str:
    """The night's first parties by betweenness, with their intervals."""
    files = f"{night.warehouse}/scores/*/*/scores.parquet".replace("'", "''")
    return f"""\
SELECT rank, party, betweenness, lower, upper, rank_best, rank_worst, degree
FROM read_parquet('{files}', hive_partitioning = true)
WHERE series = '{night.series}' AND as_of = DATE '{night.as_of}'
ORDER BY rank
LIMIT {first}"""
