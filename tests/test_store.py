"""Files appear whole or not at all, and come back when something fails half-way."""

from __future__ import annotations

import errno
import json
import os
import shutil
from pathlib import Path

import pytest

from isthmus.errors import SettingsError, StoreError
from isthmus.store import Batch, claim, examine, fresh, story, sweep


def files(folder: Path) -> dict[str, str]:
    return {str(path.relative_to(folder)): path.read_text() for path in folder.rglob("*") if path.is_file()}


def batch_of(folder: Path, text: str) -> Batch:
    batch = Batch()
    for name in ("a/one", "b/two", "c/last"):
        batch.add(folder / name, lambda path: path.write_text(text))
    return batch


def test_nothing_is_seen_before_the_commit(tmp_path: Path) -> None:
    with batch_of(tmp_path, "old") as batch:
        batch.commit()
    old = files(tmp_path)
    assert old == {"a/one": "old", "b/two": "old", "c/last": "old"}
    with batch_of(tmp_path, "new") as batch:
        now = files(tmp_path)
        assert {name: now[name] for name in old} == old
        assert all(Path(name).name.startswith(".unfinished-") for name in now.keys() - old.keys())
        batch.commit()
    assert files(tmp_path) == {"a/one": "new", "b/two": "new", "c/last": "new"}


def test_what_is_not_committed_goes(tmp_path: Path) -> None:
    with pytest.raises(ZeroDivisionError), batch_of(tmp_path, "new"):
        raise ZeroDivisionError
    assert files(tmp_path) == {}


def test_the_last_file_is_away_while_the_others_change(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with batch_of(tmp_path, "old") as batch:
        batch.commit()
    seen = []
    rename = os.replace

    def watch(source: Path, target: Path) -> None:
        seen.append((target.name, (tmp_path / "c/last").exists(), (tmp_path / "a/one").exists()))
        rename(source, target)

    monkeypatch.setattr(os, "replace", watch)
    with batch_of(tmp_path, "new") as batch:
        batch.commit()
    assert seen == [("one", False, True), ("two", False, True), ("last", False, True)]


@pytest.mark.parametrize("links", [True, False])
@pytest.mark.parametrize("at", [0, 1, 2])
@pytest.mark.parametrize("before", [{}, {"b/two": "old"}, {"a/one": "old", "b/two": "old", "c/last": "old"}])
@pytest.mark.parametrize("error", [OSError(errno.EACCES, "no"), KeyboardInterrupt()])
def test_a_rename_that_fails_undoes_the_others(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    links: bool,
    at: int,
    before: dict[str, str],
    error: BaseException,
) -> None:
    for name, text in before.items():
        (tmp_path / name).parent.mkdir()
        (tmp_path / name).write_text(text)
    rename, calls = os.replace, []

    def fail_once(source: Path, target: Path) -> None:
        calls.append(target)
        if len(calls) == at + 1:
            raise error
        rename(source, target)

    def no_links(*_: object) -> None:
        raise OSError(errno.EPERM, "no hard links here")

    monkeypatch.setattr(os, "replace", fail_once)
    if not links:
        monkeypatch.setattr(os, "link", no_links)
    expected = StoreError if isinstance(error, OSError) else KeyboardInterrupt
    with pytest.raises(expected), batch_of(tmp_path, "new") as batch:
        batch.commit()
    assert files(tmp_path) == before


def test_nothing_changes_when_the_old_files_cannot_be_kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with batch_of(tmp_path, "old") as batch:
        batch.commit()

    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(os, "link", full)
    monkeypatch.setattr(shutil, "copy2", full)
    with pytest.raises(StoreError, match="cannot publish: No space left"), batch_of(tmp_path, "new") as batch:
        batch.commit()
    assert files(tmp_path) == {"a/one": "old", "b/two": "old", "c/last": "old"}


def test_a_writer_that_fails_leaves_nothing(tmp_path: Path) -> None:
    def half(path: Path) -> None:
        path.write_text("ha")
        raise OSError(errno.ENOSPC, "No space left on device", str(path))

    with pytest.raises(StoreError, match=r"cannot write .*No space left.*disk has room"), Batch() as batch:
        batch.add(tmp_path / "file", half)
    assert files(tmp_path) == {}


def test_story_names_the_file_and_what_to_do() -> None:
    told = "cannot count sheep /pen: Is a directory; check that the folder exists"
    with pytest.raises(StoreError, match=told), story("count sheep"):
        raise IsADirectoryError(errno.EISDIR, "Is a directory", "/pen")


def test_sweep_takes_leftovers_only_and_only_where_asked(tmp_path: Path) -> None:
    names = [
        "scores/series=a/as_of=2026-01-01/.unfinished-0-scores.parquet",
        "scores/series=a/as_of=2026-01-01/scores.parquet",
        "runs/series=a/as_of=2026-01-02/.unfinished-1-run.json",
        "scores/series=b/as_of=2026-01-01/.unfinished-2-scores.parquet",
        ".hidden",
    ]
    for name in names:
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text("x")
    assert sweep(tmp_path, "*/series=a/*") == 2
    assert sorted(files(tmp_path)) == sorted([names[1], names[3], names[4]])
    assert sweep(tmp_path) == 1
    assert sorted(files(tmp_path)) == sorted([names[1], names[4]])
    assert sweep(tmp_path / "not there") == 0


def test_claim_marks_once_and_sweeps_its_own_leftover(tmp_path: Path) -> None:
    folder = tmp_path / "deep" / "warehouse"
    claim(folder, 3, "run.warehouse")
    assert files(folder) == {"layout.json": '{"layout": 3}\n'}
    marked = (folder / "layout.json").stat().st_mtime_ns
    (folder / ".unfinished-0-layout.json").write_text("half")
    (folder / ".unfinished-0-other").write_text("not a marker")
    claim(folder, 3, "run.warehouse")
    assert files(folder) == {"layout.json": '{"layout": 3}\n', ".unfinished-0-other": "not a marker"}
    assert (folder / "layout.json").stat().st_mtime_ns == marked


def test_an_older_layout_is_raised(tmp_path: Path) -> None:
    (tmp_path / "layout.json").write_text('{"layout": 1}')
    claim(tmp_path, 2, "run.work")
    assert json.loads((tmp_path / "layout.json").read_text()) == {"layout": 2}


def test_a_newer_layout_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "layout.json").write_text('{"layout": 3}')
    with pytest.raises(SettingsError, match=r"run\.work: .* has layout 3, .* knows up to 2: upgrade isthmus"):
        claim(tmp_path, 2, "run.work")
    assert files(tmp_path) == {"layout.json": '{"layout": 3}'}


@pytest.mark.parametrize("text", ["{", "[]", '{"layout": "new"}', "{}", '{"layout": null}'])
def test_a_broken_marker_is_not_guessed_at(tmp_path: Path, text: str) -> None:
    (tmp_path / "layout.json").write_text(text)
    with pytest.raises(StoreError, match="restore or remove it"):
        claim(tmp_path, 2, "run.work")
    assert files(tmp_path) == {"layout.json": text}


def test_examine_changes_nothing(tmp_path: Path) -> None:
    assert examine(tmp_path / "a" / "b", 1, "run.work") == 0
    assert list(tmp_path.iterdir()) == []


def test_examine_finds_what_cannot_be_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(StoreError, match=r"cannot use run\.work .*/file: it is not a folder"):
        examine(tmp_path / "file" / "below", 1, "run.work")
    # root may write anywhere, so a refusal is pretended
    monkeypatch.setattr(os, "access", lambda path, mode: Path(path) != tmp_path)
    with pytest.raises(StoreError, match=rf"cannot use run\.work {tmp_path}: this user may not write there"):
        examine(tmp_path / "new", 1, "run.work")


def test_fresh_is_empty(tmp_path: Path) -> None:
    (tmp_path / "x" / "y").mkdir(parents=True)
    (tmp_path / "x" / "z").write_text("old")
    assert list(fresh(tmp_path / "x").iterdir()) == []
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(StoreError, match="cannot empty the folder"):
        fresh(tmp_path / "file")
