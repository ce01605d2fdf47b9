"""A night in a folder switches as a whole, whatever happens meanwhile."""

from __future__ import annotations

import ctypes
import errno
import json
import os
import shutil
import subprocess
import sys
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import duckdb
import numpy as np
import polars as pl
import pyarrow.dataset
import pytest

from isthmus.errors import StoreError
from isthmus.store import File, Folder

NIGHT = "series=s/as_of=2026-03-04"
NAMES = [f"{table}/{NIGHT}/{table}.parquet" for table in ("scores", "ties", "refused", "runs")]
NAMES.append(f"runs/{NIGHT}/run.json")


BLANK = "nothing yet"


def files(text: str, names: list[str] = NAMES) -> list[File]:
    """As a night is published: a blank of each table, and no run.json before its time."""

    def file(name: str) -> File:
        blank = None if name.endswith(".json") else lambda path: path.write_text(BLANK)
        return File(name, lambda path: path.write_text(text), blank)

    return [file(name) for name in names]


def table(name: str, frame: pl.DataFrame) -> File:
    return File(name, frame.write_parquet, frame.clear().write_parquet)


@contextmanager
def free() -> Iterator[None]:
    """The guard of somebody whom nobody disturbs."""
    yield


def publish(root: Path, text: str, names: list[str] = NAMES) -> None:
    Folder(root).publish(NIGHT, files(text, names), free)


def seen(root: Path) -> dict[str, str]:
    """What readers see, with links followed: nothing whose path has a hidden part."""
    found = {str(path.relative_to(root)): path for path in root.rglob("*") if path.is_file()}
    return {name: path.read_text() for name, path in found.items() if not any(p[0] == "." for p in Path(name).parts)}


def everything(root: Path) -> set[str]:
    return {str(path.relative_to(root)) for path in root.rglob("*")}


def generations(root: Path) -> list[str]:
    return sorted(path.name for path in (root / ".nights" / NIGHT).iterdir() if path.name != "current")


def plain(root: Path, text: str, names: list[str] = NAMES) -> None:
    """A night as earlier versions left it."""
    for name in names:
        (root / name).parent.mkdir(parents=True, exist_ok=True)
        (root / name).write_text(text)


def test_public_files_are_links_through_one(tmp_path: Path) -> None:
    publish(tmp_path, "1")
    links = {name: os.readlink(tmp_path / name) for name in NAMES}
    assert links[NAMES[0]] == f"../../../.nights/{NIGHT}/current/scores.parquet.data"
    publish(tmp_path, "2")
    assert {name: os.readlink(tmp_path / name) for name in NAMES} == links
    assert seen(tmp_path) == dict.fromkeys(NAMES, "2")


def test_the_generation_before_stays_for_readers_that_hold_its_path(tmp_path: Path) -> None:
    publish(tmp_path, "1")
    held = (tmp_path / NAMES[0]).resolve()
    publish(tmp_path, "2")
    assert held.read_text() == "1"
    publish(tmp_path, "3")
    assert not held.exists()
    assert len(generations(tmp_path)) == 2


def test_a_first_publication_is_one_instant(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Readers find blank tables, and then all of the night."""
    states = []
    rename = os.replace

    def note(source: Path, target: Path) -> None:
        rename(source, target)
        states.append(seen(tmp_path))

    monkeypatch.setattr(os, "replace", note)
    publish(tmp_path, "1")
    *before, last = states
    assert len(before) == 1 + len(NAMES)
    assert {text for state in before for text in state.values()} == {BLANK}
    assert last == dict.fromkeys(NAMES, "1")
    assert len(generations(tmp_path)) == 1


def test_readers_that_search_for_any_parquet_meet_no_half_made_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """DuckDB and Polars find hidden files too when asked for `*.parquet`."""
    found = set()
    for name in ("replace", "symlink", "fsync"):
        call = getattr(os, name)
        monkeypatch.setattr(
            os, name, lambda *a, call=call: (call(*a), found.update(tmp_path.glob("[a-z]*/**/*.parquet")))[0]
        )
    publish(tmp_path, "1")
    publish(tmp_path, "2")
    assert {path.name for path in found} == {Path(name).name for name in NAMES[:-1]}


def test_a_table_that_is_new_appears_with_the_others(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    publish(tmp_path, "old", NAMES[1:])
    rename = os.replace

    def note(source: Path, target: Path) -> None:
        rename(source, target)
        state = seen(tmp_path)
        new = state.pop(NAMES[0], BLANK)
        assert (new, set(state.values())) in ((BLANK, {"old"}), ("new", {"new"}))

    monkeypatch.setattr(os, "replace", note)
    publish(tmp_path, "new")
    assert seen(tmp_path) == dict.fromkeys(NAMES, "new")


def test_a_night_that_stayed_blank_is_swept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A run was killed right before its first switch, and that night is never run again."""
    publish(tmp_path, "1")
    with monkeypatch.context() as patched:
        patched.setattr("isthmus.store.folder._switch", lambda *_: os._exit(9))
        child = os.fork()
        if not child:
            Folder(tmp_path).publish(
                "series=s/as_of=2026-03-05", files("1", [n.replace("-04", "-05") for n in NAMES]), free
            )
        assert os.waitpid(child, 0)[1] == 9 << 8
    assert Counter(seen(tmp_path).values()) == {"1": len(NAMES), BLANK: len(NAMES) - 1}
    Folder(tmp_path).sweep("s")
    assert seen(tmp_path) == dict.fromkeys(NAMES, "1")


@pytest.mark.parametrize("there", [NAMES, NAMES[:2], NAMES[-1:]])
@pytest.mark.parametrize("hard_links", [True, False])
def test_a_night_of_plain_files_is_never_missing_or_mixed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, there: list[str], hard_links: bool
) -> None:
    plain(tmp_path, "old", there)
    states = []
    rename = os.replace

    def note(source: Path, target: Path) -> None:
        rename(source, target)
        states.append(seen(tmp_path))

    monkeypatch.setattr(os, "replace", note)
    if not hard_links:
        monkeypatch.setattr(os, "link", lambda *_: (_ for _ in ()).throw(OSError(errno.EPERM, "none here")))
    publish(tmp_path, "new")
    for state in states:
        assert set(there) <= set(state)
        assert set(state.values()) - {BLANK} in ({"old"}, {"new"})
        assert {state[name] for name in there} == set(state.values()) - {BLANK}
    assert seen(tmp_path) == dict.fromkeys(NAMES, "new")
    assert states[0] == dict.fromkeys(there, "old")


@pytest.mark.parametrize("follow", [True, False])
def test_a_copied_warehouse_goes_on(tmp_path: Path, follow: bool) -> None:
    publish(tmp_path / "one", "1")
    publish(tmp_path / "one", "2")
    shutil.copytree(tmp_path / "one", tmp_path / "two", symlinks=not follow)
    assert seen(tmp_path / "two") == dict.fromkeys(NAMES, "2")
    Folder(tmp_path / "two").sweep("s")
    assert seen(tmp_path / "two") == dict.fromkeys(NAMES, "2")
    publish(tmp_path / "two", "3")
    assert seen(tmp_path / "two") == dict.fromkeys(NAMES, "3")
    assert seen(tmp_path / "one") == dict.fromkeys(NAMES, "2")


def test_a_table_folder_that_lies_elsewhere(tmp_path: Path) -> None:
    (tmp_path / "disk" / "far" / "scores").mkdir(parents=True)
    (tmp_path / "wh").mkdir()
    (tmp_path / "wh" / "scores").symlink_to(tmp_path / "disk" / "far" / "scores")
    publish(tmp_path / "wh", "1")
    assert (tmp_path / "wh" / NAMES[0]).read_text() == "1"


@pytest.mark.parametrize("glob", ["scores/*/*/scores.parquet", "scores/**/*.parquet", "**/scores.parquet"])
def test_readers_find_one_night_of_one(tmp_path: Path, glob: str) -> None:
    frame = pl.DataFrame({"party": ["a", "b"]})
    for _ in range(2):
        Folder(tmp_path).publish(NIGHT, [table(NAMES[0], frame)], free)
    found = duckdb.sql(f"SELECT party, series FROM read_parquet('{tmp_path}/{glob}', hive_partitioning = true)")
    assert sorted(found.fetchall()) == [("a", "s"), ("b", "s")]
    assert pl.read_parquet(tmp_path / glob).height == 2
    assert pyarrow.dataset.dataset(tmp_path / "scores", partitioning="hive").to_table().num_rows == 2


# --- what fails ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("before", ["nothing", "plain", "published"])
@pytest.mark.parametrize("call", ["replace", "symlink", "fsync", "mkdir", "write"])
def test_every_call_that_can_fail_leaves_what_was_there(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, before: str, call: str
) -> None:
    """Each call in turn: the first time, the second time, .. until a publication gets through."""
    for at in range(99):
        root = tmp_path / str(at)
        root.mkdir()
        if before == "plain":
            plain(root, "old")
        elif before == "published":
            publish(root, "old")
        was, calls = seen(root), Counter[str]()
        with monkeypatch.context() as patched:
            real = Path.write_text if call == "write" else getattr(os, call)

            def fail(*args: object, real=real, calls=calls, at=at, **more: object) -> object:
                calls[call] += 1
                if calls[call] == at + 1:
                    raise OSError(errno.ENOSPC, "No space left on device", "somewhere")
                return real(*args, **more)

            patched.setattr(*((Path, "write_text", fail) if call == "write" else (os, call, fail)))
            said = attempt(lambda root=root: publish(root, "new"))
        if calls[call] > at:
            assert seen(root) == (was if said else dict.fromkeys(NAMES, "new")), f"{call} number {at}"
            if said:
                assert "No space left on device" in said
                assert "disk has room" in said
            continue
        assert seen(root) == dict.fromkeys(NAMES, "new")
        break
    assert 0 < at < 98
    Folder(root).sweep("s")
    publish(root, "last")
    assert seen(root) == dict.fromkeys(NAMES, "last")
    assert not [name for name in everything(root) if ".unfinished-" in name]


def attempt(act: Callable[[], object]) -> str:
    """What a StoreError says; empty: there was none."""
    try:
        act()
    except StoreError as error:
        return str(error)
    return ""


def mount(target: Path, kind: str, flags: int, options: str) -> bool:
    """Whether this user may and the kernel did."""
    if sys.platform != "linux":
        return False
    libc = ctypes.CDLL(None, use_errno=True)
    return libc.mount(b"isthmus-test", bytes(target), kind.encode(), flags, options.encode()) == 0


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A disk of one mebibyte."""
    root = tmp_path / "disk"
    root.mkdir()
    if not mount(root, "tmpfs", 0, "size=1m"):
        pytest.skip("only root may mount a small disk; ENOSPC is injected call by call above")
    try:
        yield root
    finally:
        ctypes.CDLL(None).umount2(bytes(root), 2)


def test_a_disk_that_is_full(small_disk: Path) -> None:
    publish(small_disk, "o" * 50_000)
    was = seen(small_disk)
    with pytest.raises(StoreError, match=r"cannot write.*No space left.*disk has room"):
        publish(small_disk, "n" * 300_000)
    assert seen(small_disk) == was
    publish(small_disk, "m" * 50_000)  # and the room that the failed one took is free again
    assert seen(small_disk) == dict.fromkeys(NAMES, "m" * 50_000)


def test_a_disk_that_is_full_under_polars(small_disk: Path) -> None:
    """Polars wraps the disk's refusal in an error of its own."""
    publish(small_disk, "old")
    was = seen(small_disk)
    frame = pl.DataFrame({"noise": np.random.default_rng(1).random(1 << 18)})
    with pytest.raises(StoreError, match=r"cannot write .*No space left.*disk has room"):
        Folder(small_disk).publish(NIGHT, [table(NAMES[0], frame), *files("new", NAMES[1:])], free)
    assert seen(small_disk) == was


def test_a_folder_that_is_read_only(small_disk: Path) -> None:
    publish(small_disk, "old")
    was, remount_read_only = seen(small_disk), 32 | 1
    assert mount(small_disk, "tmpfs", remount_read_only, "")
    for act in (lambda: publish(small_disk, "new"), lambda: Folder(small_disk).register("s").hold().__enter__()):
        with pytest.raises(StoreError, match=r"Read-only file system.*may write there"):
            act()
    assert seen(small_disk) == was


def test_a_file_system_without_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def none(*_: object) -> None:
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "symlink", none)
    with pytest.raises(StoreError, match=r"run\.warehouse: .* no symbolic links.*name a folder on another"):
        Folder(tmp_path).claim(1, "run.warehouse")
    assert not [name for name in everything(tmp_path) if ".unfinished-" in name]


def test_a_generation_that_a_killed_run_left_is_swept(tmp_path: Path) -> None:
    for text in "123":
        publish(tmp_path, text)
    keep = generations(tmp_path)
    for name in ("000009-dead", "000001-dead"):
        (tmp_path / ".nights" / NIGHT / name).mkdir()
    Folder(tmp_path).sweep("other")
    assert len(generations(tmp_path)) == 4
    Folder(tmp_path).sweep("s")
    assert generations(tmp_path) == keep
    assert seen(tmp_path) == dict.fromkeys(NAMES, "3")


@pytest.mark.parametrize(("scheme", "package", "extra"), [("s3", "s3fs", "s3"), ("az", "adlfs", "azure")])
def test_a_driver_that_is_missing_is_named(scheme: str, package: str, extra: str) -> None:
    code = f"import sys; sys.modules['{package}'] = None; from isthmus import store; store.place('{scheme}://b/w')"
    ran = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    told = (
        f"SettingsError: {scheme}:// needs the driver {package}, which is not installed: pip install 'isthmus[{extra}]'"
    )
    assert told in ran.stderr


# --- kill -9 -------------------------------------------------------------------------------------------------------

# Forks a child for each kill, so that no time goes into starting Python: the child takes the lease from its dead
# predecessor and publishes run after run until it dies.
KILLER = """
import itertools, os, random, signal, sys, time
from pathlib import Path
from isthmus import store

root, prepared, kills, first = Path(sys.argv[1]), Path(sys.argv[2]), int(sys.argv[3]), sys.argv[4] == "first"
runs = [{f.name: f.read_bytes() for f in run.iterdir()} for run in sorted(prepared.iterdir())]
draw = random.Random(4)

def publish(root, start, ends):
    place = store.place(root)
    with store.lease(place, "series=s") as held:
        place.sweep("s")
        for at in range(start, ends):
            run = runs[at % len(runs)]
            files = [
                store.File(f"{table}/series=s/as_of=2026-03-04/{name}",
                           lambda path, data=run[name]: path.write_bytes(data),
                           None if name == "run.json" else lambda path: path.write_bytes(b"blank"))
                for table, name in (("scores", "scores.parquet"), ("runs", "runs.parquet"), ("runs", "run.json"))
            ]
            place.publish("series=s/as_of=2026-03-04", files, held.guard)
            time.sleep(0 if first else 0.01)

def forked(act):
    child = os.fork()
    if not child:
        try:
            act()
        finally:
            os._exit(1)
    return child

def die_before(number):
    # instead of making that call, counted over all calls that change what a folder holds
    calls = itertools.count(1)
    def watched(call):
        def act(*arguments, **more):
            if next(calls) == number:
                os.kill(os.getpid(), signal.SIGKILL)
            return call(*arguments, **more)
        return act
    for name in ("replace", "symlink", "fsync", "mkdir", "unlink", "rmdir"):
        setattr(os, name, watched(getattr(os, name)))

if not first:
    for _ in range(kills):
        start = draw.randrange(len(runs))
        child = forked(lambda: publish(root, start, 10**9))
        time.sleep(draw.uniform(0.01, 0.08))
        os.kill(child, signal.SIGKILL)
        assert os.WIFSIGNALED(os.waitpid(child, 0)[1]), "the publisher failed by itself"
    publish(root, 0, 1)
for number in range(1, kills) if first else ():
    here = root / str(number)
    def last(): die_before(number); publish(here, 0, 1); os._exit(0)
    status = os.waitpid(forked(last), 0)[1]
    seen = {f.name: f.read_bytes() for f in here.glob("[a-z]*/*/*/*") if not f.name.startswith(".") and f.exists()}
    blank = set(seen.values()) <= {b"blank"}
    assert blank or seen == runs[0]
    print("nothing" if not seen else "blank" if blank else "whole", flush=True)
    publish(here, 1, 2)
    assert {f.name: f.read_bytes() for f in here.glob("[a-z]*/*/*/*")} == runs[1]
    assert len(list((here / ".nights/series=s/as_of=2026-03-04").iterdir())) <= 3
    if not os.WIFSIGNALED(status):
        assert status == 0
        break
else:
    assert not first, "more calls than were tried"
"""

READER = """
import os, sys
from pathlib import Path
import duckdb

root, stop = sys.argv[1], Path(sys.argv[2])
home = f"{root}/.nights/series=s/as_of=2026-03-04"
query = '''SELECT count(*), count(DISTINCT run_id), any_value(parties), any_value(total)
FROM read_parquet('{scores}') s JOIN read_parquet('{runs}') r USING (run_id)'''
public = {t: f"{root}/{t}/{g}/{t}.parquet" for t, g in (("scores", "*/*"), ("runs", "**"))}
told = dict(whole=0, empty=0, failed=0, pinned=0, swept=0, wrong=0)

def now():
    return os.readlink(f"{home}/current")

def ask(scores, runs):
    try:
        rows, ids, parties, total = duckdb.sql(query.format(scores=scores, runs=runs)).fetchall()[0]
    except duckdb.Error as error:
        return "failed", error
    whole = ids == 1 and rows == parties == total
    return "whole" if whole else "mixed" if rows else "empty", (rows, ids, parties, total)

def complain(found, what):
    print(found, what, file=sys.stderr)
    return "wrong"

while not stop.exists():
    was, found, what = now(), *ask(**public)
    # One table before the switch, the other after it. And DuckDB opens a file when it plans and again when it reads, so
    # a switch in between can end in its error. Rows of two runs, or not all of one, are wrong at any time.
    told[found if found == "whole" or found in ("empty", "failed") and now() != was else complain(found, what)] += 1
    number, pinned = int(now().split("-")[0]), os.path.realpath(f"{home}/current")
    found, what = ask(f"{pinned}/scores.parquet.data", f"{pinned}/runs.parquet.data")
    swept = found == "failed" and int(now().split("-")[0]) >= number + 2
    told["pinned" if found == "whole" else "swept" if swept else complain(found, what)] += 1
import json
print(json.dumps(told))
"""
KILLS, MOST_CALLS = 80, 200


def prepare(folder: Path) -> Path:
    """Runs of different sizes, each with tables that name it."""
    for at in range(5):
        run, parties = folder / str(at), 1000 * (at + 1)
        run.mkdir(parents=True)
        name = pl.lit(f"run-{at}").alias("run_id")
        scores = pl.DataFrame({"party": [f"{at}-{party}" for party in range(parties)]})
        scores.with_columns(name, parties=pl.lit(parties)).write_parquet(run / "scores.parquet")
        pl.DataFrame({"run_id": [f"run-{at}"], "total": [parties]}).write_parquet(run / "runs.parquet")
        (run / "run.json").write_text(f'{{"run_id": "run-{at}"}}')
    return folder


READ = [f"scores/{NIGHT}/scores.parquet", f"runs/{NIGHT}/runs.parquet", f"runs/{NIGHT}/run.json"]


def copier(source: Path):
    return lambda path: shutil.copy(source, path)


def start(program: str, *arguments: object) -> subprocess.Popen[str]:
    command = [sys.executable, "-c", program, *map(str, arguments)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


needs_proc = pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="a dead holder is told by /proc")


@needs_proc
def test_killed_at_any_instant_a_reader_finds_one_whole_run(tmp_path: Path) -> None:
    """Must survive: at every instant the public paths name one whole night."""
    prepared, root, stop = prepare(tmp_path / "prepared"), tmp_path / "wh", tmp_path / "stop"
    Folder(root).publish(
        NIGHT, [File(name, copier(prepared / "0" / Path(name).name), Path.touch) for name in READ], free
    )
    reader, killer = start(READER, root, stop), start(KILLER, root, prepared, KILLS, "again")
    try:
        err = killer.communicate(timeout=60)[1]
        assert killer.returncode == 0, err
        stop.touch()
        told, complaints = reader.communicate(timeout=10)
        assert reader.returncode == 0, complaints
    finally:
        killer.kill()
        reader.kill()
    counts = json.loads(told)
    print(counts)
    assert counts["wrong"] == 0, complaints
    assert counts["whole"] > KILLS
    assert counts["pinned"] > KILLS
    assert len(generations(root)) <= 2
    assert not [name for name in everything(root) if ".unfinished-" in name and ".leases" not in name]


@needs_proc
def test_killed_before_every_call_of_a_first_publication(tmp_path: Path) -> None:
    """Must survive: no night at all, or all of it; the next run completes it and tidies up."""
    killer = start(KILLER, tmp_path / "wh", prepare(tmp_path / "prepared"), MOST_CALLS, "first")
    out, err = killer.communicate(timeout=60)
    assert killer.returncode == 0, err
    found = Counter(out.split())
    print(found)
    assert set(found) == {"nothing", "blank", "whole"}
