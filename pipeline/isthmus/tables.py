"""Every published table: its columns, types, units and meaning. The data dictionary and the writer's checks read this.

`series` and `as_of` are the folders' names (hive partitions), so they are columns for every reader and stand in no
file. A null means not computed or not defined; 0 is a computed zero.
"""

from __future__ import annotations

from dataclasses import dataclass

import polars as pl

__all__ = ["CAUTION", "COMPANIONS", "LAYOUT", "PARTITION", "TABLES", "Column", "Table", "conform"]

# The version of the warehouse folder's layout. Raise it when a reader of the old layout would be misled.
LAYOUT = 1

# Said wherever scores are shown to people.
CAUTION = (
    "A score says who lies between others in this log. It is not a verdict on anyone: a person decides, and local law\n"
    "and licensed practice rule."
)

_KINDS: dict[type, str] = {
    pl.String: "string",
    pl.Int64: "int64",
    pl.Float64: "float64",
    pl.Boolean: "boolean",
    pl.Date: "date",
    pl.Datetime: "timestamp",
}
MOMENT = pl.Datetime("us", "UTC")


@dataclass(frozen=True)
class Column:
    """One column. `nullable` says whether a null may stand in it."""

    name: str
    type: pl.DataType
    meaning: str
    unit: str = ""
    nullable: bool = False

    @property
    def kind(self) -> str:
        """The type in a word that no library owns."""
        return _KINDS.get(type(self.type), "list")


@dataclass(frozen=True)
class Table:
    """One table: one file per night, rows in the order of `sort`."""

    name: str
    meaning: str
    sort: tuple[str, ...]
    columns: tuple[Column, ...]

    @property
    def schema(self) -> dict[str, pl.DataType]:
        return {column.name: column.type for column in self.columns}


def _text(name: str, meaning: str, *, nullable: bool = False) -> Column:
    return Column(name, pl.String(), meaning, nullable=nullable)


def _count(name: str, meaning: str, unit: str, *, nullable: bool = False) -> Column:
    return Column(name, pl.Int64(), meaning, unit, nullable)


def _number(name: str, meaning: str, unit: str = "", *, nullable: bool = False) -> Column:
    return Column(name, pl.Float64(), meaning, unit, nullable)


def _moment(name: str, meaning: str) -> Column:
    return Column(name, MOMENT, meaning, "UTC, microseconds")


RUN_ID = _text("run_id", "joins to runs; the same for the same night, settings, version and input")

PARTITION = (
    _text("series", "which series of nights (partition key)"),
    Column("as_of", pl.Date(), "last day of the window (partition key)"),
)

SCORES = Table(
    "scores",
    "one row per party of the window: its betweenness, how sure it is, and its plain counts",
    ("rank",),
    (
        _text("party", "the key after normalising"),
        _number("betweenness", "share of the other parties' pairs whose shortest paths pass through this one", "0..1"),
        _number(
            "lower", "lower end of the interval that holds for all parties at once, at the run's confidence", "0..1"
        ),
        _number("upper", "upper end of that interval; both ends equal betweenness when the method is exact", "0..1"),
        _number("std_error", "standard error of the estimate; 0 when exact", "betweenness", nullable=True),
        _number("pairs", "the same measure unnormalised", "pairs, unordered when undirected"),
        _count("rank", "1 = highest; equal scores in the order of party", "rank"),
        _count("rank_best", "best rank that the intervals leave possible", "rank"),
        _count("rank_worst", "worst rank that the intervals leave possible", "rank"),
        _text("top", "in: surely among the first K; out: surely not; open: not settled"),
        _count("degree", "distinct counterparts", "parties"),
        _count("degree_in", "distinct senders to this party", "parties"),
        _count("degree_out", "distinct receivers from this party", "parties"),
        _count("contacts_in", "rows received", "log rows"),
        _count("contacts_out", "rows sent", "log rows"),
        _number("amount_in", "sum received; null when the log has no amounts", "the log's unit", nullable=True),
        _number("amount_out", "sum sent; null when the log has no amounts", "the log's unit", nullable=True),
        _count("component", "weakly connected component, 0 = largest", "number"),
        _count("component_size", "parties in that component", "parties"),
        _moment("first_seen", "first row of this party in the window"),
        _moment("last_seen", "last row of this party in the window"),
        RUN_ID,
    ),
)

TIES = Table(
    "ties",
    "one row per ordered pair that had contact in the window",
    ("sender", "receiver"),
    (
        _text("sender", "the key after normalising"),
        _text("receiver", "the key after normalising"),
        _count("contacts", "rows from sender to receiver", "log rows"),
        _number("amount", "their sum; null when the log has no amounts", "the log's unit", nullable=True),
        _count("days", "days with at least one row", "days"),
        _moment("first_seen", "first row in the window"),
        _moment("last_seen", "last row in the window"),
        RUN_ID,
    ),
)

PARTIES = Table(
    "parties",
    "one row per party of the window: what kind of party it is, as the log and the user's tables tell",
    ("party",),
    (
        _text("party", "the key after normalising"),
        _text("kind", "party (nothing is known), person, account, role, short code, machine, bulk sender or hub"),
        _text("side", "internal or external to the organisation; unknown where nothing tells"),
        _text("label", "what a table of the user's calls it, such as payroll; null: nothing", nullable=True),
        Column(
            "fully_observed",
            pl.Boolean(),
            "whether the log can hold all its contacts; false of external parties, whose betweenness reads low; null "
            "where nothing tells",
            nullable=True,
        ),
        RUN_ID,
    ),
)

COMPANIONS = Table(
    "companions",
    "one row per party of the window: other readings of its ties, to tell a broker from the merely busy",
    ("party",),
    (
        _text("party", "the key after normalising"),
        _count("strength_in", "contacts received from others", "log rows"),
        _count("strength_out", "contacts sent to others", "log rows"),
        _number(
            "reciprocity", "share of counterparts that both send and receive; null without any", "0..1", nullable=True
        ),
        _number(
            "closeness",
            "harmonic closeness, how fast it reaches others: mean over the other parties of 1/hops from this one along "
            "the ties' direction, 0 where no path leads",
            "0..1",
        ),
        _number("closeness_lower", "lower end of the interval that holds for all parties' closeness at once", "0..1"),
        _number("closeness_upper", "upper end of that interval; both ends equal closeness where it is exact", "0..1"),
        _number(
            "eigenvector",
            "eigenvector centrality, contact either way, as a share of the highest; null when it did not settle",
            "0..1",
            nullable=True,
        ),
        _number("pagerank", "PageRank along the ties' direction, damping 0.85; all add up to 1", "0..1"),
        _count("core_number", "largest k such that it is among parties with k counterparts each among them", "parties"),
        Column("articulation_point", pl.Boolean(), "whether its component falls apart without it"),
        _number(
            "constraint",
            "Burt's constraint, contacts both ways together: how far its contacts are one another's too; low = spans "
            "holes; null without contacts",
            nullable=True,
        ),
        _number(
            "effective_size",
            "Burt's effective size: counterparts less those that are redundant; null without contacts",
            "parties",
            nullable=True,
        ),
        _number("betweenness_percentile", "share of parties with less betweenness, equals counted half", "0..100"),
        _number("degree_percentile", "share of parties with fewer counterparts, equals counted half", "0..100"),
        _number(
            "residual",
            "log(1 + pairs) above its least-squares line on log(degree): betweenness that being busy does not explain; "
            "null without counterparts",
            "natural log",
            nullable=True,
        ),
        _number(
            "residual_z",
            "residual over the spread usual at that degree, so that parties of few contacts do not fill the top; null "
            "without counterparts",
            "standard deviations",
            nullable=True,
        ),
        RUN_ID,
    ),
)

REFUSED = Table(
    "refused",
    "one row per log row that could not be used, with the place to look; it never repeats the row's content",
    ("file", "row"),
    (
        _text("file", "path below log.path"),
        _count("row", "position in that file, 0 = first", "rows"),
        _text("reason", "what is wrong with it"),
        RUN_ID,
    ),
)

RUNS = Table(
    "runs",
    "one row per night: everything needed to trust or repeat it",
    (),
    (
        RUN_ID,
        Column("window_start", pl.Date(), "first day of the window"),
        _text("definition", "hash of the settings that change results"),
        _text("key_id", "names the secret that the pseudonyms are made with; null: keys as they are", nullable=True),
        _count("revision", "1 = first published; one more each time the night was replaced by other content", ""),
        _text("version", "of isthmus"),
        _text("method", "exact, pivots or paths"),
        _text("engine", "whose algorithms"),
        _text("reason", "why this method"),
        _count("samples", "sources (pivots), pairs (paths) or parties (exact)", "samples"),
        _count("seed", "of the sampling", ""),
        _number("confidence", "that all intervals hold at once; 1 when exact", "share"),
        _number("half_width_widest", "half the length of the widest interval", "betweenness"),
        _number("half_width_median", "half the length of the median interval", "betweenness"),
        _text("stopped_because", "what ended the sampling"),
        _count("parties", "in the graph", "parties"),
        _count("ties", "in the graph: ordered pairs when directed, unordered when not", "ties"),
        _count(
            "rows_read",
            "= rows_used + rows_refused + rows_filtered + rows_duplicate; a row that names n receivers counts n times",
            "log rows",
        ),
        _count("rows_used", "counted in the ties", "log rows"),
        _count("rows_refused", "could not be understood; see the table refused", "log rows"),
        _count("rows_filtered", "left out on purpose, see outcomes; rows of days outside the window too", "log rows"),
        _count("rows_duplicate", "a row with the same id was counted already", "log rows"),
        Column(
            "outcomes",
            pl.List(pl.Struct({"outcome": pl.String, "reason": pl.String, "rows": pl.Int64})),
            "every filter, refusal and duplicate by name; the rows add up to rows_read",
            "log rows",
        ),
        _text("warnings", "what a person should know of this night; empty when nothing"),
        Column(
            "gates",
            pl.List(pl.Struct({"gate": pl.String, "state": pl.String, "figure": pl.Float64, "limit": pl.Float64})),
            "every gate: its state (ok, warn, accepted, off, nothing to compare with), its figure, its limit",
        ),
        _number("predicted_seconds", "what the plan expected scoring to take", "seconds", nullable=True),
        _number("predicted_bytes", "what the plan expected scoring to need", "bytes", nullable=True),
        Column(
            "seconds",
            pl.List(pl.Struct({"stage": pl.String, "seconds": pl.Float64})),
            "wall time of each stage, in order",
            "seconds",
        ),
        _count("peak_memory_bytes", "largest resident memory of the run's own process", "bytes"),
        _moment("started_at", "when the run began"),
        _moment("finished_at", "when the tables were ready to publish"),
    ),
)
TABLES = {table.name: table for table in (SCORES, TIES, PARTIES, REFUSED, RUNS)}


def conform(frame: pl.DataFrame, table: Table) -> pl.DataFrame:
    """The frame with exactly the table's columns, types and row order.

    Raises AssertionError when a column is missing, unknown or of another type, or holds a null it may not: that is
    a fault of this program, never of the log.
    """
    problems = [f"missing {name}" for name in table.schema if name not in frame.columns]
    problems += [f"unknown {name}" for name in frame.columns if name not in table.schema]
    for column in table.columns:
        if column.name in frame.columns:
            found = frame.schema[column.name]
            if found != column.type:
                problems.append(f"{column.name} is {found}, not {column.type}")
            if not column.nullable and frame[column.name].null_count():
                problems.append(f"{column.name} holds nulls")
    if problems:
        raise AssertionError(f"table {table.name} breaks its declaration: {'; '.join(problems)}")
    ordered = frame.select(list(table.schema))
    return ordered.sort(table.sort) if table.sort else ordered
