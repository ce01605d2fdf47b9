"""Nights one after another: what is read again, what is restated, what a backfill does, where a killed run goes on."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections import Counter
from datetime import date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from isthmus import nightly
from isthmus.deadline import Deadline
from isthmus.errors import TryAgain
from isthmus.ingest import window
from isthmus.settings import Settings
from nights import AS_OF, DAYS, PAIRS, Said, Site, isthmus, rows

BEFORE = AS_OF - timedelta(days=1)


@pytest.fixture
def read(monkeypatch: pytest.MonkeyPatch) -> Counter[str]:
    """How often a part was read, and a day added up, since the counter was cleared."""
    count: Counter[str] = Counter()

    def counting(name: str, function: Any) -> Any:
        def counted(task: Any) -> Any:
            count[name] += 1
            return function(task)

        return counted

    monkeypatch.setattr(window, "read_part", counting("parts", window.read_part))
    monkeypatch.setattr(window, "add_up_rows", counting("added", window.add_up_rows))
    monkeypatch.setattr(window, "add_up_day", counting("days", window.add_up_day))
    return count


@pytest.fixture
def site(tmp_path: Path) -> Site:
    return Site(tmp_path / "site", '[score]\nmethod = "exact"')


def night(site: Site, as_of: date, *more: object) -> Said:
    return isthmus("score", site.config, "--as-of", as_of, *more)


def tables(site: Site, as_of: date = AS_OF) -> dict[str, bytes]:
    folder = f"series=s/as_of={as_of}"
    return {name: (site.warehouse / name / folder / f"{name}.parquet").read_bytes() for name in ("scores", "ties")}


def record(site: Site, as_of: date = AS_OF) -> dict[str, Any]:
    told: dict[str, Any] = json.loads((site.warehouse / f"runs/series=s/as_of={as_of}/run.json").read_text())
    return told


def anew(site: Site, place: Path) -> Site:
    """The same log and settings without anything that was kept."""
    shutil.copytree(site.root, place, ignore=shutil.ignore_patterns("work", "warehouse"))
    other = Site(place, log=False)
    other.config.write_text(site.config.read_text())
    return other


# --- what is read again --------------------------------------------------------------------------------------------


def test_a_repeated_night_reads_nothing(site: Site, read: Counter[str]) -> None:
    assert night(site, AS_OF).code == 0
    assert read == {"parts": 4, "days": 4}
    before = tables(site)
    read.clear()
    assert night(site, AS_OF).code == 0
    assert not read
    assert tables(site) == before


def test_only_a_day_whose_file_changed_is_read_again(site: Site, read: Counter[str], tmp_path: Path) -> None:
    assert night(site, AS_OF).code == 0
    read.clear()
    site.write(rows(DAYS[1], [*PAIRS, ("gus@k8", "hal@k9")]), DAYS[1])
    assert night(site, AS_OF).code == 0
    assert read == {"parts": 1, "days": 1}
    other = anew(site, tmp_path / "other")
    assert night(other, AS_OF).code == 0
    assert site.table("scores").equals(other.table("scores"))


def test_the_next_night_reads_its_new_day_only(site: Site, read: Counter[str]) -> None:
    site.write(rows(AS_OF + timedelta(days=1)), AS_OF + timedelta(days=1))
    assert night(site, AS_OF).code == 0
    read.clear()
    assert night(site, AS_OF + timedelta(days=1)).code == 0
    assert read == {"parts": 1, "days": 1}


def test_with_ids_only_what_duplicates_touch_is_added_up_again(tmp_path: Path, read: Counter[str]) -> None:
    site = Site(tmp_path / "site")
    site.settings('[score]\nmethod = "exact"', columns='id = "key"')
    for day in DAYS:
        site.write(rows(day).with_columns(key=pl.format("{}-{}", pl.lit(str(day)), pl.int_range(pl.len()))), day)
    assert night(site, AS_OF).code == 0
    assert read == {"parts": 4, "added": 4, "days": 4}
    read.clear()
    # the last day delivers three rows of the first one again
    late = pl.concat([pl.read_parquet(site.file(DAYS[3])), pl.read_parquet(site.file(DAYS[0])).head(3)])
    site.write(late, DAYS[3])
    said = night(site, AS_OF)
    assert said.code == 0
    assert "3 duplicate" in said.err
    assert read == {"parts": 1, "added": 1, "days": 1}


@pytest.mark.parametrize("kind", ["parts", "days"])
@pytest.mark.parametrize("harm", ["truncated", "altered", "gone"])
def test_what_was_damaged_is_made_anew(site: Site, read: Counter[str], kind: str, harm: str) -> None:
    """The last day's table has to be made again, from a part of which a file is not what was kept."""
    assert night(site, AS_OF).code == 0
    before = tables(site)
    day = next((site.reading / "days").glob(f"{DAYS[3]}-*"))
    if kind == "days":
        harmed = day / "ties.arrow"
    else:
        shutil.rmtree(day)
        number = (DAYS[3] - date(1970, 1, 1)).days
        harmed = next((site.reading / "parts").glob(f"*/ties-{number}.arrow"))
    raw = harmed.read_bytes()
    if harm == "gone":
        harmed.unlink()
    else:
        harmed.write_bytes(raw[:-9] if harm == "truncated" else raw[:-9] + bytes([raw[-9] ^ 1]) + raw[-8:])
    read.clear()
    assert night(site, AS_OF).code == 0
    assert read == ({"days": 1} if kind == "days" else {"parts": 1, "days": 1})
    assert tables(site) == before


def test_what_is_not_used_for_long_goes(site: Site) -> None:
    assert night(site, AS_OF).code == 0
    kept = list((site.reading).glob("*/*/contents.json"))
    assert len(kept) == 8
    old = time.time() - 11 * 86_400
    stray = site.reading / "parts" / "stray"
    stray.mkdir()
    (stray / "contents.json").write_text('{"facts": {}, "files": {}}')
    for path in [*kept, stray / "contents.json"]:
        os.utime(path, (old, old))
    assert night(site, AS_OF).code == 0
    assert not stray.exists()
    assert all(path.exists() for path in kept)


# --- late rows and backfill ----------------------------------------------------------------------------------------


@pytest.fixture
def two_nights(tmp_path: Path) -> Site:
    """Two nights of three days each, then a late row on a day that both hold."""
    site = Site(tmp_path / "site", '[score]\nmethod = "exact"')
    site.config.write_text(site.config.read_text().replace("days = 4", "days = 3"))
    for as_of in (BEFORE, AS_OF):
        assert night(site, as_of).code == 0
    site.write(rows(DAYS[1], [*PAIRS, ("gus@k8", "hal@k9")]), DAYS[1])
    return site


def test_restate(two_nights: Site, tmp_path: Path) -> None:
    site = two_nights
    said = night(site, AS_OF)
    assert said.code == 0
    assert f"{BEFORE}  restated, revision 2" in said.err
    assert [record(site, as_of)["revision"] for as_of in (BEFORE, AS_OF)] == [2, 2]
    other = anew(site, tmp_path / "other")
    for as_of in (BEFORE, AS_OF):
        assert night(other, as_of).code == 0
        for name in ("scores", "ties"):
            one, two = (
                pl.read_parquet(each.warehouse / name / f"series=s/as_of={as_of}/{name}.parquet")
                for each in (site, other)
            )
            assert one.equals(two)
    said = night(site, AS_OF)
    assert "restated" not in said.err
    assert record(site)["revision"] == 2


def test_freeze(two_nights: Site) -> None:
    site = two_nights
    site.config.write_text(site.config.read_text().replace("[run]\n", '[run]\nlate = "freeze"\n'))
    before = tables(site, BEFORE)
    said = night(site, AS_OF)
    assert said.code == 0
    assert f"they are left as they are: {BEFORE}" in said.err
    assert tables(site, BEFORE) == before
    assert record(site)["late"] == {"policy": "freeze", "not_restated": [str(BEFORE)]}
    assert record(site, BEFORE)["revision"] == 1
    said = isthmus("backfill", site.config, "--from", BEFORE, "--to", AS_OF)
    assert said.code == 0
    assert tables(site, BEFORE) == before
    assert isthmus("backfill", site.config, "--from", BEFORE, "--to", AS_OF, "--again").code == 0
    assert record(site, BEFORE)["revision"] == 2


def test_nights_of_other_settings_are_told_and_left(two_nights: Site) -> None:
    site = two_nights
    site.config.write_text(site.config.read_text().replace("[score]", "[score]\ntop = 7"))
    said = night(site, AS_OF)
    assert said.code == 0
    assert f"other settings published has changed; they are left as they are: {BEFORE}" in said.err
    assert record(site, BEFORE)["revision"] == 1


def test_a_day_cut_short_afterwards_restates_nothing(two_nights: Site) -> None:
    """Neither tonight, which holds the day as well, nor the night before."""
    site = two_nights
    assert night(site, AS_OF).code == 0
    before = [tables(site, as_of) for as_of in (BEFORE, AS_OF)]
    site.write(rows(DAYS[2], PAIRS[:2]), DAYS[2])
    said = night(site, AS_OF)
    assert said.code == 65
    assert f"redelivery: {DAYS[2]} has 2 rows, and had 8 when it was counted before" in said.err
    said = night(site, AS_OF, "--accept", "redelivery")
    assert said.code == 65
    assert f"night of {BEFORE}: a gate stops the night" in said.err
    assert tables(site, BEFORE) == before[0]
    assert tables(site, AS_OF) != before[1]
    # once somebody has looked at that night too, late rows may restate it again
    assert night(site, BEFORE, "--accept", "redelivery").code == 0
    site.write(rows(DAYS[2], PAIRS[:3]), DAYS[2])
    said = night(site, AS_OF)
    assert said.code == 0
    assert f"{BEFORE}  restated, revision 4" in said.err


def test_a_log_that_is_kept_for_a_shorter_time_restates_nothing(two_nights: Site) -> None:
    site = two_nights
    assert night(site, AS_OF).code == 0
    before = tables(site, BEFORE)
    shutil.rmtree(site.file(DAYS[0]).parent)
    shutil.rmtree(site.file(DAYS[1]).parent)
    day = AS_OF + timedelta(days=1)
    site.write(rows(day), day)
    said = night(site, day)
    assert said.code == 0
    assert "restated" not in said.err
    assert tables(site, BEFORE) == before


def test_a_late_file_with_a_new_name_is_noticed(two_nights: Site) -> None:
    site = two_nights
    assert night(site, AS_OF).code == 0
    rows(DAYS[0], [("ivy@k1", "jan@k2")]).write_parquet(site.file(DAYS[0]).with_name("part-late.parquet"))
    said = night(site, AS_OF)
    assert f"{BEFORE}  restated, revision 3" in said.err


def test_a_night_by_other_settings_is_not_restated(two_nights: Site) -> None:
    site = two_nights
    site.config.write_text(site.config.read_text() + "\n[graph]\ndirected = false\n")
    assert "restated" not in night(site, AS_OF).err
    assert record(site, BEFORE)["revision"] == 1


def test_a_backfill_is_its_single_nights(tmp_path: Path) -> None:
    last = [AS_OF + timedelta(days=at) for at in range(10)]
    one, ten = (Site(tmp_path / name, '[score]\nmethod = "exact"') for name in ("one", "ten"))
    for at, day in enumerate(last):
        for site in (one, ten):
            site.write(rows(day, PAIRS[at % 3 :]), day)
    for site in (one, ten):  # the same times of change, which run.json tells
        for path in site.log.rglob("*.parquet"):
            os.utime(path, ns=(10**18, 10**18))
    said = isthmus("backfill", ten.config, "--from", last[0], "--to", last[-1])
    assert said.code == 0
    assert said.err.count("published, revision 1") == 10
    for as_of in last:
        assert night(one, as_of).code == 0
        assert tables(one, as_of) == tables(ten, as_of)
    again = isthmus("backfill", ten.config, "--from", last[0], "--to", last[-1])
    assert again.err.count("complete, skipped") == 10
    assert isthmus("backfill", ten.config, "--from", last[0], "--to", last[0], "--again").err.count("published") == 1


def test_a_backfill_ends_at_the_night_that_fails(site: Site) -> None:
    said = isthmus("backfill", site.config, "--from", AS_OF, "--to", AS_OF + timedelta(days=2))
    assert said.code == 65
    assert f"{AS_OF}  published" in said.err
    assert f"{AS_OF + timedelta(days=1)}  failed (exit 65)" in said.err
    assert str(AS_OF + timedelta(days=2)) not in said.err
    assert isthmus("backfill", site.config, "--from", AS_OF, "--to", BEFORE).code == 64


# --- deadline and stopping -----------------------------------------------------------------------------------------


def settings_with(**run: Any) -> Settings:
    return Settings.model_validate({"series": "s", "log": {"path": "log"}, "run": run})


def test_finish_by_is_the_next_such_time_and_minutes_the_shorter() -> None:
    seconds = iter([100.0, 100.0, 100.0])
    late = Deadline.of(settings_with(finish_by="05:45"), datetime(2026, 3, 4, 5, 30), lambda: next(seconds))
    assert (late.ends, late.by) == (1000.0, 'run.finish_by = "05:45"')
    early = Deadline.of(settings_with(finish_by="05:45"), datetime(2026, 3, 4, 23, 30), lambda: 0.0)
    assert (early.ends, early.by) == (1800.0, "score.minutes = 30")


def test_the_wall_clock_may_jump_once_a_night_has_begun() -> None:
    now = [50.0]
    deadline = Deadline.of(settings_with(finish_by="05:45"), datetime(2026, 3, 4, 5, 40), lambda: now[0])
    now[0] += 60  # whatever the wall clock says meanwhile
    assert deadline.left == 240.0
    assert deadline.minutes_for_scoring(1_000_000, 10_000_000) == pytest.approx((240 - 1 - 22) / 60)
    now[0] += 1e6
    assert deadline.minutes_for_scoring(10, 10) == 0.01


def test_reading_that_cannot_end_in_time_is_given_up() -> None:
    now = [0.0]
    deadline = Deadline(100.0, "score.minutes = 2", lambda: now[0])
    told: list[float] = []
    tick = deadline.reading(told.append)
    now[0] = 5.0
    tick(0.05)  # too early to tell
    now[0] = 30.0
    tick(0.3)  # 100 s in all
    now[0] = 60.0
    with pytest.raises(
        TryAgain, match=r"reading alone would take about 120 s, and score.minutes = 2 leaves less; 50% is"
    ):
        tick(0.5)
    assert told == [0.05, 0.3, 0.5]


def test_a_night_has_what_reading_left_of_its_minutes(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    asked = {}
    plan = nightly.plan_once
    monkeypatch.setattr(nightly, "plan_once", lambda *a: asked.setdefault("minutes", a[3].minutes) and plan(*a))
    assert night(site, AS_OF).code == 0
    assert 29 < asked["minutes"] < 30 - 1 / 60


def test_sigterm_ends_with_75_and_the_next_run_goes_on(site: Site, read: Counter[str]) -> None:
    program = (
        "import os, signal, sys\nfrom isthmus import cli, nightly\n"
        "nightly.measure = lambda *a, **k: os.kill(os.getpid(), signal.SIGTERM)\ncli.main(sys.argv[1:])"
    )
    command = [sys.executable, "-c", program, "score", str(site.config), "--as-of", str(AS_OF)]
    ran = subprocess.run(command, capture_output=True, text=True)
    assert ran.returncode == 75
    assert "asked to stop by SIGTERM" in ran.stderr
    assert "Traceback" not in ran.stderr
    assert not list(site.warehouse.rglob("run.json"))
    assert night(site, AS_OF).code == 0
    assert not read  # all parts and days were kept


# --- killed while measuring ----------------------------------------------------------------------------------------

KILLED_AT_A_BLOCK = """
import os, signal, sys
from isthmus import cli
from isthmus.betweenness import checkpoint
from isthmus.betweenness.engine_numba import costs, exact, paths, pivots

checkpoint.Checkpoint.__init__.__defaults__ = (0.0,)
checkpoint.SHARE = 1e9
exact.BLOCK_WORK, costs.TINY = 1, 0
pivots.BLOCK = pivots.LONGEST = 8
paths.FEWEST = paths.MOST = 64
after, *arguments = sys.argv[1:]
kept = [0]
offer = checkpoint.Checkpoint.offer

def counting(self, state):
    offer(self, state)
    kept[0] += 1
    if kept[0] == int(after):
        os.kill(os.getpid(), signal.SIGKILL)

checkpoint.Checkpoint.offer = counting
code = cli.exit_code(arguments)
print(kept[0])
sys.exit(code)
"""


@pytest.fixture(scope="module")
def crowd(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """A log of 300 parties: enough for several blocks of each method."""
    site = Site(tmp_path_factory.mktemp("crowd"), log=False)
    draw = __import__("numpy").random.default_rng(5)
    for day in DAYS:
        ends = (300 * draw.random((400, 2)) ** 1.5).astype(int).tolist()
        site.write(rows(day, [(f"p{a}", f"p{b}") for a, b in ends]), day)
    return site


@pytest.mark.parametrize(
    "score",
    ['method = "exact"', 'method = "pivots"\nsamples = 150\ntop = 0', 'method = "pivots"\ntop = 5\nseed = 3',
     'method = "paths"\nsamples = 1000\ntop = 0', 'method = "paths"\nhalf_width = 0.03\ntop = 0'],
)  # fmt: skip
def test_a_run_killed_at_any_block_ends_with_the_same_bits(crowd: Site, tmp_path: Path, score: str) -> None:
    def run(name: str, after: int) -> subprocess.CompletedProcess[str]:
        site = Site(tmp_path / name, f"[score]\n{score}", log=False)
        if not site.log.exists():
            site.log.symlink_to(crowd.log)
        command = [sys.executable, "-c", KILLED_AT_A_BLOCK, str(after), "score", str(site.config)]
        return subprocess.run([*command, "--as-of", str(AS_OF)], capture_output=True, text=True)

    whole = run("whole", -1)
    assert whole.returncode == 0, whole.stderr
    blocks = int(whole.stdout.splitlines()[-1])
    assert blocks > 3
    for _ in range(2):  # killed, gone on from there, killed again
        assert run("killed", 2).returncode == -signal.SIGKILL
        assert (tmp_path / "killed/work/series=s/checkpoint").exists()
    rest = run("killed", -1)
    assert rest.returncode == 0, rest.stderr
    assert int(rest.stdout.splitlines()[-1]) == blocks - 4
    one, two = (Site(tmp_path / name, log=False) for name in ("whole", "killed"))
    assert tables(one) == tables(two)
    assert not (tmp_path / "killed/work/series=s/checkpoint").exists()


def test_a_truncated_checkpoint_counts_as_none(tmp_path: Path) -> None:
    from isthmus.betweenness import Checkpoint

    path = tmp_path / "checkpoint"
    kept = Checkpoint(path, "a night", every=0.0)
    kept.offer(lambda: [1, 2, 3])
    assert Checkpoint(path, "a night").load() == [1, 2, 3]
    assert Checkpoint(path, "another night").load() is None
    raw = path.read_bytes()
    for damaged in (raw[:-1], raw[:20], b"", raw[:-1] + b"\0", b"\0" + raw[1:]):
        path.write_bytes(damaged)
        assert Checkpoint(path, "a night").load() is None


def test_sigterm_is_no_fault_that_anything_deals_with(site: Site) -> None:
    """Where faults are passed over, as by signals, a request to stop must not be."""
    program = (
        "import os, signal, sys\nfrom isthmus import cli\nfrom isthmus.signals import lines\n"
        "class Signal:\n"
        "    def hear(self, event, run, figures):\n"
        "        if event == 'stage_started':\n            os.kill(os.getpid(), signal.SIGTERM)\n"
        "lines.signal = lambda settings: Signal()\ncli.main(sys.argv[1:])"
    )
    site.config.write_text(site.config.read_text() + '\n[signals]\nlog = "nights.jsonl"\n')
    command = [sys.executable, "-c", program, "score", str(site.config), "--as-of", str(AS_OF)]
    ran = subprocess.run(command, capture_output=True, text=True)
    assert ran.returncode == 75
    assert "asked to stop by SIGTERM" in ran.stderr
    assert not list(site.warehouse.rglob("run.json"))


def test_a_night_before_whose_scores_are_damaged_stops_nothing(site: Site) -> None:
    assert night(site, AS_OF).code == 0
    day = AS_OF + timedelta(days=1)
    site.write(rows(day), day)
    (site.warehouse / f"scores/series=s/as_of={AS_OF}/scores.parquet").write_bytes(b"no Parquet")
    assert night(site, day).code == 0
    states = {gate["gate"]: gate["state"] for gate in record(site, day)["gates"]}
    assert states["overlap"] == "nothing to compare with"
    assert states["component"] == "ok"
