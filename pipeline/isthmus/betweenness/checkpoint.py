"""The work done so far, kept now and then, so that a run that was killed goes on from there.

What is kept is what the blocks so far add up to, taken between two blocks; a run that goes on from it ends with the
same bits as one that was never stopped. A file that is damaged, or of another night or plan, counts as none.
"""

from __future__ import annotations

import hashlib
import pickle
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

from isthmus.store import put

__all__ = ["Checkpoint"]

EVERY_SECONDS = 15.0
SHARE = 0.02  # of the time that keeping may take


class Checkpoint:
    """One file of a private folder. `key` names the night and the plan."""

    def __init__(self, path: Path, key: str, every: float = EVERY_SECONDS) -> None:
        self._path, self._key, self._every = path, key.encode(), every
        self._next = time.monotonic() + every

    def load(self) -> Any | None:
        """What was kept last, or None."""
        try:
            raw = self._path.read_bytes()
        except OSError:
            return None
        digest, payload = raw[:32], raw[32:]
        if digest != self._digest(payload):
            return None
        with suppress(Exception):  # kept by another version
            return pickle.loads(payload)
        return None

    def offer(self, state: Callable[[], object]) -> None:
        """Keep `state()` if it is time to. Raises StoreError."""
        began = time.monotonic()
        if began < self._next:
            return
        payload = pickle.dumps(state(), protocol=pickle.HIGHEST_PROTOCOL)
        put(self._path, lambda path: path.write_bytes(self._digest(payload) + payload))
        ended = time.monotonic()
        self._next = ended + max(self._every, (ended - began) / SHARE)

    def clear(self) -> None:
        """Nothing is left to go on from."""
        with suppress(OSError):
            self._path.unlink()

    def _digest(self, payload: bytes) -> bytes:
        return hashlib.blake2b(payload, digest_size=32, key=hashlib.sha256(self._key).digest()).digest()
