"""Results kept in the work folder between nights. A kept folder is whole or is not there, and never changes.

Its name is a hash of all that went into it, so a result is used again exactly when nothing of that has changed. Its
contents are known by size and digest; what has been damaged since is made anew. Whatever is not used for some days
goes.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

from isthmus.store import story

__all__ = ["Facts", "is_sound", "keep", "name_for", "prune", "recall"]

CONTENTS = "contents.json"
UNUSED_DAYS = 10

Facts = dict[str, Any]


def name_for(*told: object) -> str:
    """The name of a result that `told` determines."""
    return hashlib.blake2b(json.dumps(told, default=str).encode(), digest_size=12).hexdigest()


def keep(folder: Path, scratch: Path, fill: Callable[[Path], Facts]) -> Facts:
    """Have `fill` write files into a folder of its own below `scratch` and tell facts of them; then name it `folder`.

    When another attempt at the same result was quicker, its result stays. Raises StoreError.
    """
    making = scratch / f"{folder.name}-{os.getpid()}-{time.monotonic_ns()}"
    with story("keep results below", making):
        making.mkdir(parents=True)
        folder.parent.mkdir(parents=True, exist_ok=True)
    with story("keep results below", making):
        facts = fill(making)
        files = {path.name: [path.stat().st_size, _digest(path)] for path in sorted(making.iterdir())}
        (making / CONTENTS).write_text(json.dumps({"facts": facts, "files": files}))
        if recall(folder) is None:
            shutil.rmtree(folder, ignore_errors=True)  # damaged
        try:
            os.rename(making, folder)
        except OSError:
            if recall(folder) is None:
                raise
            shutil.rmtree(making, ignore_errors=True)
    return facts


def recall(folder: Path) -> Facts | None:
    """The facts of a kept folder, or None when it is not there or a file is missing or of another size."""
    try:
        told = json.loads((folder / CONTENTS).read_text())
        if any((folder / name).stat().st_size != size for name, (size, _) in told["files"].items()):
            return None
        os.utime(folder / CONTENTS)
        facts: Facts = told["facts"]
        return facts
    except (OSError, ValueError, KeyError, TypeError):
        return None


def is_sound(task: tuple[str, tuple[str, ...]]) -> bool:
    """Whether files of a kept folder are, byte for byte, what was kept. Task: folder, names (none: all its files).

    A folder that is not sound goes.
    """
    folder, names = task
    place = Path(folder)
    try:
        digests = json.loads((place / CONTENTS).read_text())["files"]
        sound = all(_digest(place / name) == digests[name][1] for name in names or digests)
    except (OSError, ValueError, KeyError, TypeError):
        sound = False
    if not sound:
        shutil.rmtree(place, ignore_errors=True)
    return sound


def prune(*folders: Path) -> None:
    """Remove what has not been used for UNUSED_DAYS, and what was never finished."""
    oldest = time.time() - UNUSED_DAYS * 86_400
    for folder in folders:
        with suppress(OSError):
            for kept in list(folder.iterdir()):
                mark = kept / CONTENTS
                if not mark.exists() or mark.stat().st_mtime < oldest:
                    shutil.rmtree(kept, ignore_errors=True)


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, lambda: hashlib.blake2b(digest_size=16)).hexdigest()
