"""Files in a local or shared folder that appear whole.

A file is written beside its final place under a hidden name and then renamed over it, so that a reader sees the old
file or the new one, never half of one. What a killed run leaves behind has hidden names only, and `sweep` removes it.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import uuid
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from errno import EACCES, EIO, ENOTDIR
from pathlib import Path

from isthmus.errors import SettingsError, StoreError

__all__ = [
    "LAYOUT_FILE",
    "beside",
    "claim",
    "examine",
    "flush",
    "forget",
    "fresh",
    "layout_in",
    "put",
    "story",
    "sweep",
]

LAYOUT_FILE = "layout.json"
_MARK = ".unfinished-"


@contextmanager
def story(doing: str, where: object = "") -> Iterator[None]:
    """Turn an operating system's refusal into a StoreError that says what was being done.

    `where`: said when the refusal names no file.
    """
    try:
        yield
    except Exception as error:
        if not (refusal := _refusal(error)):
            raise
        place = f" {refusal.filename or where}" if refusal.filename or where else ""
        raise StoreError(
            f"cannot {doing}{place}: {refusal.strerror or refusal}; check that the folder exists, that this user may "
            "write there, and that the disk has room"
        ) from error


def _refusal(error: Exception) -> OSError | None:
    """The operating system's refusal; Polars wraps it in errors of its own, which end in its number, or hides it."""
    if isinstance(error, OSError):
        return error
    if "transport error" in str(error):  # of a Parquet footer that found no room
        return OSError(EIO, "not everything could be written")
    number = re.search(r"\(os error (\d+)\)$", str(error))
    return OSError(int(number[1]), os.strerror(int(number[1]))) if number else None


def put(path: Path, write: Callable[[Path], object]) -> None:
    """Have `write` fill a hidden file beside `path`, then rename it over whatever stands there. Raises StoreError."""
    hidden = beside(path)
    try:
        with story("write", path):
            path.parent.mkdir(parents=True, exist_ok=True)
            write(hidden)
            flush(hidden)
            os.replace(hidden, path)
            flush(path.parent)
    finally:
        forget(hidden)


def beside(path: Path) -> Path:
    """A hidden name in the same folder, which `sweep` removes; not of a kind that readers search for."""
    return path.with_name(f"{_MARK}{uuid.uuid4().hex[:12]}-{path.name}.part")


def flush(path: Path) -> None:
    """Have the disk hold the file, or the names in the folder."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def forget(path: Path) -> None:
    """Remove a file if that is possible."""
    with suppress(OSError):
        path.unlink()


def examine(folder: Path, layout: int, key: str) -> int:
    """The layout that the folder has (0: none yet), having found that it can be written; nothing is changed.

    `key` is the setting that names the folder. Raises SettingsError when a newer isthmus wrote it, StoreError when it
    cannot be written.
    """
    marker = folder / LAYOUT_FILE
    with story(f"use {key}"):
        there = next(path for path in (folder, *folder.parents) if path.exists())
        if not there.is_dir():
            raise NotADirectoryError(ENOTDIR, "it is not a folder", str(there))
        if not os.access(there, os.W_OK | os.X_OK):
            raise PermissionError(EACCES, "this user may not write there", str(there))
        text = marker.read_text(encoding="utf-8", errors="replace") if marker.exists() else ""
    return layout_in(text, str(folder), layout, key)


def layout_in(text: str, folder: str, layout: int, key: str) -> int:
    """The layout that a marker's text tells (empty text: 0). Raises what `examine` raises."""
    if not text:
        return 0
    try:
        found = int(json.loads(text)["layout"])
    except (ValueError, KeyError, TypeError):
        marker = f"{folder}/{LAYOUT_FILE}"
        raise StoreError(f"{marker} is not readable as JSON with a number `layout`; restore or remove it") from None
    if found > layout:
        raise SettingsError(
            f"{key}: {folder} has layout {found}, written by a newer isthmus; this one knows up to {layout}: "
            f"upgrade isthmus, or name another folder in {key}"
        )
    return found


def claim(folder: Path, layout: int, key: str) -> None:
    """Make the folder ours to write, or raise what `examine` raises."""
    if examine(folder, layout, key) == layout:
        for leftover in folder.glob(f"{_MARK}*-{LAYOUT_FILE}*"):
            forget(leftover)
        return
    put(folder / LAYOUT_FILE, lambda path: path.write_text(json.dumps({"layout": layout}) + "\n"))


def sweep(folder: Path, within: str = "**") -> int:
    """Remove what killed runs left in the folders below `folder` that match `within`; others may be at work elsewhere.

    Returns how many files went. Raises StoreError.
    """
    with story("sweep"):
        leftovers = list(folder.glob(f"{within}/{_MARK}*"))
        for path in leftovers:
            path.unlink(missing_ok=True)
    return len(leftovers)


def fresh(folder: Path) -> Path:
    """An empty folder of that name."""
    with story("empty the folder"):
        shutil.rmtree(folder, ignore_errors=True)
        folder.mkdir(parents=True)
    return folder
