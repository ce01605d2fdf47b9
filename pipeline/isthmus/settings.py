"""The whole configuration: typed, frozen, read from one TOML file per log.

Every key is declared once, here, with its default, unit and meaning. `configs/example.toml`, `isthmus check
--settings` and the error messages are all made from these models.

Relative paths are taken from the folder of the configuration file, because a scheduler's current folder is
nobody's intention.
"""

from __future__ import annotations

import difflib
import hashlib
import json
import os
import re
import tomllib
from pathlib import Path
from typing import Any, Literal
from urllib.parse import urlsplit

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator
from pydantic.fields import FieldInfo

from isthmus.errors import SettingsError, StoreError

__all__ = ["Columns", "Gates", "Graph", "Log", "Run", "Score", "Settings", "Signals", "Window", "load", "to_toml"]

Distance = Literal["hops", "contacts", "amount"]
Method = Literal["auto", "exact", "pivots", "paths"]
Engine = Literal["numba", "networkit"]
Gate = Literal["stop", "warn", "off"]


def _key(default: Any, meaning: str, unit: str = "", **limits: Any) -> Any:
    return Field(default=default, description=meaning, json_schema_extra={"unit": unit}, **limits)


class Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class Columns(Section):
    """Our name = the log's own column name."""

    sender: str = _key("sender", "who contacted or paid; any string or integer type", min_length=1)
    receiver: str = _key("receiver", "who was contacted or paid; any string or integer type", min_length=1)
    time: str = _key("time", "when: a timestamp of any unit or zone, or a date; without a zone it is UTC", min_length=1)
    amount: str = _key("", "what it was worth, 0 or more; empty: the log has no amounts")
    id: str = _key("", "identifies a row, so that one delivered twice counts once; empty: no such column")


class Log(Section):
    """Where the rows come from."""

    path: str = _key(
        ..., "folder or glob of Parquet files; a folder may hold date partitions such as dt=2026-11-30", min_length=1
    )
    kind: Literal["plain"] = _key("plain", "how the rows are to be understood")
    columns: Columns = Field(default_factory=Columns)


class Window(Section):
    """Which days count, in UTC."""

    days: int = _key(28, "length of the window; its last day is the night's as_of", "days", ge=1, le=3660)


class Graph(Section):
    """How ties become a graph."""

    directed: bool = _key(True, "a tie leads one way; false: either way, whoever started it")
    distance: Distance = _key(
        "hops",
        "length of a tie: hops = 1; contacts or amount = 1 / that strength, so that strong ties are short",
    )


class Score(Section):
    """How betweenness is measured."""

    method: Method = _key(
        "auto", "auto: exact if it fits `minutes`, else the sampling method that promises narrower intervals"
    )
    engine: Engine = _key(
        "numba",
        "whose algorithms: numba = ours, an interval for each party; networkit = the library's, the reference",
    )
    confidence: float = _key(
        0.95, "probability that the intervals of all parties hold at once", "share", gt=0.5, lt=1.0
    )
    samples: int = _key(0, "how many to draw; 0: as many as the limits below allow", "samples", ge=0)
    half_width: float = _key(0.0, "stop once every interval is at least this narrow; 0: off", "betweenness", ge=0, lt=1)
    top: int = _key(100, "the K of the column `top`: who is surely among the first K", "parties", ge=0)
    minutes: float = _key(30.0, "time for the whole night: sampling stops early enough to publish", "minutes", gt=0)
    max_hops: int = _key(0, "paths of more arcs do not count; 0: no limit", "arcs", ge=0)
    seed: int = _key(1, "same seed, same samples", ge=0, lt=2**63)


class Gates(Section):
    """Figures that are too odd to publish: `stop` publishes nothing (exit 65), `warn` tells, `off` is silent."""

    missing_days: Gate = _key("stop", "a day of the window has no usable row")
    refused: Gate = _key("stop", "more rows were refused than `refused_limit` allows")
    refused_limit: float = _key(0.01, "largest share of refused rows", "share of the window's rows", ge=0, le=1)
    nulls: Gate = _key("stop", "more rows lack a sender or receiver than `nulls_limit` allows")
    nulls_limit: float = _key(0.001, "largest share of rows without a key", "share of the window's rows", ge=0, le=1)
    volume: Gate = _key("stop", "the last day's rows are far from the median of the same weekdays before")
    volume_warn: float = _key(1.25, "a warning from this factor on, either way", "times the median", gt=1)
    volume_stop: float = _key(2.0, "a stop from this factor on, either way", "times the median", gt=1)
    redelivery: Gate = _key("stop", "a day's rows changed by `redelivery_limit` or more since it was counted before")
    redelivery_limit: float = _key(2.0, "from this factor on, either way", "times the rows before", gt=1)
    schema_drift: Gate = _key("stop", "the log's columns changed since the night before; wider types only warn")
    component: Gate = _key("warn", "the largest component's share moved further than `component_change`")
    component_change: float = _key(0.1, "largest move since the night before", "share of parties", ge=0, le=1)
    overlap: Gate = _key("warn", "fewer of the night before's first 100 are still there than `overlap_limit`")
    overlap_limit: float = _key(0.5, "smallest share of them that must be", "share of 100 parties", ge=0, le=1)


class Run(Section):
    """Where and with what the night runs. Nothing here changes a result, as long as the memory is not short."""

    warehouse: str = _key(
        "warehouse",
        "folder of the published tables, or s3://bucket/prefix, abfs://container/prefix, az://container/prefix; "
        "credentials come from the environment only",
        min_length=1,
    )
    work: str = _key(
        "work",
        "local or shared folder of daily ties and memory-mapped snapshots, which readers never see",
        min_length=1,
    )
    workers: int = _key(0, "0: in this process; N: that many local processes", "processes", ge=0, le=1024)
    threads: int = _key(0, "per process; 0: all cores", "threads", ge=0, le=4096)
    scheduler: str = _key("", "address of a running Dask scheduler; empty: none")
    finish_by: str = _key(
        "",
        'local time by which the night is to be published, such as "05:45"; empty: only `score.minutes` counts',
        "HH:MM",
        pattern=r"^(([01][0-9]|2[0-3]):[0-5][0-9])?$",
    )
    late: Literal["restate", "freeze"] = _key(
        "restate",
        "when rows of published nights' days change: compute those nights again, or leave them and record that",
    )
    memory: str = _key(
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

    log: str = _key("", 'file that gets one JSON object per line; "-": stderr, instead of the lines for people')
    prometheus: str = _key(
        "",
        "file of the node exporter's textfile folder, ending in .prom; one per series (needs isthmus[prometheus])",
        pattern=r"^(.*\.prom)?$",
    )
    openlineage: str = _key(
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

    series: str = _key(
        ...,
        "names this run of nights, in small letters, digits, - and _; several series share one warehouse",
        pattern=r"^[a-z0-9][a-z0-9_-]{0,63}$",
    )
    log: Log
    window: Window = Field(default_factory=Window)
    graph: Graph = Field(default_factory=Graph)
    score: Score = Field(default_factory=Score)
    gates: Gates = Field(default_factory=Gates)
    run: Run = Field(default_factory=Run)
    signals: Signals = Field(default_factory=Signals)

    @model_validator(mode="after")
    def _possible_together(self) -> Settings:
        columns = self.log.columns
        if columns.sender == columns.receiver:
            raise ValueError(
                f'log.columns.sender and log.columns.receiver are both "{columns.sender}"; name the column of each side'
            )
        if "://" in self.run.work:
            raise ValueError(f'run.work = "{_masked(self.run.work)}": only folders are mapped into memory; name one')
        if fault := _fault_of(self.run.warehouse):
            raise ValueError(f"run.warehouse: {fault}")
        if self.graph.distance == "amount" and not self.log.columns.amount:
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
    def definition(self) -> str:
        """16 hex digits that name everything that changes results: not where it runs, not where files lie."""
        told = self.model_dump(mode="json", exclude={"run": True, "gates": True, "signals": True, "log": {"path"}})
        return hashlib.sha256(json.dumps(told, sort_keys=True).encode()).hexdigest()[:16]


def load(path: str | Path) -> Settings:
    """Read a configuration file.

    Relative paths (of log, warehouse, work folder and signals) come back resolved against the file's folder.

    Raises SettingsError (unknown key, wrong type, impossible value, not TOML) and StoreError (no such file).
    """
    path = Path(path)
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise StoreError(f"cannot read settings {path}: {error.strerror}; give the path of a TOML file") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path} is not TOML: {error}; mend that line") from None
    try:
        settings = Settings.model_validate(raw)
    except ValidationError as error:
        raise SettingsError(_explain(path, error)) from None
    home = path.resolve().parent
    run = settings.run.model_copy(
        update={key: _resolve(home, getattr(settings.run, key)) for key in ("warehouse", "work")}
    )
    log = settings.log.model_copy(update={"path": _resolve(home, settings.log.path)})
    files = {key: value for key, value in settings.signals if value and (key, value) != ("log", "-")}
    signals = settings.signals.model_copy(update={key: _resolve(home, value) for key, value in files.items()})
    _apart(path, log.path, run)
    return settings.model_copy(update={"run": run, "log": log, "signals": signals})


def _apart(path: Path, log: str, run: Run) -> None:
    """Raise SettingsError when what is written would be read as a log, or both folders are one."""
    warehouse, work = Path(run.warehouse).resolve(), Path(run.work).resolve()  # a URL is below no folder
    if warehouse == work:
        raise SettingsError(
            f"settings {path}:\n  run.warehouse and run.work are both {warehouse}; readers must not see work"
        )
    for key, folder in (("run.warehouse", warehouse), ("run.work", work)):
        if folder.is_relative_to(Path(log).resolve()):
            raise SettingsError(
                f"settings {path}:\n  {key} = {folder} lies inside log.path = {log}, so it would be read "
                "as a log; name a folder outside"
            )


def _resolve(home: Path, text: str) -> str:
    return text if "://" in text else str(home / os.path.expanduser(text))


def _explain(path: Path, error: ValidationError) -> str:
    """One line per fault: the key's path, the value, and what would be right."""
    lines = []
    for fault in error.errors():
        where = [str(step) for step in fault["loc"]]
        key = ".".join(where) or "settings"
        if fault["type"] == "extra_forbidden":
            known = list(_section(where[:-1]).model_fields)
            near = difflib.get_close_matches(where[-1], known, n=1, cutoff=0.5)
            hint = f"did you mean {near[0]}?" if near else f"known here: {', '.join(known)}"
            lines.append(f"{key} = {_show(fault['input'])}: unknown key; {hint}")
        elif fault["type"] == "missing":
            lines.append(f"{key}: missing; {_meaning(where)}")
        elif fault["type"] == "model_type":
            lines.append(f"{key} = {_show(fault['input'])}: a section, not a value; write it as [{key}]")
        elif fault["type"] == "value_error":
            lines.append(str(fault["ctx"]["error"]))
        else:
            hint = _meaning(where)
            lines.append(f"{key} = {_show(fault['input'])}: {_lower(fault['msg'])}" + (f" ({hint})" if hint else ""))
    return f"settings {path}:\n" + "\n".join(f"  {line}" for line in lines)


def _section(steps: list[str]) -> type[Section]:
    section: type[Section] = Settings
    for step in steps:
        section = section.model_fields[step].annotation  # type: ignore[assignment]
    return section


def _meaning(steps: list[str]) -> str:
    try:
        field = _section(steps[:-1]).model_fields[steps[-1]]
        return field.description or (field.annotation.__doc__ or "").strip()
    except (KeyError, AttributeError, IndexError):
        return ""


def _lower(message: str) -> str:
    return message[:1].lower() + message[1:]


def _show(value: object) -> str:
    text = _masked(json.dumps(value, default=str, ensure_ascii=False))
    return text if len(text) <= 80 else text[:77] + "..."


def _masked(text: str) -> str:
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


def to_toml(settings: Settings) -> str:
    """The settings as a TOML file with every key, its unit, default and meaning as a comment."""
    lines: list[str] = []
    _write_section(settings, "", lines)
    return "\n".join(lines).strip() + "\n"


def _write_section(section: Section, name: str, lines: list[str]) -> None:
    if name:
        lines += ["", f"# {(type(section).__doc__ or '').strip()}", f"[{name}]"]
    inner: list[tuple[str, Section]] = []
    for key, field in type(section).model_fields.items():
        value = getattr(section, key)
        if isinstance(value, Section):
            inner.append((f"{name}.{key}" if name else key, value))
        else:
            lines.append(f"# {_comment(field)}")
            lines.append(f"{key} = {json.dumps(value, ensure_ascii=False)}")
    for path, value in inner:
        _write_section(value, path, lines)


def _comment(field: FieldInfo) -> str:
    extra = field.json_schema_extra
    unit = extra.get("unit") if isinstance(extra, dict) else ""
    default = "required" if field.is_required() else f"default {json.dumps(field.default, ensure_ascii=False)}"
    choices = getattr(field.annotation, "__args__", ())
    words = f"; one of {', '.join(choices)}" if choices and all(isinstance(c, str) for c in choices) else ""
    return f"{field.description} [{f'{unit}, ' if unit else ''}{default}{words}]"
