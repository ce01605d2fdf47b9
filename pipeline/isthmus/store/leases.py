"""Who may work on a series: one run at a time, on any number of machines.

A lease is a small record (holder, token, heartbeat) in the place that it protects. It changes only by compare and
swap: under a lock of the file system in a folder, by conditional requests in an object store. A thread of the holder
counts the heartbeat up every few seconds.

Another run ends at once with TryAgain when the record is young by the store's own clock. When it looks old, which a
clock that jumped can also cause, the run first watches it for `limit` seconds by its own monotonic clock: a heartbeat
that moves meanwhile is alive, one that stands still is taken over. Wall clocks of two machines are never compared. A
holder whose process is gone from this very machine is taken over at once.

A holder that was frozen and wakes up finds that the record carries another token. Its heartbeat interrupts it at once,
and `guard`, which publishers enter around the switch, raises TryAgain. What is guaranteed:

- folders: `guard` holds the lock without which nobody can take over, so the check and the switch are one. A holder that
  is frozen exactly then keeps the lock, and others end with TryAgain until it wakes up or dies.
- object stores: `guard` reads the record right before a request. The publisher closes what remains with a condition on
  the object itself (see bucket.py).
"""

from __future__ import annotations

import json
import os
import signal
import socket
import threading
import time
import uuid
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

from isthmus.errors import StoreError, TryAgain
from isthmus.store.places import Place
from isthmus.store.register import Moved, Register, Seen

__all__ = ["BEAT", "LIMIT", "Holder", "Lease", "lease"]

_interrupted = threading.Event()  # a run that holds several leases is interrupted once
BEAT, LIMIT = 5.0, 30.0  # seconds between heartbeats, and without one until a holder counts as gone


@dataclass(frozen=True)
class Holder:
    """The record: an empty token means that nobody holds the lease. Times are told to people, never compared."""

    token: str = ""
    host: str = ""
    machine: str = ""
    pid: int = 0
    born: str = ""
    started: str = ""
    beat: int = 0
    beat_at: str = ""

    @classmethod
    def me(cls) -> Holder:
        now, pid = _now(), os.getpid()
        return cls(uuid.uuid4().hex, socket.gethostname(), _machine(), pid, _born(pid), now, 0, now)

    @classmethod
    def read(cls, text: bytes | None) -> Holder:
        """A record that cannot be read is held by somebody unknown, whose heartbeat does not move."""
        if text is None:
            return cls()
        try:
            return cls(**json.loads(text))
        except (ValueError, TypeError):
            return cls(token="?")

    def text(self) -> bytes:
        return (json.dumps(asdict(self)) + "\n").encode()

    def is_dead(self) -> bool:
        """Surely gone: its process ran on this machine, and no longer does."""
        return bool(self.machine) and self.machine == _machine() and _born(self.pid) != self.born

    def __str__(self) -> str:
        if not self.token:
            return "another run, which has just ended"
        if not self.pid:
            return "somebody whose record cannot be read; it is taken over once it has not moved for a while"
        return f"process {self.pid} on {self.host} since {self.started} (last heartbeat {self.beat_at})"


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")


def _machine() -> str:
    """This boot of this machine, as seen by processes that see each other's numbers; empty where /proc does not say."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text().strip()
        return f"{socket.gethostname()} {boot} {os.readlink('/proc/self/ns/pid')}"
    except OSError:
        return ""


def _born(pid: int) -> str:
    """When the process started, in the kernel's ticks, so that a number used again is told apart; empty: no process."""
    try:
        state, *more = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    except OSError:
        return ""
    return "" if state in "ZX" else more[18]


class Lease:
    """A lease that is held. `lease` makes it."""

    def __init__(self, register: Register, what: str, seen: Seen, holder: Holder) -> None:
        self._register, self._what, self._seen, self._holder = register, what, seen, holder
        self._one_at_a_time = threading.Lock()
        self.lost = False

    def check(self) -> None:
        """Raises TryAgain when another run has taken the lease over, StoreError when that cannot be found out."""
        now = Holder.read(self._register.read().text)
        if now.token != self._holder.token:
            self.lost = True
            raise TryAgain(
                f"{self._what} was taken over from this run by {now}, because its heartbeat had stopped; nothing was "
                "published, run the same command later"
            )

    @contextmanager
    def guard(self) -> Iterator[None]:
        """Entered around a switch: checks, and in a folder keeps others from taking over until it is left."""
        with self._register.hold():
            self.check()
            yield

    def renew(self) -> None:
        """Count the heartbeat up. Raises Moved when the lease was taken over, StoreError."""
        with self._one_at_a_time:
            self._holder = replace(self._holder, beat=self._holder.beat + 1, beat_at=_now())
            try:
                self._seen = self._register.swap(self._seen, self._holder.text())
            except Moved:  # or an earlier heartbeat arrived although the store seemed out of reach
                now = self._register.read()
                if Holder.read(now.text).token != self._holder.token:
                    raise
                self._seen = self._register.swap(now, self._holder.text())

    def release(self) -> None:
        with suppress(Moved, StoreError, TryAgain):  # taken over, or out of reach: then it ends as a dead holder's does
            self._register.swap(self._seen, Holder().text())


@contextmanager
def lease(place: Place, name: str, *, beat: float | None = None, limit: float | None = None) -> Iterator[Lease]:
    """Hold the lease `name` of a place. `beat`, `limit`: seconds, see BEAT and LIMIT.

    Raises TryAgain when another run holds it, or took it over in the meantime; StoreError.
    """
    beat, limit = beat or BEAT, limit or LIMIT
    what = f"the lease of {name} in {place}"
    held = _take(place.register(name), what, beat, limit)
    _interrupted.clear()
    over, gate = threading.Event(), threading.Lock()
    stop = threading.current_thread() is threading.main_thread()
    heart = threading.Thread(target=_beat, args=(held, over, gate, beat, stop), name=what, daemon=True)
    heart.start()
    try:
        try:
            yield held
        finally:
            with gate:
                over.set()
            time.sleep(0)  # an interrupt that was sent before the gate closed arrives here, where it is understood
    except BaseException as error:
        if held.lost or isinstance(error, (KeyboardInterrupt, StoreError, OSError)):
            with suppress(StoreError):
                held.check()  # perhaps our own interrupt, or a successor swept what this run was about to use
        raise
    finally:
        over.set()
        heart.join()
        held.release()


def _take(register: Register, what: str, beat: float, limit: float) -> Lease:
    seen = register.read()
    holder = Holder.read(seen.text)
    if holder.token and not holder.is_dead():
        _wait_for_silence(register, seen, what, beat, limit)
    mine = Holder.me()
    try:
        held = Lease(register, what, register.swap(seen, mine.text()), mine)
    except Moved:
        raise _denied(what, Holder.read(register.read().text)) from None
    _prove(register, what)
    return held


def _wait_for_silence(register: Register, seen: Seen, what: str, beat: float, limit: float) -> None:
    """Return when the heartbeat does not move for `limit` seconds; raise TryAgain when it may be alive."""
    if 0 <= register.age() <= limit:
        raise _denied(what, Holder.read(seen.text))
    began = time.monotonic()
    while (left := began + limit - time.monotonic()) > 0:
        time.sleep(min(beat, left))
        if (now := register.read()) != seen:
            raise _denied(what, Holder.read(now.text))


def _prove(register: Register, what: str) -> None:
    """A store that ignores conditions would let two runs in: try a swap that must fail."""
    with suppress(Moved):
        register.swap(Seen(None, None), Holder().text())
        raise StoreError(
            f"{what}: this store ignores conditional writes, so two runs cannot be kept apart; use another"
        )


def _denied(what: str, holder: Holder) -> TryAgain:
    return TryAgain(f"{what} is held by {holder}; run the same command later")


def _beat(held: Lease, over: threading.Event, gate: threading.Lock, beat: float, stop: bool) -> None:
    while not over.wait(beat):
        try:
            held.renew()
        except Moved:
            held.lost = True
            with gate:
                if stop and not over.is_set() and not _interrupted.is_set():
                    _interrupted.set()
                    signal.pthread_kill(threading.main_thread().ident or 0, signal.SIGINT)
            return
        except (StoreError, TryAgain):
            pass  # out of reach for now; `guard` asks again before anything is published
