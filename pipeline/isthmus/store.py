"""The one place that knows how files are put where readers look for them.

A file is written beside its final place under a hidden name and then renamed over it, so that a reader sees the old
file or the new one, never half of one. What a killed run leaves behind has hidden names only, and `sweep` removes it.
"""

from __future__ import annotations

import json
import os
import shutil
import uuid
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from isthmus.errors import SettingsError, StoreError

__all__ = ["Batch", "claim", "fresh", "story", "sweep"]

_MARK = ".unfinished-"


@contextmanager
def story(doing: str) -> Iterator[None]:
    """Turn an operating system's refusal into a StoreError that says what was being done."""
    try:
        yield
    except OSError as error:
        where = f" {error.filename}" if error.filename else ""
        raise StoreError(
            f"cannot {doing}{where}: {error.strerror or error}; check that the folder exists, that this user may "
            "write there, and that the disk has room"
        ) from error


class Batch:
    """Files that are to appear together: all written and flushed first, then renamed one after the other.

    The renames follow the order in which files were added, so the last one added is the marker of completeness.
    """

    def __init__(self) -> None:
        self._pairs: list[tuple[Path, Path]] = []

    def add(self, path: Path, write: Callable[[Path], object]) -> None:
        """Have `write` fill a hidden file beside `path`. Raises StoreError."""
        hidden = path.with_name(f"{_MARK}{uuid.uuid4().hex[:12]}-{path.name}")
        with story("write"):
            path.parent.mkdir(parents=True, exist_ok=True)
            self._pairs.append((hidden, path))
            write(hidden)
            descriptor = os.open(hidden, os.O_RDONLY)
            try:
                os.fsync(descriptor)
            finally:
                os.close(descriptor)

    def commit(self) -> None:
        """Rename everything into place. Until the last rename the night counts as incomplete."""
        with story("publish"):
            self._pairs[-1][1].unlink(missing_ok=True)
            for hidden, path in self._pairs:
                os.replace(hidden, path)
            for folder in {path.parent for _, path in self._pairs}:
                descriptor = os.open(folder, os.O_RDONLY)
                try:
                    os.fsync(descriptor)
                finally:
                    os.close(descriptor)
        self._pairs.clear()

    def discard(self) -> None:
        """Remove what was written and not committed."""
        for hidden, _ in self._pairs:
            hidden.unlink(missing_ok=True)
        self._pairs.clear()


def claim(folder: Path, layout: int) -> None:
    """Make the folder ours to write, or say why not.

    Raises SettingsError when a newer isthmus wrote it, StoreError when it cannot be written.
    """
    marker = folder / "layout.json"
    with story("use the folder"):
        folder.mkdir(parents=True, exist_ok=True)
        text = marker.read_text() if marker.exists() else ""
    if text:
        try:
            found = int(json.loads(text)["layout"])
        except (ValueError, KeyError, TypeError):
            raise StoreError(f"{marker} is not readable as JSON with a number `layout`; restore or remove it") from None
        if found > layout:
            raise SettingsError(
                f"{folder} has layout {found}, written by a newer isthmus; this one knows up to {layout}: "
                "upgrade isthmus, or name another folder in run.warehouse"
            )
    batch = Batch()
    batch.add(marker, lambda path: path.write_text(json.dumps({"layout": layout}) + "\n"))
    batch.commit()


def sweep(folder: Path) -> int:
    """Remove what killed runs left below the folder. Returns how many files went."""
    leftovers = list(folder.rglob(f"{_MARK}*"))
    for path in leftovers:
        path.unlink(missing_ok=True)
    return len(leftovers)


def fresh(folder: Path) -> Path:
    """An empty folder of that name."""
    with story("empty the folder"):
        shutil.rmtree(folder, ignore_errors=True)
        folder.mkdir(parents=True)
    return folder
