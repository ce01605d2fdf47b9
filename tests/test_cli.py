"""Words in, words out: what people read, what programs read, and the exit codes."""

from __future__ import annotations

import contextlib
import errno
import io
import json
import os
import re
import shutil
import signal
import subprocess
import sys
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import numpy as np
import polars as pl
import pytest
from rich.console import Console as RichConsole

import isthmus as package
from isthmus import cli, forecast, nightly
from isthmus.console import Console, number, printable
from isthmus.tables import PARTITION, TABLES
from nights import AS_OF, BETWEEN, DAYS, PAIRS, Site, isthmus, noon, rows

USAGE, INTERNAL, INTERRUPTED = 64, 70, 130


@pytest.fixture(scope="module")
def good(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A log with some dirt and its night, published. Not to be changed."""
    site = Site(tmp_path_factory.mktemp("cli"), "[gates]\nrefused_limit = 0.1")
    site.write(rows(DAYS[1], [*PAIRS, ("ada@k1", "ada@k1"), ("", "ada@k1")]), DAYS[1])
    assert site.score().code == 0
    return site


@pytest.fixture
def site(good: Site, tmp_path: Path) -> Site:
    shutil.copytree(good.root, tmp_path / "site")
    return Site(tmp_path / "site", "[gates]\nrefused_limit = 0.1", log=False)


# --- help and usage ------------------------------------------------------------------------------------------------


def test_the_first_help_says_what_it_does_where_to_start_and_the_exit_codes() -> None:
    said = isthmus("--help")
    assert said.code == 0
    assert said.err == ""
    assert "betweenness centrality" in said.out
    assert "Start with `isthmus demo`" in said.out
    for code in ("0 ", "64 ", "65 ", "70 ", "74 ", "75 ", "78 ", "130 "):
        assert f"\n    {code}" in said.out
    for command in ("score", "check", "history", "columns", "demo"):
        assert f"\n  {command}" in said.out


@pytest.mark.parametrize(
    ("command", "texts"),
    [
        ("score", ["Safe to repeat", "Examples", "--as-of 2026-11-30", "--json", "yesterday, UTC", "a TOML file"]),
        ("check", ["write nothing", "the time and the memory", "exit code", "--settings", "--as-of", "--json"]),
        ("columns", ["data dictionary", "TABLE", "all when left out", "--json"]),
        ("demo", ["invented log of four weeks", "Running it again replaces", "isthmus-demo", "--kind", "--json"]),
    ],
)
def test_each_help_teaches(command: str, texts: list[str]) -> None:
    for flag in ("--help", "-h"):
        said = isthmus(command, flag)
        assert said.code == 0
        assert said.out.startswith(f"Usage: isthmus {command}")
        for text in texts:
            assert text in " ".join(said.out.split())


@pytest.mark.parametrize(
    ("arguments", "texts"),
    [
        ([], ["Usage: isthmus", "Start with `isthmus demo`"]),
        (["scor"], ["No such command 'scor'"]),
        (["score"], ["Missing argument 'CONFIG'", "isthmus score -h"]),
        (["score", "a.toml", "b.toml"], ["unexpected extra argument", "b.toml"]),
        (["score", "a.toml", "--as-off", "x"], ["--as-off"]),
        (["score", "a.toml", "--as-of"], ["--as-of"]),
        (["check", "a.toml", "--json=yes"], ["--json"]),
        (["columns", "score"], ["no table 'score'", "scores, ties, parties, refused, runs"]),
        (["demo", "a", "b"], ["unexpected extra argument"]),
        (["demo", "--kind", "mail"], ["no kind of log 'mail'", "plain, email, calls, payments"]),
    ],
)
def test_usage_errors(arguments: list[str], texts: list[str]) -> None:
    said = isthmus(*arguments)
    assert said.code == USAGE
    assert said.out == ""
    for text in texts:
        assert text in said.err


@pytest.mark.parametrize("command", ["score", "check"])
@pytest.mark.parametrize("text", ["yesterday", "", "2026-02-30", "30.11.2026", "2026-11", "0001-01-01", "9999-12-31"])
def test_a_day_that_is_none_is_told_before_anything_is_read(tmp_path: Path, command: str, text: str) -> None:
    """An empty one, too: a scheduler's variable that was never set must not score another night."""
    said = isthmus(command, tmp_path / "not-there.toml", "--as-of", text)
    assert said.code == USAGE
    assert said.out == ""
    assert "--as-of" in said.err
    assert repr(text) in said.err
    assert "like 2026-11-30" in said.err or "1970 to 2199" in said.err


def test_without_a_day_it_is_yesterday(tmp_path: Path) -> None:
    site = Site(tmp_path)
    for day in DAYS:
        shutil.rmtree(site.file(day).parent)
    before = datetime.now(UTC).date() - timedelta(days=1)
    site.write(rows(before), before)
    said = isthmus("check", site.config)
    days = [date.fromisoformat(text) for text in re.findall(r"window \S+ \.\. (\d{4}-\d\d-\d\d)", said.err)]
    assert days in ([before], [before + timedelta(days=1)])  # midnight may have passed


# --- people and programs -------------------------------------------------------------------------------------------


def test_score_tells_people_on_stderr_only(site: Site) -> None:
    said = site.score()
    assert said.code == 0
    assert said.out == ""
    for text in (
        "Series s, 2026-03-01 .. 2026-03-04: the first 7 of 7 parties by betweenness",
        "Method: exact, so each interval is the score itself.",
        "Rows: 34 read = 32 used + 1 refused + 1 filtered + 0 duplicate",
        "refused             1  sender is empty",
        "filtered            1  self-contact",
        f"Tables: {site.warehouse}",
        "not a verdict on anyone",
    ):
        assert text in said.err
    assert re.search(r"^zia@k7 +\d +0\.300000 +0\.300000 \.\. 0\.300000 +1 \.\. 3 +2$", said.err, re.MULTILINE)


def test_away_from_a_terminal_output_is_plain_lines(good: Site) -> None:
    ran = subprocess.run(
        [sys.executable, "-m", "isthmus", "score", str(good.config), "--as-of", str(AS_OF)], capture_output=True
    )
    assert ran.returncode == 0
    assert ran.stdout == b""
    assert b"\x1b" not in ran.stderr
    assert b"\r" not in ran.stderr
    lines = ran.stderr.decode().splitlines()
    stages = ["survey", "read", "combine", "graph", "plan", "score", "publish"]
    assert [line.split()[0] for line in lines[:7]] == stages
    assert all(re.fullmatch(r"\w+ +\d+\.\d s", line) for line in lines[:7])


def test_on_a_terminal_there_are_bars(monkeypatch: pytest.MonkeyPatch) -> None:
    console, screen = Console(), io.StringIO()
    monkeypatch.setattr(console, "_err", RichConsole(file=screen, force_terminal=True, width=80))
    with console.watch() as watch:
        with watch.stage("read") as tick:
            tick(0.5)
        watch.warning(f"[red]{1}[/red] day")
    assert "100 %" in screen.getvalue()
    assert "warning: [red]1[/red] day" in screen.getvalue()
    assert watch.warnings == ["[red]1[/red] day"]


@pytest.mark.parametrize("command", ["score", "check"])
def test_json_is_one_object_on_stdout_and_the_words_stay_on_stderr(site: Site, command: str) -> None:
    said = isthmus(command, site.config, "--as-of", AS_OF, "--json")
    assert said.code == 0
    assert isinstance(json.loads(said.out), dict)
    assert said.out.endswith("}\n")
    assert "Series s" in said.err
    assert "{" not in said.err


def test_the_json_of_a_night_is_its_manifest(site: Site) -> None:
    said = site.score("--json")
    told = json.loads((site.warehouse / "runs" / "series=s" / f"as_of={AS_OF}" / "run.json").read_text())
    answer = json.loads(said.out)
    # what the answer knows more is how long publishing took, which no published file can hold
    answer["seconds"].pop("publish")
    assert answer == told
    run = site.table("runs").row(0, named=True)
    assert {key: told[key] for key in ("run_id", "rows_read", "parties", "definition")} == {
        key: run[key] for key in ("run_id", "rows_read", "parties", "definition")
    }
    assert told["inputs"][0] == {
        "file": "dt=2026-03-01/part-0.parquet",
        "bytes": site.file(DAYS[0]).stat().st_size,
        "changed": str(datetime.fromtimestamp(int(site.file(DAYS[0]).stat().st_mtime), UTC)),
        "changed_ns": site.file(DAYS[0]).stat().st_mtime_ns,
        "rows": 8,
    }
    assert told["settings"]["window"] == {"days": 4}


def test_json_reaches_a_stdout_that_knows_ascii_only(tmp_path: Path) -> None:
    (tmp_path / "données").mkdir()
    site = Site(tmp_path / "données")
    raw = io.BytesIO()
    out = io.TextIOWrapper(raw, encoding="ascii")
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(io.StringIO()):
        code = cli.exit_code(["check", str(site.config), "--as-of", str(AS_OF), "--settings", "--json"])
        out.flush()
    assert code == 0
    assert json.loads(raw.getvalue())["log"]["path"] == str(site.log)


@pytest.mark.parametrize("table", [None, *TABLES])
def test_columns_prints_every_declared_column(table: str | None) -> None:
    arguments = [table] if table else []
    said = isthmus("columns", *arguments)
    assert said.code == 0
    assert said.err == ""
    as_json = json.loads(isthmus("columns", *arguments, "--json").out)
    wanted = [TABLES[table]] if table else list(TABLES.values())
    assert list(as_json) == [each.name for each in wanted]
    blocks = said.out.strip().split("\n\n")
    for each, block in zip(wanted, blocks, strict=True):
        head, *lines = block.splitlines()
        assert head == f"{each.name}: {each.meaning}"
        columns = [*PARTITION, *each.columns]
        for column, line, told in zip(columns, lines, as_json[each.name], strict=True):
            assert line.split()[0] == column.name == told["name"]
            assert column.meaning in line
            assert column.unit in line
            assert ("may be null" in line) == column.nullable == told["nullable"]
            assert (told["meaning"], told["unit"]) == (column.meaning, column.unit)
    assert not any("python" in line.lower() or "Datetime" in line for line in blocks)


# --- check ---------------------------------------------------------------------------------------------------------


def test_check_writes_nothing_anywhere(site: Site, tmp_path: Path) -> None:
    before = site.tree()
    assert site.check().code == 0
    assert site.check("--json").code == 0
    assert site.check("--settings").code == 0
    assert site.tree() == before
    (tmp_path / "new").mkdir()
    new = Site(tmp_path / "new")
    before = new.tree()
    assert new.check().code == 0
    assert new.tree() == before
    assert not new.warehouse.exists()
    assert not new.work.exists()


def test_check_foresees_the_night(site: Site) -> None:
    foreseen, run = json.loads(site.check("--json").out), json.loads(site.score("--json").out)
    for key in ("series", "definition", "window_start", "as_of", "parties", "ties", "method", "engine", "outcomes"):
        assert foreseen[key] == run[key]
    assert foreseen["rows"] == foreseen["rows_looked_at"] == run["rows_read"] == 34
    assert foreseen["files"] == len(run["inputs"])
    assert foreseen["days_with_rows"] == 4
    assert foreseen["predicted_bytes"] == run["predicted_bytes"]
    assert foreseen["stopped"] == ""


def test_check_foresees_a_log_that_it_reads_a_part_of(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site, draw = Site(tmp_path, log=False), np.random.default_rng(5)
    keys = np.array([f"party {at}" for at in range(400)])
    for day in DAYS:
        for part in range(5):
            ends = (400 * draw.random((2, 150)) ** 2).astype(int)
            frame = pl.DataFrame({"from": keys[ends[0]], "to": keys[ends[1]]})
            site.write(frame.with_columns(sent_at=pl.lit(noon(day)), value=1.0), day)
            site.file(day).rename(site.file(day).with_name(f"part-{part + 1}.parquet"))
    monkeypatch.setattr(forecast, "SAMPLE_ROWS", 900)
    said = site.check("--json")
    foreseen, run = json.loads(said.out), json.loads(site.score("--json").out)
    assert foreseen["rows"] == run["rows_read"] == 3000
    assert 500 < foreseen["rows_looked_at"] < 1500
    assert foreseen["parties"] == pytest.approx(run["parties"], rel=0.25)
    assert foreseen["ties"] == pytest.approx(run["ties"], rel=0.25)
    assert "about" in said.err
    assert "the rest is extrapolated" in said.err
    monkeypatch.setattr(forecast, "SAMPLE_ROWS", 400)  # parts 0, 8 and 16 of 20: none of the third day
    foreseen = json.loads(site.check("--json").out)
    assert foreseen["rows_looked_at"] == 450
    assert foreseen["days_with_rows"] is None  # a day that was not looked at is not missing
    assert foreseen["stopped"] == ""


def test_check_tells_a_gate_and_the_forecast(site: Site) -> None:
    shutil.rmtree(site.file(DAYS[2]).parent)
    said = site.check("--json")
    assert said.code == 65
    assert "1 day of the window without a usable row: 2026-03-03" in said.err
    assert "Graph: 7 parties, 8 ties" in said.err
    assert "2026-03-03" in json.loads(said.out)["stopped"]
    site.settings('[gates]\nrefused_limit = 0.1\nmissing_days = "warn"')
    said = site.check("--json")
    assert said.code == 0
    assert "Warning: missing_days: 1 day of the window" in said.err
    assert len(json.loads(said.out)["warnings"]) == 1


# --- when it goes wrong --------------------------------------------------------------------------------------------


def test_an_internal_error_hides_its_message(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> None:
        raise RuntimeError(f"{BETWEEN} is no integer")

    monkeypatch.setattr(nightly, "measure", fail)
    monkeypatch.delenv("ISTHMUS_SHOW_INTERNAL", raising=False)
    before = site.published()
    said = site.score("--json")
    assert said.code == INTERNAL
    assert said.out == ""
    assert BETWEEN not in said.err
    assert "internal error" in said.err
    assert "RuntimeError (set ISTHMUS_SHOW_INTERNAL=1" in said.err
    assert re.search(r"test_cli\.py:\d+ in fail", said.err)
    assert site.published() == before
    monkeypatch.setenv("ISTHMUS_SHOW_INTERNAL", "1")
    assert f"RuntimeError: {BETWEEN} is no integer" in site.score().err


@pytest.mark.parametrize("during", ["score", "publish"])
def test_ctrl_c(site: Site, monkeypatch: pytest.MonkeyPatch, during: str) -> None:
    def interrupt(*_: object, **__: object) -> None:
        monkeypatch.undo()
        raise KeyboardInterrupt

    site.write(rows(DAYS[0], PAIRS[:5]), DAYS[0])
    before = site.published()
    if during == "score":
        monkeypatch.setattr(nightly, "measure", interrupt)
    else:
        rename = os.replace
        monkeypatch.setattr(os, "replace", lambda a, b: interrupt() if Path(b).name == "current" else rename(a, b))
    said = site.score()
    assert said.code == INTERRUPTED
    assert "interrupted" in said.err
    assert "run the same command again" in said.err
    assert site.published() == before
    assert site.score().code == 0


def test_a_disk_that_fails_outside_the_store_is_told_too(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device", "/mnt/days/ties.arrow")

    monkeypatch.setattr(pl.DataFrame, "write_ipc", fail)
    before = site.published()
    said = site.score()
    assert said.code == 74
    assert "cannot keep results below /mnt/days/ties.arrow: No space left on device; check" in said.err
    assert site.published() == before


def test_a_real_interrupt_of_a_real_process(site: Site) -> None:
    code = """
import os, signal, sys, time
from isthmus import cli, nightly
def measure(*_, **__):
    os.kill(os.getpid(), signal.SIGINT)
    time.sleep(30)
nightly.measure = measure
cli.main(sys.argv[1:])
"""
    before = site.published()
    ran = subprocess.run(
        [sys.executable, "-c", code, "score", str(site.config), "--as-of", str(AS_OF)], capture_output=True, text=True
    )
    assert ran.returncode == INTERRUPTED == 128 + signal.SIGINT
    assert "Traceback" not in ran.stderr
    assert site.published() == before


# --- demo and Python -----------------------------------------------------------------------------------------------


def test_demo_says_where_it_cannot_write(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    said = isthmus("demo", tmp_path / "file")
    assert said.code == 74
    assert "cannot write the demo" in said.err
    assert said.out == ""


def test_score_from_python(site: Site) -> None:
    outcome = package.score(site.config, as_of="2026-03-04")
    assert outcome.scores.equals(site.table("scores"))
    assert outcome.manifest["run_id"] == site.table("runs")["run_id"].item()
    assert package.score(str(site.config), AS_OF).scores.equals(outcome.scores)


# --- the pieces ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("key", "shown"),
    [
        ("plain", "plain"),
        ("two\nlines\t\x1b[1m\x00", "two\\nlines\\t\\x1b[1m\\x00"),
        ("🦆 é 名", "🦆 é 名"),
        ("\u202egnp", "\\u202egnp"),
        ("x" * 40, "x" * 40),
        ("a" * 28 + "b" * 9_000 + "c" * 11, "a" * 28 + "…" + "c" * 11),
        ("", ""),
    ],
)
def test_printable(key: str, shown: str) -> None:
    assert printable(key) == shown


def test_number() -> None:
    assert [number(value) for value in (0, 999, 1_000, 1_234_567.0)] == ["0", "999", "1,000", "1,234,567"]


def test_table_lines_up_wide_letters(capsys: pytest.CaptureFixture[str]) -> None:
    Console().table("T", ["party", "rank"], [["名前", "1"], ["[b]x[/b]", "10"]])
    assert capsys.readouterr().err.splitlines() == [
        "T",
        "party     rank",
        "--------  ----",
        "名前         1",
        "[b]x[/b]    10",
    ]
