"""Settings: what is wrong is told with its key, its value and what would be right; what is right means what it says."""

from __future__ import annotations

import itertools
import json
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from pydantic import BaseModel

from isthmus.errors import SettingsError, StoreError
from isthmus.settings import Run, Score, Settings, load, to_toml
from isthmus.settings.kinds import KINDS
from isthmus.settings.section import Section, files_of
from nights import isthmus

CONFIGS = Path(__file__).parent.parent / "configs"
EXAMPLE = CONFIGS / "example.toml"
LEAST = 'series = "s"\n[log]\npath = "log"\n'


def settings_of(folder: Path, text: str) -> Settings:
    (folder / "c.toml").write_text(text, encoding="utf-8")
    return load(folder / "c.toml")


WRONG = {
    # unknown keys, with the nearest known one
    "unknown key": (LEAST + "[score]\nsample = 5", ["score.sample = 5", "unknown key", "did you mean samples?"]),
    "unknown section": (LEAST + "[scores]\ntop = 5", ['scores = {"top": 5}', "did you mean score?"]),
    "far from any": (LEAST + "[window]\nzzz = 1", ["window.zzz = 1", "known here: days"]),
    "key of another section": (LEAST + "top = 3", ["log.top = 3", "unknown key", "known here: path, kind, columns"]),
    "deep": (LEAST + '[log.columns]\nsenders = "x"', ['log.columns.senders = "x"', "did you mean sender?"]),
    "key of another kind": (
        LEAST + '[log.columns]\nlist_id = "List-Id"',
        ["log.columns.list_id", 'belongs to log.kind = "email", but the kind of this log is "plain"'],
    ),
    "rules of another kind": (
        LEAST + "[log.rules]\nx = 1",
        ["log.rules = ", 'belongs to log.kind = "email" or "calls" or "payments", but the kind of this log is "plain"'],
    ),
    "rules that must be there": (
        LEAST + 'kind = "payments"',
        ["log.rules: missing; write [log.rules] with reporting_currency"],
    ),
    # types
    "text for a number": (LEAST + '[window]\ndays = "28"', ['window.days = "28"', "integer", "length of the window"]),
    "share for a count": (LEAST + "[score]\nsamples = 1.5", ["score.samples = 1.5", "integer", "how many to draw"]),
    "number for text": (LEAST + "[run]\nmemory = 16", ["run.memory = 16", "string", "GiB"]),
    "text for a switch": (LEAST + '[graph]\ndirected = "yes"', ['graph.directed = "yes"', "boolean"]),
    "number for a switch": (LEAST + "[graph]\ndirected = 1", ["graph.directed = 1", "boolean"]),
    "switch for a number": (LEAST + "[score]\nseed = true", ["score.seed = true", "integer"]),
    "list": (LEAST + "[score]\ntop = [1]", ["score.top = [1]", "integer"]),
    "date": ("series = 2026-11-30\n[log]\npath = 'x'", ['series = "2026-11-30"', "string"]),
    "no section": ('series = "s"\nlog = "here"', ['log = "here"', "[log]"]),
    # impossible values
    "no days": (LEAST + "[window]\ndays = 0", ["window.days = 0", "greater than or equal to 1"]),
    "too many days": (LEAST + "[window]\ndays = 4000", ["window.days = 4000", "less than or equal to 3660"]),
    "certainty": (LEAST + "[score]\nconfidence = 1.0", ["score.confidence = 1.0", "less than 1"]),
    "percent": (LEAST + "[score]\nconfidence = 95", ["score.confidence = 95", "less than 1"]),
    "a coin": (LEAST + "[score]\nconfidence = 0.5", ["score.confidence = 0.5", "greater than 0.5"]),
    "negative": (LEAST + "[score]\nsamples = -1", ["score.samples = -1", "greater than or equal to 0"]),
    "no time": (LEAST + "[score]\nminutes = 0", ["score.minutes = 0", "greater than 0"]),
    "for ever": (LEAST + "[score]\nminutes = inf", ["score.minutes = ", "finite"]),
    "not a number": (LEAST + "[score]\nhalf_width = nan", ["score.half_width = ", "finite"]),
    "huge seed": (LEAST + f"[score]\nseed = {2**63}", [f"score.seed = {2**63}", "less than"]),
    "no such method": (LEAST + '[score]\nmethod = "best"', ['score.method = "best"', "'exact'", "'paths'"]),
    "no such engine": (LEAST + '[score]\nengine = "x"', ['score.engine = "x"', "networkit"]),
    "no such distance": (LEAST + '[graph]\ndistance = "km"', ['graph.distance = "km"', "'contacts'"]),
    "no such gate": (LEAST + '[gates]\nrefused = "no"', ['gates.refused = "no"', "'stop'", "'warn'", "'off'"]),
    "no such kind": (LEAST + 'kind = "fax"', ['log.kind = "fax"', "one of plain, email, calls, payments"]),
    "memory": (LEAST + '[run]\nmemory = "lots"', ['run.memory = "lots"', "a number and KiB, MiB, GiB or TiB"]),
    "series": ('series = "Año 1"\n[log]\npath = "x"', ['series = "Año 1"', "small letters, digits, - and _"]),
    "series that climbs": ('series = "../up"\n[log]\npath = "x"', ['series = "../up"', "small letters"]),
    "empty path": ('series = "s"\n[log]\npath = ""', ['log.path = ""', "at least 1 character"]),
    "empty column": (LEAST + '[log.columns]\ntime = ""', ['log.columns.time = ""', "at least 1 character"]),
    # missing
    "nothing": ("", ["series: missing", "names this run of nights", "log: missing", "rows come from"]),
    "no path": ('series = "s"\n[log]', ["log.path: missing", "folder or glob of Parquet files"]),
    # together
    "no amounts": (LEAST + '[graph]\ndistance = "amount"', ['graph.distance = "amount"', "log.columns.amount", "name"]),
    "one column twice": (
        LEAST + '[log.columns]\nsender = "party"\nreceiver = "party"',
        ["log.columns.sender", "log.columns.receiver", '"party"', "name the column of each side"],
    ),
    "max_hops": (
        LEAST + '[score]\nengine = "networkit"\nmax_hops = 3',
        ["score.max_hops = 3", "networkit", "max_hops = 0"],
    ),
    "hops and lengths": (
        LEAST + '[graph]\ndistance = "contacts"\n[score]\nmax_hops = 3',
        ["score.max_hops = 3", "graph.distance", "max_hops = 0"],
    ),
    "two clusters": (
        LEAST + '[run]\nworkers = 2\nscheduler = "tcp://x:1"',
        ["run.workers = 2", 'run.scheduler = "tcp://x:1"', "keep one"],
    ),
    "far warehouse": (LEAST + '[run]\nwarehouse = "gs://b/w"', ["run.warehouse: gs:// is not known", "s3://"]),
    "no bucket": (LEAST + '[run]\nwarehouse = "s3:///"', ["run.warehouse: s3:// names no bucket", "BUCKET/PREFIX"]),
    "far work": (LEAST + '[run]\nwork = "s3://b/w"', ['run.work = "s3://b/w"', "only folders"]),
    # signals
    "no .prom": (LEAST + '[signals]\nprometheus = "m.txt"', ['signals.prometheus = "m.txt"', "ending in .prom"]),
    "far signal": (LEAST + '[signals]\nopenlineage = "ftp://h/x"', ['"ftp://"', "a file or an http(s) address"]),
    "no host": (LEAST + '[signals]\nopenlineage = "http://"', ['"http://"', "a file or an http(s) address"]),
    # not TOML
    "no TOML": ("series = \n", ["c.toml is not TOML", "line 1", "mend that line"]),
    "key twice": ('series = "s"\nseries = "t"\n', ["c.toml is not TOML", "line 2"]),
}


@pytest.mark.parametrize("name", WRONG)
def test_wrong_settings_are_told(tmp_path: Path, name: str) -> None:
    text, expected = WRONG[name]
    with pytest.raises(SettingsError) as caught:
        settings_of(tmp_path, text)
    for part in expected:
        assert part in str(caught.value)


@pytest.mark.parametrize("address", ["https://user:SECRET@h/x", "https://h/x?key=SECRET", "https://h/x#SECRET"])
def test_an_address_with_a_secret_is_refused_and_not_repeated(tmp_path: Path, address: str) -> None:
    with pytest.raises(SettingsError, match="credentials come from the environment") as caught:
        settings_of(tmp_path, LEAST + f'[signals]\nopenlineage = "{address}"')
    assert "SECRET" not in str(caught.value)


@pytest.mark.parametrize("command", ["score", "check"])
def test_the_command_leaves_with_78_and_one_line_per_fault(tmp_path: Path, command: str) -> None:
    (tmp_path / "c.toml").write_text(LEAST + "[score]\nsample = 5\ntop = -1\n[window]\ndays = 0\n")
    said = isthmus(command, tmp_path / "c.toml")
    assert said.code == 78
    assert said.out == ""
    lines = said.err.splitlines()
    assert lines[0] == f"isthmus: settings {tmp_path / 'c.toml'}:"
    assert sorted(line.split(" = ")[0] for line in lines[1:]) == ["  score.sample", "  score.top", "  window.days"]
    assert [path.name for path in tmp_path.iterdir()] == ["c.toml"]


def test_text_that_is_not_utf8(tmp_path: Path) -> None:
    (tmp_path / "c.toml").write_bytes('series = "é"'.encode("latin-1"))
    with pytest.raises(SettingsError, match="is not TOML"):
        load(tmp_path / "c.toml")


def test_a_long_value_is_cut(tmp_path: Path) -> None:
    with pytest.raises(SettingsError) as caught:
        settings_of(tmp_path, LEAST + f'[score]\nmethod = "{"x" * 5000}"')
    assert len(str(caught.value)) < 400


@pytest.mark.parametrize("path", ["nowhere.toml", "."])
def test_no_file(tmp_path: Path, path: str) -> None:
    with pytest.raises(StoreError, match=r"cannot read settings .*give the path of a TOML file"):
        load(tmp_path / path)


# --- what is right -------------------------------------------------------------------------------------------------


def test_defaults_are_the_contract(tmp_path: Path) -> None:
    told = settings_of(tmp_path, LEAST).model_dump()
    assert told.pop("gates") == {
        "missing_days": "stop",
        "refused": "stop",
        "refused_limit": 0.01,
        "nulls": "stop",
        "nulls_limit": 0.001,
        "volume": "stop",
        "volume_warn": 1.25,
        "volume_stop": 2.0,
        "redelivery": "stop",
        "redelivery_limit": 2.0,
        "schema_drift": "stop",
        "component": "warn",
        "component_change": 0.1,
        "overlap": "warn",
        "overlap_limit": 0.5,
    }
    assert told == {
        "series": "s",
        "log": {
            "path": str(tmp_path / "log"),
            "kind": "plain",
            "columns": {"sender": "sender", "receiver": "receiver", "time": "time", "amount": "", "id": ""},
        },
        "window": {"days": 28},
        "ties": {"least_contacts": 1, "least_days": 1, "mutual": False},
        "definitions": {},
        "graph": {"directed": True, "distance": "hops"},
        "score": {
            "method": "auto",
            "engine": "numba",
            "confidence": 0.95,
            "samples": 0,
            "half_width": 0.0,
            "top": 100,
            "minutes": 30.0,
            "max_hops": 0,
            "seed": 1,
        },
        "run": {
            "warehouse": str(tmp_path / "warehouse"),
            "work": str(tmp_path / "work"),
            "workers": 0,
            "threads": 0,
            "scheduler": "",
            "finish_by": "",
            "late": "restate",
            "memory": "16GiB",
        },
        "privacy": {"pseudonyms": False, "purpose": "", "secret_env": "", "secret_file": ""},
        "signals": {"log": "", "prometheus": "", "openlineage": ""},
    }


def test_settings_are_frozen(tmp_path: Path) -> None:
    settings = settings_of(tmp_path, LEAST)
    with pytest.raises(ValueError, match="frozen"):
        settings.score.seed = 2  # type: ignore[misc]


def test_relative_paths_are_of_the_files_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "configs").mkdir()
    (tmp_path / "configs" / "c.toml").write_text(
        'series = "s"\n[log]\npath = "../logs/dt=*/*.parquet"\n[run]\nwarehouse = "/abs/w"\nwork = "~/w"\n'
        '[signals]\nlog = "../s.jsonl"\nopenlineage = "https://h:1/in"\n'
    )
    monkeypatch.chdir(tmp_path / "elsewhere")
    monkeypatch.setenv("HOME", "/home/of")
    settings = load("../configs/c.toml")
    assert settings.log.path == f"{tmp_path}/configs/../logs/dt=*/*.parquet"
    assert settings.run.warehouse == "/abs/w"
    assert settings.run.work == "/home/of/w"
    assert settings.signals.log == f"{tmp_path}/configs/../s.jsonl"
    assert settings.signals.openlineage == "https://h:1/in"


def test_an_address_stays_an_address(tmp_path: Path) -> None:
    assert settings_of(tmp_path, 'series = "s"\n[log]\npath = "s3://bucket/log"').log.path == "s3://bucket/log"


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("16GiB", 16 * 2**30),
        ("16 GiB", 16 * 2**30),
        ("1.5GiB", 3 * 2**29),
        ("512MiB", 2**29),
        ("1KiB", 1024),
        ("2TiB", 2 * 2**40),
        ("1KB", 1000),
        ("16GB", 16 * 10**9),
        ("2.5 TB", 2_500_000_000_000),
    ],
)
def test_memory_is_read_as_meant(text: str, size: int) -> None:
    assert Run(memory=text).memory_bytes == size


@pytest.mark.parametrize("text", ["", "16", "GiB", "16 gib", "-1GiB", "0GiB", "1e3MiB", "16GiB ", "16PiB", "1,5GiB"])
def test_memory_that_is_no_size_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match="memory"):
        Run(memory=text)


PRIVATE = {"pseudonyms": True, "purpose": "p", "secret_env": "A"}
CHANGES: dict[str, dict[str, Any]] = {
    "privacy.pseudonyms": {"privacy": PRIVATE},
    "privacy.purpose": {"privacy": PRIVATE | {"purpose": "q"}},
    "series": {"series": "t"},
    "log.columns.sender": {"log": {"columns": {"sender": "x"}}},
    "log.columns.receiver": {"log": {"columns": {"receiver": "x"}}},
    "log.columns.time": {"log": {"columns": {"time": "x"}}},
    "log.columns.amount": {"log": {"columns": {"amount": "x"}}},
    "log.columns.id": {"log": {"columns": {"id": "x"}}},
    "window.days": {"window": {"days": 7}},
    "ties.least_contacts": {"ties": {"least_contacts": 3}},
    "ties.least_days": {"ties": {"least_days": 3}},
    "ties.mutual": {"ties": {"mutual": True}},
    "graph.directed": {"graph": {"directed": False}},
    "graph.distance": {"graph": {"distance": "contacts"}},
    "score.method": {"score": {"method": "paths"}},
    "score.engine": {"score": {"engine": "networkit"}},
    "score.max_hops": {"score": {"max_hops": 3}},
    "score.confidence": {"score": {"confidence": 0.9}},
    "score.samples": {"score": {"samples": 9}},
    "score.half_width": {"score": {"half_width": 0.1}},
    "score.top": {"score": {"top": 5}},
    "score.minutes": {"score": {"minutes": 1.0}},
    "score.seed": {"score": {"seed": 2}},
}
NO_CHANGES: dict[str, dict[str, Any]] = {
    "log.path": {"log": {"path": "/elsewhere"}},
    "gates.missing_days": {"gates": {"missing_days": "off"}},
    "gates.refused": {"gates": {"refused": "off"}},
    "gates.refused_limit": {"gates": {"refused_limit": 0.5}},
    "gates.nulls": {"gates": {"nulls": "warn"}},
    "gates.nulls_limit": {"gates": {"nulls_limit": 0.5}},
    "gates.volume": {"gates": {"volume": "off"}},
    "gates.volume_warn": {"gates": {"volume_warn": 1.5}},
    "gates.volume_stop": {"gates": {"volume_stop": 3.0}},
    "gates.redelivery": {"gates": {"redelivery": "off"}},
    "gates.redelivery_limit": {"gates": {"redelivery_limit": 5.0}},
    "gates.schema_drift": {"gates": {"schema_drift": "off"}},
    "gates.component": {"gates": {"component": "stop"}},
    "gates.component_change": {"gates": {"component_change": 0.5}},
    "gates.overlap": {"gates": {"overlap": "stop"}},
    "gates.overlap_limit": {"gates": {"overlap_limit": 0.9}},
    "definitions": {"definitions": {"x": {"window": {"days": 7}}}},
    "run.warehouse": {"run": {"warehouse": "/w"}},
    "run.work": {"run": {"work": "/k"}},
    "run.workers": {"run": {"workers": 2}},
    "run.threads": {"run": {"threads": 2}},
    "run.scheduler": {"run": {"scheduler": "tcp://x:1"}},
    "run.memory": {"run": {"memory": "1GiB"}},
    "run.finish_by": {"run": {"finish_by": "05:45"}},
    "run.late": {"run": {"late": "freeze"}},
    "privacy.secret_env": {"privacy": {"secret_env": "A"}},
    "privacy.secret_file": {"privacy": {"secret_file": "/p/key"}},
    "signals.log": {"signals": {"log": "-"}},
    "signals.prometheus": {"signals": {"prometheus": "/p/s.prom"}},
    "signals.openlineage": {"signals": {"openlineage": "http://h:1"}},
}
ONLY_ONE_CHOICE = {"log.kind"}


def with_change(change: dict[str, Any]) -> Settings:
    told: dict[str, Any] = {"series": "s", "log": {"path": "log"}}
    for key, value in change.items():
        told[key] = told.get(key, {}) | value if isinstance(value, dict) else value
    return Settings.model_validate(told)


def keys_of(model: type[BaseModel], above: str = "", log: str = "plain") -> set[str]:
    keys: set[str] = set()
    for name, field in model.model_fields.items():
        kind = KINDS[log] if above + name == "log" else field.annotation
        inner = isinstance(kind, type) and issubclass(kind, BaseModel)
        keys |= keys_of(kind, f"{above}{name}.") if inner else {above + name}  # type: ignore[arg-type]
    return keys


def test_every_key_is_in_one_of_the_lists_below() -> None:
    assert CHANGES.keys() | NO_CHANGES.keys() | ONLY_ONE_CHOICE == keys_of(Settings)


@pytest.mark.parametrize("key", CHANGES)
def test_definition_changes_with_what_changes_results(key: str) -> None:
    assert with_change(CHANGES[key]).definition != with_change({}).definition


@pytest.mark.parametrize("key", NO_CHANGES)
def test_definition_stays_with_where_and_how_it_runs(key: str) -> None:
    assert with_change(NO_CHANGES[key]).definition == with_change({}).definition


def changed_by_one_key(section: Section) -> Iterator[tuple[str, bool, Section]]:
    """Each key, whether it names a file, and the section with another value there; nothing is validated."""
    for name, value in section:
        if isinstance(value, Section):
            for key, file, inner in changed_by_one_key(value):
                yield f"{name}.{key}", file, section.model_copy(update={name: inner})
        else:
            other = [*value, "x"] if isinstance(value, list) else value + "x" if isinstance(value, str) else 1 - value
            yield name, name in files_of(section), section.model_copy(update={name: other})


@pytest.mark.filterwarnings("ignore:Pydantic serializer")
@pytest.mark.parametrize("kind", KINDS)
def test_definition_of_every_kind_changes_with_its_rules_and_not_with_files(kind: str) -> None:
    settings = load(CONFIGS / f"{'example' if kind == 'plain' else kind}.toml")
    changed = list(changed_by_one_key(settings.log))
    assert {file for _, file, _ in changed} == {True, False}
    for key, file, other in changed:
        same = settings.model_copy(update={"log": other}).definition == settings.definition
        assert same == file, key


def test_definition_is_16_hex_digits_and_stable() -> None:
    """Written down, because tables of many nights are compared by it: change it knowingly."""
    assert with_change({}).definition == "fae464e311fd1ab1"


# --- the example ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["example", "email", "calls", "payments"])
def test_examples_equal_the_models(name: str) -> None:
    """Each key with its comment, unit and default. After a change of the models, write the file again with to_toml."""
    text = (CONFIGS / f"{name}.toml").read_text(encoding="utf-8")
    assert to_toml(Settings.model_validate(tomllib.loads(text))) == text


def test_example_loads_and_shows_every_key() -> None:
    settings = load(EXAMPLE)
    assert settings.series == "payments"
    assert settings.score == Score()
    raw = tomllib.loads(EXAMPLE.read_text(encoding="utf-8"))
    shown = {key for key in keys_of(Settings) if _holds(raw, key.split("."))}
    assert shown == keys_of(Settings)


def _holds(raw: dict[str, Any], steps: list[str]) -> bool:
    for step in steps:
        if step not in raw:
            return False
        raw = raw[step]
    return True


def test_every_key_has_a_meaning() -> None:
    lines = to_toml(with_change({})).splitlines()
    for before, line in itertools.pairwise(lines):
        if " = " in line and not line.startswith("#"):
            assert before.startswith("# ")
            assert "[" in before
            assert len(before) > 20


def test_check_prints_the_settings_in_force(tmp_path: Path) -> None:
    (tmp_path / "c.toml").write_text(LEAST + '[log.columns]\nsender = "who \\"é\\" \\\\"\n[score]\ntop = 7\n')
    said = isthmus("check", tmp_path / "c.toml", "--settings")
    assert said.code == 0
    assert said.err == ""
    assert Settings.model_validate(tomllib.loads(said.out)) == load(tmp_path / "c.toml")
    said = isthmus("check", tmp_path / "c.toml", "--settings", "--json")
    assert json.loads(said.out) == load(tmp_path / "c.toml").model_dump()


@pytest.mark.parametrize(
    ("run", "words"),
    [
        ('warehouse = "log/tables"', "run.warehouse"),
        ('work = "log"', "run.work"),
        ('warehouse = "x"\nwork = "x"', "run.warehouse and run.work are both"),
    ],
)
def test_what_is_written_lies_apart_from_the_log(tmp_path: Path, run: str, words: str) -> None:
    config = tmp_path / "c.toml"
    config.write_text(f'series = "s"\n[log]\npath = "log"\n[run]\n{run}\n')
    with pytest.raises(SettingsError, match=words):
        load(config)
