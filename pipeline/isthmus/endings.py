"""How runs ended that published nothing, kept in the work folder until their night is published, for `history`."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

from isthmus import store
from isthmus.errors import AskedToStop, GateStopped, IsthmusError, StoreError, exit_code_of
from isthmus.watch import Watch

__all__ = ["endings", "told"]


@contextmanager
def told(work: Path, as_of: date, watch: Watch) -> Iterator[None]:
    """Within: a night. Its ending is written down when it fails, and forgotten when it does not.

    `work`: the series' work folder, whose lease is held.
    """
    path = work / "endings" / f"{as_of}.json"
    try:
        yield
    except BaseException as error:
        known = isinstance(error, IsthmusError | AskedToStop)  # a library's message may quote what it worked on
        stopped = "interrupted" if isinstance(error, AskedToStop | KeyboardInterrupt) else "failed"
        ending = {
            "state": "stopped" if isinstance(error, GateStopped) else stopped,
            "exit_code": exit_code_of(error),
            "error": str(error) if known else type(error).__name__,
            "gates": watch.gates,
            "at": datetime.now(UTC).isoformat(timespec="seconds"),
        }
        with suppress(StoreError):  # the error itself is what counts
            store.put(path, lambda hidden: hidden.write_text(json.dumps(ending, ensure_ascii=False) + "\n"))
        raise
    else:
        store.forget(path)


def endings(work: Path) -> dict[date, dict[str, Any]]:
    """Night -> how its last run ended; only of nights whose last run published nothing."""
    found = {}
    for path in sorted((work / "endings").glob("*.json")):
        with suppress(ValueError, OSError):
            found[date.fromisoformat(path.stem)] = json.loads(path.read_text(encoding="utf-8"))
    return found
