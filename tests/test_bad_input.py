"""Every bad input ends in a clear message, the right exit code and nothing half-published."""

from __future__ import annotations

import errno
import json
import os
import shutil
import signal
import subprocess
import sys
import threading
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import duckdb
import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from isthmus.console import printable
from isthmus.publish.night import Night
from isthmus.publish.queries import top_brokers
from nights import AS_OF, BETWEEN, DAYS, PAIRS, PARTIES, Said, Site, isthmus, rows

REFUSED, STORE, SETTINGS = 65, 74, 78


@pytest.fixture(scope="session")
def published(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A good night, published."""
    site = Site(tmp_path_factory.mktemp("good"))
    assert site.score().code == 0
    return site


@pytest.fixture
def site(published: Site, tmp_path: Path) -> Site:
    """A copy of the good night, to be spoilt."""
    shutil.copytree(published.root, tmp_path / "site")
    return Site(tmp_path / "site", log=False)


def silent_about_parties(said: Said) -> bool:
    return not any(party in said.err + said.out for party in PARTIES)


# --- the log -------------------------------------------------------------------------------------------------------


def no_folder(site: Site) -> None:
    shutil.rmtree(site.log)


def no_parquet(site: Site) -> None:
    for file in site.log.rglob("*.parquet"):
        file.rename(file.with_suffix(".csv"))


def no_match(site: Site) -> None:
    site.config.write_text(site.config.read_text().replace('path = "log"', 'path = "log/dt=2031*/*.parquet"'))


def other_days_by_name(site: Site) -> None:
    for at, day in enumerate(DAYS):
        site.file(day).parent.rename(site.log / f"dt=2020-01-0{at + 1}")


def other_days_by_footer(site: Site) -> None:
    shutil.rmtree(site.log)
    site.log.mkdir()
    rows(date(2020, 1, 1)).write_parquet(site.log / "a.parquet")


def a_day_missing(site: Site) -> None:
    shutil.rmtree(site.file(DAYS[1]).parent)


def a_day_without_rows(site: Site) -> None:
    site.write(rows(DAYS[1]).clear(), DAYS[1])


def text_for_parquet(site: Site) -> None:
    site.file(DAYS[2]).write_text(f"sender,receiver\n{BETWEEN},x\n" * 50)


def an_empty_file(site: Site) -> None:
    site.file(DAYS[2]).write_bytes(b"")


def cut_short(site: Site) -> None:
    whole = site.file(DAYS[2]).read_bytes()
    site.file(DAYS[2]).write_bytes(whole[: len(whole) // 2])


def cut_inside(site: Site) -> None:
    """Data bytes lost, the footer with its length and magic whole: only reading the columns can tell."""
    whole = site.file(DAYS[2]).read_bytes()
    site.file(DAYS[2]).write_bytes(whole[:4] + whole[200:])


def garbage_inside(site: Site) -> None:
    path = site.file(DAYS[2])
    chunk = pq.read_metadata(path).row_group(0).column(0)
    whole = bytearray(path.read_bytes())
    begin = chunk.dictionary_page_offset or chunk.data_page_offset
    whole[begin : begin + chunk.total_compressed_size] = b"\xa5" * chunk.total_compressed_size
    path.write_bytes(whole)


def column_missing(site: Site) -> None:
    site.write(rows(DAYS[3]).drop("sent_at", "value"), DAYS[3])


def column_renamed(site: Site) -> None:
    site.write(rows(DAYS[3]).rename({"sent_at": "sent_at_utc"}), DAYS[3])


def column_retyped(column: str, change: pl.Expr) -> Callable[[Site], None]:
    def spoil(site: Site) -> None:
        for day in DAYS:
            site.write(rows(day).with_columns(change.alias(column)), day)

    return spoil


def keys_of_two_types(site: Site) -> None:
    site.write(rows(DAYS[3]).with_columns(pl.lit(7, pl.Int64).alias("from")), DAYS[3])


def zones_and_no_zones(site: Site) -> None:
    site.write(rows(DAYS[3]).with_columns(pl.col("sent_at").dt.replace_time_zone(None)), DAYS[3])


def all_refused(site: Site) -> None:
    for day in DAYS:
        site.write(rows(day).with_columns(pl.lit("").alias("from")), day)


def all_rows_gone(site: Site) -> None:
    for day in DAYS:
        site.write(rows(day).clear(), day)


def one_party(site: Site) -> None:
    for day in DAYS:
        site.write(rows(day, [(BETWEEN, BETWEEN)]), day)


def odd_times(site: Site) -> None:
    """Two rows of eight on one day; over all days a share of 2 in 32."""
    odd = [datetime(102, 11, 5, tzinfo=UTC), datetime(9999, 12, 31, tzinfo=UTC)]
    good = rows(DAYS[0])
    times = pl.Series("sent_at", odd + good["sent_at"][2:].to_list(), good.schema["sent_at"])
    site.write(good.with_columns(times), DAYS[0])


def odd_amounts(site: Site) -> None:
    odd = [float("nan"), float("inf"), -1.0, None, *[1.0] * 4]
    site.write(rows(DAYS[0]).with_columns(pl.Series("value", odd)), DAYS[0])


# --- the folders ---------------------------------------------------------------------------------------------------


def newer_layout(site: Site) -> None:
    (site.warehouse / "layout.json").write_text('{"layout": 2}')


def newer_work(site: Site) -> None:
    (site.work / "series=s" / "layout.json").write_text('{"layout": 7}')


def broken_layout(site: Site) -> None:
    (site.warehouse / "layout.json").write_bytes(b"\xff\xfe layout")


def work_is_a_file(site: Site) -> None:
    shutil.rmtree(site.work)
    site.work.write_text("in the way")


def warehouse_below_a_file(site: Site) -> None:
    (site.root / "file").write_text("in the way")
    site.settings('warehouse = "file/warehouse"')


def no_settings(site: Site) -> None:
    site.config.unlink()


def no_memory(site: Site) -> None:
    site.settings('memory = "1KiB"')


@dataclass(frozen=True)
class Case:
    """`texts` must all be in what a person reads: what failed, the value, what to do."""

    spoil: Callable[[Site], None]
    code: int
    texts: tuple[str, ...]


CASES = {
    "missing folder": Case(no_folder, STORE, ("log.path", "/site/log'", "does not exist", "check the path")),
    "no Parquet file": Case(no_parquet, REFUSED, ("no Parquet file (4 other files)", "must end in .parquet")),
    "pattern without a match": Case(no_match, STORE, ("dt=2031*", "matches no file", "check the pattern")),
    "no partition in the window": Case(
        other_days_by_name, REFUSED, ("4 Parquet files", "no partition for 2026-03-01..2026-03-04", "check --as-of")
    ),
    "no row group in the window": Case(
        other_days_by_footer, REFUSED, ("no row group", "2026-03-01..2026-03-04", "check --as-of")
    ),
    "a day missing": Case(a_day_missing, REFUSED, ("1 day of the window", "2026-03-02", 'missing_days = "warn"')),
    "a day without rows": Case(a_day_without_rows, REFUSED, ("1 day of", "2026-03-02", 'missing_days = "warn"')),
    "not Parquet": Case(text_for_parquet, REFUSED, ("dt=2026-03-03/part-0.parquet", "not whole", "deliver it again")),
    "an empty file": Case(an_empty_file, REFUSED, ("dt=2026-03-03/part-0.parquet", "not whole", "deliver it again")),
    "cut short": Case(cut_short, REFUSED, ("dt=2026-03-03/part-0.parquet", "not whole Parquet", "deliver it again")),
    "cut inside": Case(cut_inside, REFUSED, ("dt=2026-03-03/part-0.parquet", "not whole Parquet", "deliver it again")),
    "garbage inside": Case(garbage_inside, REFUSED, ("dt=2026-03-03/part-0.parquet", "not whole", "deliver it again")),
    "column missing": Case(
        column_missing,
        REFUSED,
        ("dt=2026-03-04/part-0.parquet", "no column 'sent_at'", "log.columns.time", "it has from, to", "correct"),
    ),
    "column renamed": Case(column_renamed, REFUSED, ("no column 'sent_at'", "did you mean sent_at_utc?", "correct")),
    "keys as floats": Case(
        column_retyped("from", pl.lit(7.0)), REFUSED, ("'from'", "log.columns.sender", "holds double", "cast it")
    ),
    "times as text": Case(
        column_retyped("sent_at", pl.lit("2026-03-01")), REFUSED, ("'sent_at'", "string", "write it with the type")
    ),
    "times as counts": Case(
        column_retyped("sent_at", pl.lit(1_772_323_200)), REFUSED, ("'sent_at'", "int", "write it as a timestamp")
    ),
    "amounts as text": Case(
        column_retyped("value", pl.lit("7.50")), REFUSED, ("'value'", "log.columns.amount", "string", "write it")
    ),
    "keys of two types": Case(
        keys_of_two_types,
        REFUSED,
        ("disagree on log.columns.sender", "dt=2026-03-01", "dt=2026-03-04", "int64", "with one type"),
    ),
    "times with and without a zone": Case(
        zones_and_no_zones, REFUSED, ("disagree on log.columns.time", "dt=2026-03-04", "UTC", "with one type")
    ),
    "all rows refused": Case(all_refused, REFUSED, ("no usable row", "32 sender is empty", "check --as-of")),
    "an empty window": Case(all_rows_gone, REFUSED, ("2026-03-01..2026-03-04", "check --as-of")),
    "one party": Case(one_party, REFUSED, ("no usable row", "4 self-contact", "check --as-of")),
    "odd times": Case(
        odd_times, REFUSED, ("2 of the window's 32 rows were refused", "6.25%", "1.00%", '[gates] refused = "warn"')
    ),
    "odd amounts": Case(
        odd_amounts, REFUSED, ("4 of the window's 32 rows", "12.50%", "refused_limit", 'refused = "warn"')
    ),
    "newer layout": Case(newer_layout, SETTINGS, ("run.warehouse", "layout 2", "up to 1", "upgrade isthmus")),
    "newer work folder": Case(newer_work, SETTINGS, ("run.work", "layout 7", "up to 1", "another folder in run.work")),
    "broken layout": Case(broken_layout, STORE, ("layout.json", "not readable", "restore or remove it")),
    "work is a file": Case(work_is_a_file, STORE, ("run.work", "/site/work", "not a folder", "may write there")),
    "warehouse below a file": Case(
        warehouse_below_a_file, STORE, ("run.warehouse", "/site/file", "not a folder", "may write there")
    ),
    "no settings": Case(no_settings, STORE, ("isthmus.toml", "No such file", "give the path of a TOML file")),
    "no memory": Case(no_memory, SETTINGS, ("no method fits", "run.memory", "raise run.memory or shorten window.days")),
}


@pytest.mark.parametrize("name", CASES)
def test_a_bad_night_is_told_and_publishes_nothing(site: Site, name: str) -> None:
    case = CASES[name]
    case.spoil(site)
    before = site.published()
    assert "runs/series=s/as_of=2026-03-04/run.json" in before
    said = site.score("--json")
    assert said.code == case.code, said.err
    for text in case.texts:
        assert text in said.err
    assert said.out == ""
    assert silent_about_parties(said)
    assert site.published() == before


@pytest.mark.parametrize("name", CASES)
def test_check_tells_the_same_and_writes_nothing(site: Site, name: str) -> None:
    case = CASES[name]
    case.spoil(site)
    before = site.tree()
    said = site.check()
    assert said.code == case.code, said.err
    for text in case.texts:
        assert text in said.err
    assert said.out == ""
    assert silent_about_parties(said)
    assert site.tree() == before


@pytest.mark.parametrize(
    ("spoil", "code", "text"),
    [
        (no_folder, STORE, "does not exist"),
        (cut_inside, REFUSED, "not whole Parquet"),
        (newer_layout, SETTINGS, "upgrade isthmus"),
    ],
)
def test_the_installed_command_says_the_same(site: Site, spoil: Callable[[Site], None], code: int, text: str) -> None:
    spoil(site)
    before = site.published()
    ran = subprocess.run(
        [sys.executable, "-m", "isthmus", "score", site.config, "--as-of", str(AS_OF)], capture_output=True, text=True
    )
    assert ran.returncode == code
    assert text in ran.stderr
    assert ran.stdout == ""
    assert "Traceback" not in ran.stderr
    assert site.published() == before


def test_the_first_bad_night_leaves_no_table(tmp_path: Path) -> None:
    site = Site(tmp_path)
    one_party(site)
    assert site.score().code == REFUSED
    assert set(site.published()) == {"layout.json"}


# --- what passes, and how ------------------------------------------------------------------------------------------


def test_a_missing_day_can_be_let_through(site: Site) -> None:
    a_day_missing(site)
    site.settings('[gates]\nmissing_days = "warn"')
    said = site.score()
    assert said.code == 0
    assert "warning: missing_days: 1 day of the window without a usable row: 2026-03-02" in said.err
    assert "2026-03-02" in site.table("runs")["warnings"].item()
    manifest = json.loads((site.warehouse / "runs/series=s/as_of=2026-03-04/run.json").read_text())
    assert manifest["missing_days"] == ["2026-03-02"]
    site.settings('[gates]\nmissing_days = "off"')
    said = site.score()
    assert said.code == 0
    assert "warning" not in said.err.lower()


def test_several_gates_are_told_at_once(site: Site) -> None:
    for day in DAYS[:3]:
        site.file(day).unlink()
    site.write(rows(DAYS[3]).with_columns(pl.when(pl.int_range(pl.len()) > 0).then("from").alias("from")), DAYS[3])
    said = site.score()
    assert said.code == REFUSED
    assert "3 days of the window without a usable row: 2026-03-01, 2026-03-02, 2026-03-03" in said.err
    assert "1 of the window's 8 rows were refused" in said.err


def test_odd_rows_are_listed_and_the_rest_counts(site: Site) -> None:
    odd_times(site)
    site.settings("[gates]\nrefused_limit = 0.1")
    said = site.score()
    assert said.code == 0
    assert "32 read = 30 used + 2 refused + 0 filtered + 0 duplicate" in said.err
    assert "refused             2  time is outside 1970..2199" in said.err
    refused = site.table("refused")
    assert refused["file"].to_list() == ["dt=2026-03-01/part-0.parquet"] * 2
    assert refused["row"].to_list() == [0, 1]
    assert site.table("runs")["rows_refused"].item() == 2


def test_every_kind_of_odd_amount_has_its_reason(site: Site) -> None:
    odd_amounts(site)
    site.settings('[gates]\nrefused = "off"')
    assert site.score().code == 0
    assert site.table("refused")["reason"].to_list() == [
        "amount is not finite",
        "amount is not finite",
        "amount is negative",
        "amount is null",
    ]


def test_two_parties_score_nothing_and_are_told_why(site: Site) -> None:
    for day in DAYS:
        site.write(rows(day, [("ada@k1", "ben@k2")]), day)
    said = site.score("--accept", "redelivery")
    assert said.code == 0
    assert "2 parties: with fewer than three nobody can stand between others" in said.err
    scores = site.table("scores")
    assert scores["betweenness"].to_list() == scores["upper"].to_list() == scores["pairs"].to_list() == [0.0, 0.0]
    assert scores["rank"].to_list() == [1, 2]


ODD_KEYS = [
    "new\nline",
    "carriage\rreturn",
    "tab\there",
    'it\'s "quoted" `so`',
    "'; DROP TABLE scores; --",
    "emoji 🦆👩‍👩‍👧",
    "[bold red]markup[/bold red] [/] :smile:",
    "esc \x1b[31mred\x1b[0m bell \x07",
    "nul \x00 inside",
    "right \u202eto left, zero\u200bwidth",
    "ünïcode 名前",
    "long " + "k" * 10_240,
    "a,b;c|d=e/f\\g%20",
    "null",
    "NaN",
]


def test_odd_keys_are_kept_to_the_byte(site: Site) -> None:
    ring = list(zip(ODD_KEYS, ODD_KEYS[1:] + ODD_KEYS[:1], strict=True))
    for day in DAYS:
        site.write(rows(day, ring), day)
    said = site.score()
    assert said.code == 0, said.err
    assert set(site.table("scores")["party"]) == set(ODD_KEYS)
    assert set(site.table("ties").select("sender", "receiver").rows()) == set(ring)
    asked = duckdb.sql(top_brokers(Night.of(site.warehouse, "s", AS_OF), first=99)).fetchall()
    assert {row[1] for row in asked} == set(ODD_KEYS)
    lines = said.err.splitlines()
    table = lines[lines.index(next(line for line in lines if line.startswith("party"))) + 2 :][:10]
    assert [line.split("  ")[-1].strip() for line in table] == ["2"] * 10  # one line each, ending in the degree
    first = sorted(ODD_KEYS, key=str.encode)[:10]  # equal scores stand in the order of their bytes
    assert all(line.startswith(printable(key)) for line, key in zip(table, first, strict=True))
    assert all(len(line) < 160 for line in table)
    assert not any(0 < ord(c) < 32 and c != "\n" for c in said.err)


def test_blank_keys_are_no_party(site: Site) -> None:
    pairs = [*PAIRS, ("  \t ", "ada@k1"), ("ada@k1", "")]
    site.settings('[gates]\nrefused = "off"')
    for day in DAYS:
        site.write(rows(day, pairs), day)
    assert site.score().code == 0
    assert site.table("refused")["reason"].unique().sort().to_list() == ["receiver is empty", "sender is empty"]
    assert sorted(site.table("scores")["party"]) == PARTIES


def test_zones_units_and_no_rows_of_a_column_may_differ(site: Site, published: Site) -> None:
    """Mixed zones are one moment each: a file written in Paris time, one in nanoseconds, one in local partitions."""
    paris = rows(DAYS[1]).with_columns(pl.col("sent_at").dt.convert_time_zone("Europe/Paris"))
    site.write(paris, DAYS[1])
    auckland = rows(DAYS[2]).with_columns(
        pl.col("sent_at").dt.convert_time_zone("Pacific/Auckland").dt.cast_time_unit("ns")
    )
    site.write(auckland, DAYS[2])
    assert site.score().code == 0
    assert site.table("scores").equals(published.table("scores"))
    assert site.table("ties").equals(published.table("ties"))


def test_a_time_near_midnight_is_of_its_day_in_utc(site: Site) -> None:
    """00:30 in Auckland on the 5th is 11:30 UTC on the 4th: inside; 20:00 in New York on the 4th is the 5th."""
    inside = pa.array([datetime(2026, 3, 5, 0, 30) - timedelta(hours=13)], pa.timestamp("us", "Pacific/Auckland"))
    outside = pa.array([datetime(2026, 3, 4, 20) + timedelta(hours=5)], pa.timestamp("us", "America/New_York"))
    for name, times in (("in", inside), ("out", outside)):
        table = pa.table({"from": ["ada@k1"], "to": ["fay@k6"], "sent_at": times, "value": [1.0]})
        pq.write_table(table, site.file(AS_OF).with_name(f"{name}.parquet"))
    assert site.score().code == 0
    runs = site.table("runs")
    assert runs["rows_used"].item() == 33
    # a row group that its footer puts outside the window is not read at all
    assert runs["rows_read"].item() == 33


# --- a disk that refuses -------------------------------------------------------------------------------------------


def change_the_log(site: Site) -> None:
    for day in DAYS:
        site.write(rows(day, [*PAIRS, ("eli@k5", "ada@k1")]), day)


@pytest.mark.parametrize("table", ["scores", "ties", "refused", "runs"])
def test_a_table_folder_that_cannot_be(site: Site, table: str) -> None:
    shutil.rmtree(site.warehouse / table)
    (site.warehouse / table).write_text("in the way")
    before = site.published()
    said = site.score()
    assert said.code == STORE
    assert "cannot write" in said.err
    assert f"/warehouse/{table}" in said.err
    assert "may write there" in said.err
    assert site.published() == before
    assert silent_about_parties(said)


@pytest.mark.parametrize("file", ["current", "scores.parquet", "refused.parquet", "run.json"])
def test_a_rename_that_fails_puts_everything_back(site: Site, monkeypatch: pytest.MonkeyPatch, file: str) -> None:
    change_the_log(site)
    before = site.published()
    rename = os.replace

    def refuse(source: Path, target: Path) -> None:
        if Path(target).name == file and not failed:
            failed.append(file)
            raise OSError(errno.EACCES, "Permission denied", str(target))
        rename(source, target)

    failed: list[str] = []
    monkeypatch.setattr(os, "replace", refuse)
    said = site.score()
    assert failed == [file]
    assert said.code == STORE
    assert "cannot publish" in said.err
    assert file in said.err
    assert "Permission denied" in said.err
    assert site.published() == before
    monkeypatch.undo()
    assert site.score().code == 0
    assert site.published() != before


def test_a_first_night_that_fails_to_rename_leaves_no_table(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = Site(tmp_path)
    rename = os.replace

    def refuse(source: Path, target: Path) -> None:
        if Path(target).name == "run.json":
            raise OSError(errno.EROFS, "Read-only file system", str(target))
        rename(source, target)

    monkeypatch.setattr(os, "replace", refuse)
    assert site.score().code == STORE
    assert set(site.published()) == {"layout.json"}


def test_a_full_disk(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    change_the_log(site)
    before = site.published()
    write = pl.DataFrame.write_parquet

    def full(frame: pl.DataFrame, path: Path) -> None:
        write(frame, path)
        if "ties" in str(path):
            Path(path).write_bytes(b"PAR1 half")
            raise OSError(errno.ENOSPC, "No space left on device", str(path))

    monkeypatch.setattr(pl.DataFrame, "write_parquet", full)
    said = site.score()
    assert said.code == STORE
    assert "No space left on device" in said.err
    assert "disk has room" in said.err
    assert site.published() == before


# --- a killed run --------------------------------------------------------------------------------------------------

KILLED = """
import os, signal, sys
from pathlib import Path
from isthmus import cli, nightly, watch
from isthmus.store import folder
from isthmus.ingest import window

instant, *arguments = sys.argv[1:]

def die(*_, **__):
    os.kill(os.getpid(), signal.SIGKILL)

def die_before(name, act):
    return lambda first, *rest: die() if Path((first, *rest)[-1]).name.endswith(name) else act(first, *rest)

what, _, name = instant.partition(" ")
if what == "read":
    window.read_part = die
elif what == "score":
    nightly.measure = die
elif what == "stage":
    begin = watch.Watch.stage
    watch.Watch.stage = lambda self, stage: die() if stage == name else begin(self, stage)
elif what == "flush":
    folder.flush = die_before(name, folder.flush)
elif what == "rename":
    os.replace = die_before(name, os.replace)
cli.main(arguments)
"""
STAGES = ["survey", "read", "combine", "graph", "plan", "score", "publish"]
INSTANTS = [
    *(f"stage {stage}" for stage in STAGES),
    "read",
    "score",
    "flush run.json.data",
    "rename current",
]


def kill(site: Site, instant: str) -> None:
    command = [sys.executable, "-c", KILLED, instant, "score", str(site.config), "--as-of", str(AS_OF)]
    assert subprocess.run(command, capture_output=True).returncode == -signal.SIGKILL


def seen(files: dict[str, bytes]) -> dict[str, bytes]:
    """What a reader sees: no hidden file."""
    return {name: content for name, content in files.items() if not Path(name).name.startswith(".")}


@pytest.fixture(scope="session")
def after(published: Site, tmp_path_factory: pytest.TempPathFactory) -> Site:
    """The night of the changed log as it is when nothing goes wrong."""
    root = tmp_path_factory.mktemp("after") / "site"
    shutil.copytree(published.root, root)
    site = Site(root, log=False)
    change_the_log(site)
    assert site.score().code == 0
    return site


@contextmanager
def a_reader(site: Site) -> Iterator[Counter[str]]:
    """Asks DuckDB for the night all the while; counts its answers by the run that they are of, or as wrong."""
    query = f"""
        SELECT any_value(s.run_id), count(DISTINCT s.run_id), count(*), any_value(r.parties), count(DISTINCT r.run_id)
        FROM read_parquet('{site.warehouse}/scores/*/*/*.parquet') s
        JOIN read_parquet('{site.warehouse}/runs/*/*/*.parquet') r USING (run_id)"""
    told, over = Counter[str](), threading.Event()
    for path in site.warehouse.rglob("*.parquet*"):
        # DuckDB keeps blocks of a file and tells another by its time in whole seconds: last night's is not of this one
        os.utime(path, (path.stat().st_atime, path.stat().st_mtime - 3600))

    def ask(connection: duckdb.DuckDBPyConnection) -> str:
        try:
            run, runs, rows, parties, nights = connection.sql(query).fetchall()[0]
        except duckdb.Error as error:
            return f"wrong: {error}"
        return run if runs == nights == 1 and rows == parties else f"wrong: {run, runs, rows, parties, nights}"

    def read() -> None:
        with duckdb.connect() as connection:
            while not over.is_set():
                answer = ask(connection)
                # a query that meets the very instant of the switch is asked again, as a careful reader does
                told[ask(connection) if answer.startswith("wrong") else answer] += 1

    reader = threading.Thread(target=read)
    reader.start()
    try:
        yield told
    finally:
        over.set()
        reader.join()


@pytest.mark.parametrize("instant", INSTANTS)
def test_a_killed_run_is_run_again(site: Site, after: Site, instant: str) -> None:
    """Must survive: what was published, for a reader who asks all the while; then the whole new night."""
    before, old = site.published(), site.table("runs")["run_id"][0]
    change_the_log(site)
    with a_reader(site) as told:
        kill(site, instant)
        assert seen(site.published()) == before
        assert set(told) == {old}
        assert site.score().code == 0
    assert set(told) <= {old, site.table("runs")["run_id"][0]}
    assert told.total() > 10
    assert site.published().keys() == before.keys()
    assert not list(site.work.rglob(".unfinished-*"))
    assert not list((site.work / "series=s" / "scratch").iterdir())
    for table in ("scores", "ties", "refused"):
        assert site.table(table).equals(after.table(table))


def test_a_killed_run_of_one_series_is_not_swept_by_another(site: Site) -> None:
    """The other series may be at work this very moment."""
    busy = site.warehouse / "scores" / "series=other" / "as_of=2026-03-04" / ".unfinished-0123456789ab-scores.parquet"
    busy.parent.mkdir(parents=True)
    busy.write_bytes(b"half")
    assert site.score().code == 0
    assert busy.read_bytes() == b"half"


def test_the_same_night_twice_leaves_the_same_files_and_rows(site: Site) -> None:
    before = site.published()
    scores, ties = site.table("scores"), site.table("ties")
    assert site.score().code == 0
    now = site.published()
    assert now.keys() == before.keys()
    changed = {name for name in now if now[name] != before[name]}
    assert changed <= {f"runs/series=s/as_of=2026-03-04/{name}" for name in ("run.json", "runs.parquet")}
    assert site.table("scores").equals(scores)
    assert site.table("ties").equals(ties)


def test_another_night_stands_beside(site: Site) -> None:
    before = site.published()
    site.write(rows(AS_OF + timedelta(days=1)), AS_OF + timedelta(days=1))
    assert isthmus("score", site.config, "--as-of", AS_OF + timedelta(days=1)).code == 0
    now = site.published()
    assert {name: now[name] for name in before} == before
    assert len(now) == len(before) + 6
