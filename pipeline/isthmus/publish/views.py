"""`WAREHOUSE/isthmus.duckdb`: a small database of views over the published tables, and their data dictionary.

It holds no rows of any night, so it need not change with one: it is made anew, and renamed over the old one, when it is
missing or its text would be another. Who has the old one open keeps it. Views name the folder absolutely, so that they
work from wherever DuckDB was started; in a warehouse that was moved or is mounted elsewhere, say
`SET VARIABLE warehouse = '/its/folder/now'` first. (A path relative to the database file cannot be said in SQL.)
"""

from __future__ import annotations

import os
import shutil
import tempfile
from contextlib import suppress
from pathlib import Path

import duckdb

from isthmus.errors import StoreError
from isthmus.store import Folder, Place, forget, put
from isthmus.tables import PARTITION, TABLES, Table

__all__ = ["FILE", "refresh"]

FILE = "isthmus.duckdb"
_FORMAT = "v1.2.0"  # of the file: DuckDB from 1.2 on opens it
_FIRST = 100

# One run a series. A night that is being published for the first time has no row yet, so it is not the latest.
_NIGHTS_LATEST = "SELECT series, max(as_of) AS as_of, arg_max(run_id, as_of) AS run_id FROM runs_all GROUP BY series"
_TOP_BROKERS = f"""\
SELECT series, as_of, rank, party, kind, betweenness, lower, upper, rank_best, rank_worst, "top", degree, run_id
FROM scores_latest LEFT JOIN parties_latest USING (series, as_of, run_id, party)
WHERE rank <= {_FIRST} ORDER BY series, rank"""


def refresh(warehouse: Place) -> str:
    """Have the database be there and say what it should; returns why that could not be done, empty when all is well.

    Only in a folder: in an object store DuckDB would have to be told how to get in first.
    """
    if not isinstance(warehouse, Folder):
        return ""
    path, statements = warehouse.path / FILE, _statements(os.path.abspath(warehouse.path))
    try:
        if _known(path) != statements:
            with tempfile.TemporaryDirectory() as folder:  # DuckDB wants locks, which shares do not always have
                _make(made := Path(folder) / FILE, statements)
                forget(path.with_name(f"{FILE}.wal"))  # of somebody who was killed while writing: it fits no other file
                put(path, lambda target: shutil.copyfile(made, target))
    except (duckdb.Error, StoreError, OSError) as error:
        return f"{path}, the views for DuckDB, could not be written ({type(error).__name__}); the tables are whole"
    return ""


def _known(path: Path) -> list[str]:
    """What the database was made by; nothing when it is missing, damaged, or open to somebody who writes to it."""
    with suppress(duckdb.Error):
        if path.exists():
            with duckdb.connect(path, read_only=True) as database:
                return [
                    text for (text,) in database.execute("SELECT statement FROM made_by ORDER BY number").fetchall()
                ]
    return []


def _make(path: Path, statements: list[str]) -> None:
    with duckdb.connect() as session:
        session.execute(f"ATTACH '{_quoted(path)}' AS made (STORAGE_VERSION '{_FORMAT}')")
        session.execute("USE made")
        for statement in statements:
            session.execute(statement)
        session.execute("CREATE TABLE made_by (number INTEGER, statement VARCHAR)")
        session.executemany("INSERT INTO made_by VALUES (?, ?)", [*enumerate(statements)])
        session.execute("USE memory")
        session.execute("DETACH made")


def _statements(folder: str) -> list[str]:
    views = [
        *(_all(table, folder) for table in TABLES.values()),
        _view("nights_latest", _NIGHTS_LATEST, "the latest night of each series and its run"),
        *(_latest(table) for table in TABLES.values()),
        _view("top_brokers", _TOP_BROKERS, f"the first {_FIRST} parties of the latest night of each series"),
    ]
    return [*(statement for view in views for statement in view), *_dictionary()]


def _view(name: str, query: str, meaning: str) -> list[str]:
    return [f"CREATE VIEW {name} AS {query}", f"COMMENT ON VIEW {name} IS '{_quoted(meaning)}'"]


def _all(table: Table, folder: str) -> list[str]:
    query = (
        f"SELECT * FROM read_parquet(coalesce(getvariable('warehouse'), '{_quoted(folder)}') || "
        f"'/{table.name}/*/*/{table.name}.parquet', hive_partitioning = true, "
        "hive_types = {series: VARCHAR, as_of: DATE}, union_by_name = true)"  # older nights may lack a column
    )
    return _view(f"{table.name}_all", query, f"every night: {table.meaning}")


def _latest(table: Table) -> list[str]:
    query = f"SELECT night.* FROM {table.name}_all AS night JOIN nights_latest USING (series, as_of, run_id)"
    return _view(f"{table.name}_latest", query, f"the latest night of each series: {table.meaning}")


def _dictionary() -> list[str]:
    rows = [
        f"({told}, {column.nullable})"
        for table in TABLES.values()
        for column in (*PARTITION, *table.columns)
        for told in [_texts(table.name, column.name, column.kind, column.unit, column.meaning)]
    ]
    columns = '"table" VARCHAR, "column" VARCHAR, type VARCHAR, unit VARCHAR, meaning VARCHAR, nullable BOOLEAN'
    return [
        f"CREATE TABLE dictionary ({columns})",
        f"INSERT INTO dictionary VALUES {', '.join(rows)}",
        "COMMENT ON TABLE dictionary IS 'every column of every published table, as isthmus columns prints it'",
    ]


def _texts(*texts: str) -> str:
    return ", ".join(f"'{_quoted(text)}'" for text in texts)


def _quoted(text: object) -> str:
    return str(text).replace("'", "''")
