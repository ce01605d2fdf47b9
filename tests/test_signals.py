"""What a run tells machines: well formed, complete, never in the way of the night, and never a party's key."""

from __future__ import annotations

import io
import json
import logging
import os
import re
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
from prometheus_client.parser import text_string_to_metric_families

from isthmus import nightly
from isthmus.errors import TryAgain
from isthmus.signals import metrics
from isthmus.watch import Watch
from nights import AS_OF, DAYS, Said, Site, isthmus, rows

ENGINE = '[score]\nengine = "networkit"\n'  # nothing to compile
SIGNALS = '[signals]\nlog = "signals/log.jsonl"\nprometheus = "signals/s.prom"\nopenlineage = "signals/lineage.jsonl"\n'
STAGES = ["survey", "read", "combine", "graph", "plan", "score", "publish"]


@pytest.fixture(autouse=True)
def scrubbed(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in [name for name in os.environ if name.startswith("OPENLINEAGE")]:
        monkeypatch.delenv(name)
    monkeypatch.delenv("ISTHMUS_SHOW_INTERNAL", raising=False)


@pytest.fixture
def site(tmp_path: Path) -> Site:
    return Site(tmp_path, ENGINE + SIGNALS)


def lines(site: Site) -> list[dict[str, Any]]:
    return [json.loads(line) for line in (site.root / "signals" / "log.jsonl").read_text().splitlines()]


def events(site: Site) -> list[dict[str, Any]]:
    return [json.loads(line) for line in (site.root / "signals" / "lineage.jsonl").read_text().splitlines()]


def samples(site: Site) -> dict[tuple[str, ...], float]:
    """(metric, label values in the order of their names) -> value."""
    text = (site.root / "signals" / "s.prom").read_text()
    return {
        (s.name, *(s.labels[label] for label in sorted(s.labels))): s.value
        for family in text_string_to_metric_families(text)
        for s in family.samples
    }


def fail_with(monkeypatch: pytest.MonkeyPatch, error: BaseException) -> None:
    def fail(*_: object, **__: object) -> None:
        raise error

    monkeypatch.setattr(nightly, "measure", fail)


# --- log lines -----------------------------------------------------------------------------------------------------


def test_a_published_night_in_lines(site: Site) -> None:
    assert site.score().code == 0
    told = lines(site)
    assert [line["event"] for line in told if not line["event"].startswith("stage")] == [
        *("run_started", *["gate"] * 8, "published")
    ]
    for event in ("stage_started", "stage_ended"):
        assert [line["stage"] for line in told if line["event"] == event] == STAGES
    assert all(re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{3}Z", line["time"]) for line in told)
    assert all((line["level"], line["series"], line["as_of"]) == ("info", "s", str(AS_OF)) for line in told)
    run_id = site.table("runs")["run_id"].item()
    assert [line.get("run_id") for line in told[-5:]] == [run_id] * 5  # once known; publishing, and the end
    assert "run_id" not in told[0]
    end = told[-1]
    assert (end["parties"], end["rows_used"], end["method"], end["exit_code"]) == (7, 32, "exact", 0)
    assert all(0 <= line["seconds"] < 60 for line in told if line["event"] == "stage_ended")
    assert site.score().code == 0
    assert len(lines(site)) == 2 * len(told)  # appended


def test_minus_puts_nothing_but_json_on_stderr(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    site.settings(ENGINE + '[gates]\nmissing_days = "warn"\n[signals]\nlog = "-"')
    site.file(DAYS[1]).unlink()
    said = site.score("--json")
    assert said.code == 0
    assert json.loads(said.out)["parties"] == 7
    told = [json.loads(line) for line in said.err.splitlines()]
    assert [(line["level"], line["event"]) for line in told if line["level"] != "info"] == [
        *(("warning", "gate"), ("warning", "warning"))
    ]
    assert told[-1]["event"] == "published"
    fail_with(monkeypatch, TryAgain("another run holds the lease"))
    said = site.score()
    end = json.loads(said.err.splitlines()[-1])
    assert said.code == 75 == end["exit_code"]
    assert (end["event"], end["stage"], end["message"]) == ("stopped", "score", "another run holds the lease")


# --- Prometheus ----------------------------------------------------------------------------------------------------


def test_a_published_night_in_metrics(site: Site) -> None:
    before = time.time()
    assert site.score().code == 0
    told = samples(site)
    assert told["isthmus_last_run_success", "s"] == 1
    assert told["isthmus_last_run_exit_code", "s"] == 0
    assert told["isthmus_last_success_timestamp_seconds", "s"] == told["isthmus_last_run_timestamp_seconds", "s"]
    assert before <= told["isthmus_last_run_timestamp_seconds", "s"] <= time.time()
    assert (told["isthmus_parties", "s"], told["isthmus_ties", "s"]) == (7, 8)
    assert told["isthmus_half_width_widest", "s"] == 0
    assert (told["isthmus_rows", "used", "s"], told["isthmus_rows", "refused", "s"]) == (32, 0)
    assert told["isthmus_gate", "refused", "s", "ok"] == 1
    assert told["isthmus_gate", "refused", "s", "stop"] == 0
    assert [stage for name, *_, stage in told if name == "isthmus_stage_duration_seconds"] == STAGES
    assert 0 < told["isthmus_run_duration_seconds", "s"] < 60
    assert told["isthmus_peak_memory_bytes", "s"] > 2**20
    text = (site.root / "signals" / "s.prom").read_text()
    assert set(re.findall(r"(\w+)=\"", text)) == {"series", "stage", "outcome", "gate", "state"}
    assert "_total" not in text
    assert [path.name for path in (site.root / "signals").glob("*prom*")] == ["s.prom"]  # nothing half written is left


def test_a_failed_night_keeps_when_one_last_succeeded(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    assert site.score().code == 0
    good = samples(site)
    site.file(DAYS[1]).unlink()
    assert site.score().code == 65
    told = samples(site)
    assert told["isthmus_last_run_success", "s"] == 0
    assert told["isthmus_last_run_exit_code", "s"] == 65
    for _ in range(2):
        same = "isthmus_last_success_timestamp_seconds", "s"
        assert samples(site)[same] == good[same]
        assert site.score().code == 65
    assert told["isthmus_last_run_timestamp_seconds", "s"] > good["isthmus_last_run_timestamp_seconds", "s"]
    assert told["isthmus_gate", "missing_days", "s", "stop"] == 1
    assert told["isthmus_rows", "used", "s"] == 24
    assert ("isthmus_parties", "s") not in told  # not known this time


def test_the_first_night_that_fails_has_no_success_to_tell_of(site: Site) -> None:
    site.file(DAYS[1]).unlink()
    assert site.score().code == 65
    assert ("isthmus_last_success_timestamp_seconds", "s") not in samples(site)


def test_readers_never_see_half_a_metrics_file(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    assert site.score().code == 0
    before, seen = (site.root / "signals" / "s.prom").read_bytes(), []
    rename = os.rename

    def look(source: str, target: str) -> None:
        if str(target).endswith("s.prom"):
            seen.append((Path(target).read_bytes(), Path(source).suffix))
        rename(source, target)

    monkeypatch.setattr(os, "rename", look)
    assert site.score().code == 0
    ((there, suffix),) = seen
    assert there == before
    assert suffix != ".prom"  # the collector reads every name that ends so, hidden or not


def test_two_series_in_one_folder_but_not_in_one_file(site: Site) -> None:
    assert site.score().code == 0
    text = site.config.read_text().replace('series = "s"', 'series = "t"')
    site.config.write_text(text)
    for command in ("score", "check"):
        said = isthmus(command, site.config, "--as-of", AS_OF)
        assert said.code == 78
        assert 'holds the figures of series "s"; name a file for each series' in said.err
    site.config.write_text(text.replace("s.prom", "t.prom"))
    assert site.score().code == 0
    told = {path.name: path.read_text() for path in (site.root / "signals").glob("*.prom")}
    assert 'series="t"' in told["t.prom"]
    assert 'series="t"' not in told["s.prom"]
    assert _help(told["s.prom"]) == _help(told["t.prom"])  # the collector refuses texts that differ


def _help(text: str) -> list[str]:
    return [line for line in text.splitlines() if line.startswith("#")]


def test_an_earlier_file_that_is_no_metrics_is_replaced(site: Site) -> None:
    (site.root / "signals").mkdir()
    (site.root / "signals" / "s.prom").write_text("isthmus_parties{series=")
    assert metrics._samples(str(site.root / "signals" / "s.prom")) == []
    assert site.score().code == 0
    assert samples(site)["isthmus_parties", "s"] == 7


# --- OpenLineage ---------------------------------------------------------------------------------------------------


def test_a_published_night_in_events(site: Site) -> None:
    assert site.score().code == 0
    start, complete = events(site)
    assert (start["eventType"], complete["eventType"]) == ("START", "COMPLETE")
    assert start["run"]["runId"] == complete["run"]["runId"]
    assert start["eventTime"] < complete["eventTime"]
    for event in (start, complete):
        assert (event["job"]["namespace"], event["job"]["name"]) == ("isthmus", "s")
        assert event["job"]["facets"]["jobType"]["processingType"] == "BATCH"
        assert event["run"]["facets"]["nominalTime"]["nominalStartTime"] == f"{AS_OF}T00:00:00+00:00"
        assert event["run"]["facets"]["processing_engine"]["name"] == "isthmus"
        assert [(each["namespace"], each["name"]) for each in event["inputs"]] == [("file", str(site.log))]
        fields = {each["name"]: each["description"] for each in event["inputs"][0]["facets"]["schema"]["fields"]}
        assert fields == {"from": "sender", "to": "receiver", "sent_at": "time", "value": "amount"}
        tables = {Path(each["name"]).name: each for each in event["outputs"]}
        assert list(tables) == ["scores", "ties", "parties", "refused", "runs"]
        for name, table in tables.items():
            assert table["facets"]["dataSource"]["uri"] == (site.warehouse / name).as_uri()
            fields = {each["name"] for each in table["facets"]["schema"]["fields"]}
            assert fields == {*site.table(name).columns, "series", "as_of"}
        assert "errorMessage" not in event["run"]["facets"]
    rows_out = {Path(e["name"]).name: e["outputFacets"]["outputStatistics"] for e in complete["outputs"]}
    assert (rows_out["scores"]["rowCount"], rows_out["runs"]["rowCount"]) == (7, 1)
    tags = {tag["key"]: tag["value"] for tag in complete["run"]["facets"]["tags"]["tags"]}
    assert (tags["as_of"], tags["run_id"]) == (str(AS_OF), site.table("runs")["run_id"].item())
    assert site.score().code == 0
    assert len({event["run"]["runId"] for event in events(site)}) == 2  # each attempt is a run of its own


@pytest.mark.parametrize(
    ("error", "kind", "message"),
    [
        (TryAgain("another run holds the lease"), "ABORT", "another run holds the lease"),
        (KeyboardInterrupt(), "ABORT", "interrupted from the keyboard"),
        (OSError(28, "No space left on device", "days"), "FAIL", "No space left on device: days"),
        (RuntimeError("ada@k1 is odd"), "FAIL", "internal error: RuntimeError"),
        (None, "FAIL", "a gate stops the night"),
    ],
)
def test_a_start_has_exactly_one_end(
    site: Site, monkeypatch: pytest.MonkeyPatch, error: BaseException | None, kind: str, message: str
) -> None:
    if error:
        fail_with(monkeypatch, error)
    else:
        site.file(DAYS[1]).unlink()
    assert site.score().code > 0
    start, end = events(site)
    assert (start["eventType"], end["eventType"]) == ("START", kind)
    told = end["run"]["facets"]["errorMessage"]
    assert told["message"].startswith(message)
    assert told["programmingLanguage"] == "PYTHON"
    assert "ada@k1" not in json.dumps(end)
    assert lines(site)[-1]["event"] == ("failed" if kind == "FAIL" and error else "stopped")
    assert site.published() == {"layout.json": site.published()["layout.json"]}, (
        "a night that ends so publishes nothing"
    )


@contextmanager
def endpoint(answer: int) -> Iterator[tuple[str, list[tuple[str, str, dict[str, Any]]]]]:
    """A server on loopback: its address, and (path, credentials, body) of what it was sent."""
    heard: list[tuple[str, str, dict[str, Any]]] = []

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            body = json.loads(self.rfile.read(int(self.headers["Content-Length"])))
            heard.append((self.path, self.headers["Authorization"] or "", body))
            self.send_response(answer)
            self.send_header("Content-Length", "0")
            self.end_headers()

        def log_message(self, *_: object) -> None:
            pass

    server = HTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_port}", heard
    finally:
        server.shutdown()
        thread.join()
        server.server_close()


@pytest.mark.parametrize(("path", "sent_to"), [("", "/api/v1/lineage"), ("/in/here", "/in/here")])
def test_an_endpoint_hears_it_with_the_key_of_the_environment(
    site: Site, monkeypatch: pytest.MonkeyPatch, path: str, sent_to: str
) -> None:
    monkeypatch.setenv("OPENLINEAGE_API_KEY", "SECRET-KEY")
    with endpoint(201) as (address, heard):
        site.settings(ENGINE + f'[signals]\nopenlineage = "{address}{path}"')
        said = site.score("--json")
    assert said.code == 0
    assert [(where, key, event["eventType"]) for where, key, event in heard] == [
        *((sent_to, "Bearer SECRET-KEY", "START"), (sent_to, "Bearer SECRET-KEY", "COMPLETE"))
    ]
    assert "SECRET" not in said.out + said.err + json.dumps([event for _, _, event in heard])
    assert not any(b"SECRET-KEY" in data for data in site.published().values())


@pytest.mark.parametrize("answer", [401, None])
def test_an_endpoint_that_fails_is_a_warning(site: Site, monkeypatch: pytest.MonkeyPatch, answer: int | None) -> None:
    monkeypatch.setenv("OPENLINEAGE_API_KEY", "SECRET-KEY")
    with endpoint(answer or 200) as (address, heard):
        if answer:
            site.settings(ENGINE + f'[signals]\nopenlineage = "{address}"')
            said = site.score()
    if not answer:  # nobody listens there any more
        site.settings(ENGINE + f'[signals]\nopenlineage = "{address}"')
        said = site.score()
    assert said.code == 0
    reason = "the endpoint answered 401" if answer else "ConnectionError"
    assert said.err.count(f"warning: signals.openlineage could not be told: {reason}; the night goes on") == 1
    assert len(heard) == (2 if answer else 0)  # the end is tried although the start failed
    assert "could not be told" in site.table("runs")["warnings"].item()
    assert "SECRET" not in said.err


def test_an_environment_that_the_client_cannot_use_is_told(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OPENLINEAGE__TRANSPORT__AUTH", '{"type": "api_key", "key": "SECRETVALUE"}')
    site.settings(ENGINE + '[signals]\nopenlineage = "http://127.0.0.1:9"')
    said = site.score()
    assert said.code == 78
    assert "signals.openlineage cannot be set up" in said.err
    assert "SECRET" not in said.err
    assert not site.warehouse.exists()


# --- never in the way ----------------------------------------------------------------------------------------------


def test_signals_that_cannot_be_written_are_warnings(site: Site) -> None:
    (site.root / "signals").write_text("a file where a folder should be")
    said = site.score()
    assert said.code == 0, said.err
    for key in ("log", "prometheus", "openlineage"):
        assert said.err.count(f"warning: signals.{key} could not be told") == 1
    site.file(DAYS[1]).unlink()
    said = site.score()
    assert said.code == 65  # and the night's own end is not hidden by them
    assert "a gate stops the night" in said.err


@pytest.mark.parametrize(
    ("extra", "library", "home"),
    [("prometheus", "prometheus_client", "metrics"), ("openlineage", "openlineage.client", "lineage")],
)
@pytest.mark.parametrize("command", ["score", "check"])
def test_a_missing_extra_is_told_before_anything_is_read(
    site: Site, monkeypatch: pytest.MonkeyPatch, extra: str, library: str, home: str, command: str
) -> None:
    monkeypatch.delitem(sys.modules, f"isthmus.signals.{home}", raising=False)
    monkeypatch.setitem(sys.modules, library, None)
    said = isthmus(command, site.config, "--as-of", AS_OF)
    assert said.code == 78
    assert f"signals.{extra} needs a library that is not installed; install isthmus[{extra}]" in said.err
    assert not site.warehouse.exists()
    assert not (site.root / "signals").exists()


def test_a_night_without_signals_loads_none_of_their_libraries(tmp_path: Path) -> None:
    code = "import sys, isthmus.nightly; print({'prometheus_client', 'openlineage'} & set(sys.modules))"
    assert subprocess.run([sys.executable, "-c", code], capture_output=True, text=True).stdout == "set()\n"


# --- never a key or a secret ---------------------------------------------------------------------------------------

KEY, ID, SECRET = "PARTYKEY", "ROWID", "SECRETVALUE"


def spoiled(site: Site, case: str, monkeypatch: pytest.MonkeyPatch) -> Said:
    """A night on unmistakable keys and ids, with refused, filtered and repeated rows, ended as `case` says."""
    pairs = [(f"{KEY}-{at % 9}", f"{KEY}-{at * 2 % 7}") for at in range(40)]
    for day in DAYS:
        frame = rows(day, [*pairs, ("", f"{KEY}-lone")])
        ids = [f"{ID}-{day}-{at % 38}" for at in range(frame.height)]
        site.write(frame.with_columns(id=pl.Series(ids)), day)
    if case == "damaged":
        site.file(DAYS[2]).write_bytes(site.file(DAYS[2]).read_bytes()[:-40])
    elif case == "types":
        site.write(pl.DataFrame({"from": [f"{KEY}-1"], "to": [f"{KEY}-2"], "sent_at": [f"{KEY}"], "id": [ID]}), DAYS[3])
    elif case == "internal":
        fail_with(monkeypatch, RuntimeError(f"{KEY}-3 with {ID}-4 and {SECRET}"))
    elif case == "storage":
        fail_with(monkeypatch, OSError(5, "Input/output error", "days"))
    return site.score()


CASES = {"published": 0, "gate": 65, "damaged": 65, "types": 65, "internal": 70, "storage": 74}


@pytest.mark.parametrize("log", ["-", "signals/log.jsonl"])
@pytest.mark.parametrize("case", CASES)
def test_no_key_and_no_secret_anywhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, case: str, log: str) -> None:
    monkeypatch.setenv("OPENLINEAGE_API_KEY", SECRET)
    monkeypatch.setenv("OPENLINEAGE__TRANSPORT__AUTH", f'{{"broken": {SECRET}}}')  # the client would quote it
    limit = "0.001" if case == "gate" else "0.5"
    more = f"{ENGINE}[gates]\nrefused_limit = {limit}\n{SIGNALS.replace('signals/log.jsonl', log)}"
    site = Site(tmp_path, log=False)
    site.settings(more, columns='id = "id"')
    said = spoiled(site, case, monkeypatch)
    assert said.code == CASES[case], said.err
    told = {str(path): path.read_bytes() for path in (tmp_path / "signals").rglob("*") if path.is_file()}
    assert len(told) == (2 if log == "-" else 3)
    told |= {name: data for name, data in site.published().items() if name.endswith(".json")}
    told |= {str(path): path.read_bytes() for path in site.work.rglob("plan.json")}
    if case == "published":
        runs = site.table("runs").row(0, named=True)
        assert min(runs[f"rows_{outcome}"] for outcome in ("used", "refused", "filtered", "duplicate")) > 0
        assert any(name.endswith("run.json") for name in told)
        assert any(name.endswith("plan.json") for name in told)
    if case != "published" or log == "-":  # the table for people names the first ten, as the README says
        told["stderr"] = said.err.encode()
    for name, data in told.items():
        for word in (KEY, ID, SECRET):
            assert word.encode() not in data, (name, word)


def test_a_process_of_its_own_lets_no_library_talk(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without a test run's handlers, what libraries log would go to stderr: retries, and the environment quoted."""
    monkeypatch.setenv("OPENLINEAGE__TRANSPORT__AUTH", f'{{"no JSON": {SECRET}}}')
    site.settings(ENGINE + '[signals]\nlog = "-"\nopenlineage = "http://127.0.0.1:9"')
    command = [sys.executable, "-m", "isthmus", "score", str(site.config), "--as-of", str(AS_OF)]
    ran = subprocess.run(command, capture_output=True, text=True, check=True)
    told = [json.loads(line) for line in ran.stderr.splitlines()]
    assert [line["event"] for line in told].count("warning") == 1
    assert SECRET not in ran.stderr + ran.stdout


def test_the_clients_own_log_does_not_reach_the_logs_of_a_host(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OPENLINEAGE__TRANSPORT__AUTH", f'{{"no JSON": {SECRET}}}')
    heard = io.StringIO()
    handler = logging.StreamHandler(heard)
    logging.getLogger().addHandler(handler)
    try:
        assert site.score().code == 0
    finally:
        logging.getLogger().removeHandler(handler)
    assert SECRET not in heard.getvalue()


# --- run.json and memory -------------------------------------------------------------------------------------------


def manifest(site: Site) -> dict[str, Any]:
    return json.loads((site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "run.json").read_text())


def test_run_json_explains_the_night(site: Site) -> None:
    site.settings(ENGINE + '[gates]\nmissing_days = "warn"\nrefused = "off"\n')
    site.file(DAYS[1]).unlink()
    os.utime(site.file(DAYS[0]), ns=(0, 1_700_000_000 * 10**9 + 5))
    assert site.score().code == 0
    told = manifest(site)
    assert told["inputs"][0] == {
        "file": "dt=2026-03-01/part-0.parquet",
        "bytes": site.file(DAYS[0]).stat().st_size,
        "changed": str(datetime.fromtimestamp(1_700_000_000, UTC)),
        "changed_ns": 1_700_000_000 * 10**9 + 5,
        "rows": 8,
    }
    assert told["gates"][:3] == [
        {"gate": "missing_days", "figure": 1, "limit": 0, "state": "warn"},
        {"gate": "refused", "figure": 0.0, "limit": 0.01, "state": "off"},
        {"gate": "nulls", "figure": 0.0, "limit": 1.0, "state": "ok"},
    ]
    unknown = {gate["gate"] for gate in told["gates"] if gate["state"] == "nothing to compare with"}
    assert unknown == {"volume", "redelivery", "schema_drift", "component", "overlap"}
    assert set(told["versions"]) == {"isthmus", "python", "numpy", "polars", "pyarrow", "dask", "networkit"}
    assert told["versions"]["polars"] == pl.__version__
    assert [stage["stage"] for stage in told["stages"]] == STAGES[:-1]
    for stage in told["stages"]:
        assert stage["seconds"] == told["seconds"][stage["stage"]]
        assert 2**20 < stage["peak_memory_bytes"] <= told["peak_memory_bytes"]
    seconds = told["predictions"]["score_seconds"]
    assert (seconds["predicted"], seconds["measured"]) == (told["predicted_seconds"], told["seconds"]["score"])
    assert told["predictions"]["score_bytes"]["predicted"] == told["predicted_bytes"]
    assert told["predictions"]["score_bytes"]["measured"] == told["stages"][-1]["peak_memory_bytes"]
    assert told["settings"]["gates"]["refused"] == "off"
    assert told["seed"] == 1
    assert told["replaces"] == []


def test_a_night_remembers_the_runs_that_it_replaced(site: Site) -> None:
    ran = []
    for top in range(3):
        site.settings(ENGINE.replace("\n", f"\ntop = {top}\n", 1))
        assert site.score().code == 0
        ran.append(manifest(site))
    told = ran[-1]["replaces"]
    assert [run["run_id"] for run in told] == [ran[1]["run_id"], ran[0]["run_id"]]
    for name in ("definition", "finished_at", "method", "rows_used"):
        assert told[0][name] == ran[1][name]
    path = site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "run.json"
    path.write_text(json.dumps(ran[-1] | {"replaces": [{"run_id": f"old-{at}"} for at in range(20)]}))
    assert site.score().code == 0
    told = manifest(site)["replaces"]
    assert [run["run_id"] for run in told] == [ran[-1]["run_id"], *(f"old-{at}" for at in range(19))]


def test_peak_memory_is_of_the_stage() -> None:
    watch = Watch()
    with watch.stage("before"):
        time.sleep(0.1)
    for name, size in (("large", 300), ("small", 100), ("none", 0)):
        with watch.stage(name):
            block = np.ones(size * 2**20, np.uint8)
            time.sleep(0.2)  # several looks
            del block
    base, rise = watch.peaks["before"], {name: watch.peaks[name] - watch.peaks["before"] for name in watch.peaks}
    assert base > 2**20
    assert rise["large"] > rise["small"] + 150 * 2**20  # what the second freed is not the third's
    assert rise["small"] > rise["none"] + 50 * 2**20
    assert rise["none"] < 50 * 2**20
