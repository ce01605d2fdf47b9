"""The sections of the settings, and what is possible together."""

from __future__ import annotations

import hashlib
import json
import re
from pathlib import Path
from typing import Any, Literal
from urllib.parse import urlsplit

from pydantic import Field, model_validator

from isthmus.settings.kinds import Log
from isthmus.settings.privacy import Privacy
from isthmus.settings.section import Section, files_of, key

__all__ = [
    "Distance",
    "Engine",
    "Gate",
    "Gates",
    "Graph",
    "Method",
    "Run",
    "Score",
    "Settings",
    "Signals",
    "Ties",
    "Window",
    "masked",
]

Distance = Literal["hops", "contacts", "amount"]
Method = Literal["auto", "exact", "pivots", "paths"]
Engine = Literal["numba", "networkit"]
Gate = Literal["stop", "warn", "off"]


class Window(Section):
    """Which days count, in UTC."""

    days: int = key(28, "length of the window; its last day is the night's as_of", "days", ge=1, le=3660)


class Ties(Section):
    """Which ties count, seen over the whole window. What is left out is counted by name."""

    least_contacts: int = key(1, "from one to the other in the window, each way when `mutual`", "contacts", ge=1)
    least_days: int = key(1, "with such a contact, each way when `mutual`", "days", ge=1)
    mutual: bool = key(False, "both must have contacted the other")


class Graph(Section):
    """How ties become a graph."""

    directed: bool = key(True, "a tie leads one way; false: either way, whoever started it")
    distance: Distance = key(
        "hops",
        "length of a tie: hops = 1; contacts or amount = 1 / that strength, so that strong ties are short",
    )


class Score(Section):
    """How betweenness is measured."""

    method: Method = key(
        "auto", "auto: exact if it fits `minutes`, else the sampling method that promises narrower intervals"
    )
    engine: Engine = key(
        "numba",
        "whose algorithms: numba = ours, an interval for each party; networkit = the library's, the reference",
    )
    confidence: float = key(0.95, "probability that the intervals of all parties hold at once", "share", gt=0.5, lt=1.0)
    samples: int = key(0, "how many to draw; 0: as many as the limits below allow", "samples", ge=0)
    half_width: float = key(0.0, "stop once every interval is at least this narrow; 0: off", "betweenness", ge=0, lt=1)
    top: int = key(100, "the K of the column `top`: who is surely among the first K", "parties", ge=0)
    minutes: float = key(30.0, "time for the whole night: sampling stops early enough to publish", "minutes", gt=0)
    max_hops: int = key(0, "paths of more arcs do not count; 0: no limit", "arcs", ge=0)
    seed: int = key(1, "same seed, same samples", ge=0, lt=2**63)


class Gates(Section):
    """Figures that are too odd to publish: `stop` publishes nothing (exit 65), `warn` tells, `off` is silent."""

    missing_days: Gate = key("stop", "a day of the window has no usable row")
    refused: Gate = key("stop", "more rows were refused than `refused_limit` allows")
    refused_limit: float = key(0.01, "largest share of refused rows", "share of the window's rows", ge=0, le=1)
    nulls: Gate = key("stop", "more rows lack a sender or receiver than `nulls_limit` allows")
    nulls_limit: float = key(0.001, "largest share of rows without a key", "share of the window's rows", ge=0, le=1)
    volume: Gate = key("stop", "the last day's rows are far from the median of the same weekdays before")
    volume_warn: float = key(1.25, "a warning from this factor on, either way", "times the median", gt=1)
    volume_stop: float = key(2.0, "a stop from this factor on, either way", "times the median", gt=1)
    redelivery: Gate = key("stop", "a day's rows changed by `redelivery_limit` or more since it was counted before")
    redelivery_limit: float = key(2.0, "from this factor on, either way", "times the rows before", gt=1)
    schema_drift: Gate = key("stop", "the log's columns changed since the night before; wider types only warn")
    component: Gate = key("warn", "the largest component's share moved further than `component_change`")
    component_change: float = key(0.1, "largest move since the night before", "share of parties", ge=0, le=1)
    overlap: Gate = key("warn", "fewer of the night before's first 100 are still there than `overlap_limit`")
    overlap_limit: float = key(0.5, "smallest share of them that must be", "share of 100 parties", ge=0, le=1)


class Run(Section):
    """Where and with what the night runs. Nothing here changes a result, as long as the memory is not short."""

    warehouse: str = key(
        "warehouse",
        "folder of the published tables, or s3://bucket/prefix, abfs://container/prefix, az://container/prefix; "
        "credentials come from the environment only",
        min_length=1,
    )
    work: str = key(
        "work",
        "local or shared folder of daily ties and memory-mapped snapshots, which readers never see",
        min_length=1,
    )
    workers: int = key(0, "0: in this process; N: that many local processes", "processes", ge=0, le=1024)
    threads: int = key(0, "per process; 0: all cores", "threads", ge=0, le=4096)
    scheduler: str = key("", "address of a running Dask scheduler; empty: none")
    finish_by: str = key(
        "",
        'local time by which the night is to be published, such as "05:45"; empty: only `score.minutes` counts',
        "HH:MM",
        pattern=r"^(([01][0-9]|2[0-3]):[0-5][0-9])?$",
    )
    late: Literal["restate", "freeze"] = key(
        "restate",
        "when rows of published nights' days change: compute those nights again, or leave them and record that",
    )
    memory: str = key(
        "16GiB",
        "planned against before the work starts, beside the program's own 0.4 GiB: a number and KiB, MiB, GiB or TiB",
        pattern=r"^[1-9][0-9]*(\.[0-9]+)? ?[KMGT]i?B$",
    )

    @property
    def elsewhere(self) -> bool:
        """Whether work is handed to other processes."""
        return bool(self.workers or self.scheduler)

    @property
    def memory_bytes(self) -> int:
        text = self.memory.replace(" ", "")
        power = "KMGT".index(text[-3] if text[-2] == "i" else text[-2]) + 1
        number = text.rstrip("BiKMGT")
        return int(float(number) * (1024 if text[-2] == "i" else 1000) ** power)


class Signals(Section):
    """What a run tells machines. Each is off while empty; none holds a party's key or a secret."""

    log: str = key("", 'file that gets one JSON object per line; "-": stderr, instead of the lines for people')
    prometheus: str = key(
        "",
        "file of the node exporter's textfile folder, ending in .prom; one per series (needs isthmus[prometheus])",
        pattern=r"^(.*\.prom)?$",
    )
    openlineage: str = key(
        "",
        "file that gets one OpenLineage event per line, or http(s) address of an endpoint (needs isthmus[openlineage])",
    )

    @model_validator(mode="after")
    def _without_secrets(self) -> Signals:
        if "://" in self.openlineage:
            told = urlsplit(self.openlineage)
            if told.scheme not in ("http", "https") or not told.hostname:
                raise ValueError(
                    f'signals.openlineage starts with "{told.scheme}://"; give a file or an http(s) address'
                )
            if "@" in told.netloc or told.query or told.fragment:
                raise ValueError(
                    "signals.openlineage holds more than scheme, host, port and path; credentials come from the "
                    "environment, as OPENLINEAGE_API_KEY"
                )
        return self


class Settings(Section):
    """One log's configuration."""

    series: str = key(
        ...,
        "names this run of nights, in small letters, digits, - and _; several series share one warehouse",
        pattern=r"^[a-z0-9][a-z0-9_-]{0,63}$",
    )
    log: Log
    window: Window = Field(default_factory=Window)
    ties: Ties = Field(default_factory=Ties)
    graph: Graph = Field(default_factory=Graph)
    score: Score = Field(default_factory=Score)
    gates: Gates = Field(default_factory=Gates)
    privacy: Privacy = Field(default_factory=Privacy)
    run: Run = Field(default_factory=Run)
    signals: Signals = Field(default_factory=Signals)
    definitions: dict[str, dict[str, Any]] = key(
        {},
        "further series from the same reading: [definitions.NAME.SECTION] holds what is otherwise in the series "
        "SERIES-NAME; of the sections window, ties, graph, score and gates",
    )

    @model_validator(mode="after")
    def _possible_together(self) -> Settings:
        if "://" in self.run.work:
            raise ValueError(f'run.work = "{masked(self.run.work)}": only folders are mapped into memory; name one')
        if fault := _fault_of(self.run.warehouse):
            raise ValueError(f"run.warehouse: {fault}")
        if self.graph.distance == "amount" and not self.log.has_amounts:
            raise ValueError('graph.distance = "amount" needs log.columns.amount; name the column')
        if self.score.max_hops and self.score.engine == "networkit":
            raise ValueError(
                f'score.max_hops = {self.score.max_hops} is not known to engine = "networkit"; set max_hops = 0'
            )
        if self.score.max_hops and self.graph.distance != "hops":
            raise ValueError(
                f"score.max_hops = {self.score.max_hops} counts arcs, so it cannot be combined with graph.distance = "
                f'"{self.graph.distance}"; set max_hops = 0 or distance = "hops"'
            )
        if self.graph.distance != "hops" and self.score.method == "paths" and self.score.engine == "numba":
            raise ValueError(
                f'score.method = "paths" of engine = "numba" searches by hops, so it cannot be combined with '
                f'graph.distance = "{self.graph.distance}"; set method = "pivots" or "auto"'
            )
        if self.run.workers and self.run.scheduler:
            raise ValueError(
                f'run.workers = {self.run.workers} and run.scheduler = "{self.run.scheduler}" exclude each other; '
                "keep one"
            )
        return self

    @property
    def work(self) -> Path:
        """The series' own folder below `run.work`."""
        return Path(self.run.work) / f"series={self.series}"

    @property
    def reading(self) -> Path:
        """The folder of rows and days as they were read, which all series of this log share in a work folder."""
        clear = self.clear_reading
        return clear.with_name(f"{clear.name}-pseudonyms") if self.privacy.pseudonyms else clear

    @property
    def clear_reading(self) -> Path:
        """The same, of keys in clear: a night with pseudonyms leaves nothing there."""
        return Path(self.run.work) / f"log={hashlib.sha256(self.log.path.encode()).hexdigest()[:16]}"

    @property
    def definition(self) -> str:
        """16 hex digits that name all settings that change results: not where it runs, not where files lie."""
        told = self.model_dump(mode="json", exclude={"run", "gates", "signals", "log", "definitions", "privacy"}) | {
            "log": _without_files(self.log),
            **self.privacy.meaning,
        }
        return hashlib.sha256(json.dumps(told, sort_keys=True).encode()).hexdigest()[:16]


def masked(text: str) -> str:
    """Without what stands before the @ of a URL, or in its query: it may be a secret."""
    return re.sub(r"[?#].*", "?***", re.sub(r"://[^/\"]*@", "://***@", text)) if "://" in text else text


def _fault_of(warehouse: str) -> str:
    """What is wrong with a warehouse's URL, without quoting what may be a secret; empty: nothing, or a folder."""
    scheme, mark, rest = warehouse.partition("://")
    if not mark:
        return ""
    if scheme not in ("s3", "abfs", "az"):
        return f"{scheme}:// is not known; use a folder, s3://, abfs:// or az://"
    if "@" in rest or "?" in rest or "#" in rest:
        return "a URL must not hold a name, password, key or query; credentials come from the environment of the driver"
    if not rest.strip("/"):
        return f"{scheme}:// names no bucket; write {scheme}://BUCKET/PREFIX"
    return ""


def _without_files(section: Section) -> dict[str, Any]:
    """The section, and those in it, without the keys that name files."""
    told = section.model_dump(mode="json", exclude=files_of(section))
    return told | {name: _without_files(value) for name, value in section if isinstance(value, Section)}
