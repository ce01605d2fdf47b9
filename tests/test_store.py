"""Files appear whole or not at all."""

from __future__ import annotations

import errno
import json
import os
from pathlib import Path

import pytest

from isthmus.errors import SettingsError, StoreError
from isthmus.store import claim, examine, fresh, put, story, sweep


def files(folder: Path) -> dict[str, str]:
    return {str(path.relative_to(folder)): path.read_text() for path in folder.rglob("*") if path.is_file()}


def test_the_old_file_is_seen_until_the_new_one_is_whole(tmp_path: Path) -> None:
    put(tmp_path / "a/one", lambda path: path.write_text("old"))

    def write(path: Path) -> None:
        path.write_text("new")
        assert (tmp_path / "a/one").read_text() == "old"
        assert path.name.startswith(".unfinished-")

    put(tmp_path / "a/one", write)
    assert files(tmp_path) == {"a/one": "new"}


@pytest.mark.parametrize("before", [{}, {"a/one": "old"}])
@pytest.mark.parametrize("error", [OSError(errno.EACCES, "no"), KeyboardInterrupt()])
def test_a_rename_that_fails_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, before: dict[str, str], error: BaseException
) -> None:
    for name, text in before.items():
        (tmp_path / name).parent.mkdir()
        (tmp_path / name).write_text(text)

    def fail(*_: object) -> None:
        raise error

    monkeypatch.setattr(os, "replace", fail)
    with pytest.raises(StoreError if isinstance(error, OSError) else KeyboardInterrupt):
        put(tmp_path / "a/one", lambda path: path.write_text("new"))
    assert files(tmp_path) == before


def test_a_writer_that_fails_leaves_nothing(tmp_path: Path) -> None:
    def half(path: Path) -> None:
        path.write_text("ha")
        raise OSError(errno.ENOSPC, "No space left on device", str(path))

    with pytest.raises(StoreError, match=r"cannot write .*No space left.*disk has room"):
        put(tmp_path / "file", half)
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
