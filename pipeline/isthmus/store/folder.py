"""A warehouse in a local or shared folder: all files of a night switch at one instant.

    WAREHOUSE/.nights/series=s/as_of=D/000007-5f0c2a9b1e34/scores.parquet.data   a generation, written and flushed whole
    WAREHOUSE/.nights/series=s/as_of=D/current -> 000007-5f0c2a9b1e34            what readers see
    WAREHOUSE/scores/series=s/as_of=D/scores.parquet -> ../../../.nights/series=s/as_of=D/current/scores.parquet.data

Replacing a night is one rename of the link `current`. A night that is published for the first time is a replacement
too: of a generation of blank files, tables without rows, to which the public links lead before the switch; that of
run.json leads nowhere until then. So it
appears in all tables at one instant, and a run killed before it leaves tables without rows, which the next run removes.
Public files are links, not folders, because readers that search
folders do not all follow linked ones; files of a generation have names of their own, because readers that search for
`**/scores.parquet` from the top look into hidden folders too. The generation before the current one stays until the
next publication, for readers that have resolved its path. At every instant the public paths name one whole night; a
query that opens two tables, one before the switch and one after it, sees rows of two runs, which `run_id` tells apart,
and a reader that opens one file twice may see that it is another. Who needs all from one run resolves `current` once
and reads there.

Guaranteed where links, renames and `flock` work: local disks, and NFS from version 4 on.
"""

from __future__ import annotations

import fcntl
import os
import shutil
import time
import uuid
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager, suppress
from errno import EACCES, EAGAIN, ENOSYS, EOPNOTSUPP, EPERM
from pathlib import Path

from isthmus.errors import StoreError, TryAgain
from isthmus.store import files as _files
from isthmus.store.files import beside, flush, forget, story
from isthmus.store.places import File
from isthmus.store.register import Guard, Moved, Seen

__all__ = ["Folder"]

_NIGHTS, _LEASES, _CURRENT, _BLANK = ".nights", ".leases", "current", "000000-blank"
_LAST = "run"  # of run.json, without which a night is not whole
_PATIENCE = 10.0  # seconds to wait for a lock that is normally held for milliseconds


class Folder:
    def __init__(self, path: Path) -> None:
        self.path = path

    def __str__(self) -> str:
        return str(self.path)

    def examine(self, layout: int, key: str) -> int:
        return _files.examine(self.path, layout, key)

    def claim(self, layout: int, key: str) -> None:
        _files.claim(self.path, layout, key)
        probe = beside(self.path / "link")
        with story("use"):
            try:
                os.symlink(_CURRENT, probe)
            except OSError as error:
                if error.errno not in (EPERM, ENOSYS, EOPNOTSUPP):
                    raise
                raise StoreError(
                    f"{key}: the file system of {self.path} has no symbolic links, which a night needs to appear at "
                    f"one instant ({error.strerror}); name a folder on another"
                ) from None
            finally:
                forget(probe)

    def fetch(self, path: str) -> bytes | None:
        with story("read"):
            try:
                return (self.path / path).read_bytes()
            except (FileNotFoundError, NotADirectoryError):
                return None

    def size(self, path: str) -> int | None:
        with story("look at"):
            try:
                return (self.path / path).stat().st_size
            except (FileNotFoundError, NotADirectoryError):
                return None

    def below(self, path: str) -> list[str]:
        with story("list"):
            try:
                return sorted(os.listdir(self.path / path))
            except (FileNotFoundError, NotADirectoryError):
                return []

    def files(self) -> Iterator[str]:
        with story("list"):
            for path in sorted(self.path.rglob("*")):
                ours = path.is_symlink() and path.resolve().is_relative_to(self.path.resolve())
                if path.is_file() and not ours:  # what a link of ours leads to comes by its own name
                    yield str(path.relative_to(self.path))

    def whole(self, night: str) -> dict[str, str]:
        home = self.path / _NIGHTS / night
        with story("list"):
            generation = home / (_current(home) or _CURRENT)  # a copy that followed links has a folder of that name
            found = list(generation.iterdir()) if generation.is_dir() else list(self.path.glob(f"[!.]*/{night}/*"))
        named = {path.name.partition(".")[0]: str(path.relative_to(self.path)) for path in found if path.exists()}
        return named if _LAST in named else {}

    def register(self, name: str) -> LockedFile:
        return LockedFile(self.path / _LEASES / f"{name}.json")

    def sweep(self, series: str) -> None:
        _files.sweep(self.path, f"*/series={series}/*")
        _files.sweep(self.path, f"{_NIGHTS}/series={series}/*")
        with story("sweep"):
            for home in (self.path / _NIGHTS / f"series={series}").glob("*"):
                _take_blanks_away(home, self.path.glob(f"[!.]*/{home.relative_to(self.path / _NIGHTS)}/*"))
                _sweep_generations(home)

    def publish(self, night: str, files: Sequence[File], guard: Guard) -> None:
        home = self.path / _NIGHTS / night
        mine = _new_generation(home)
        links: dict[Path, Path] = {}
        laid: list[Path] = []
        try:
            with story("write", self.path):
                for file in files:
                    target = _kept(mine, file.name)
                    file.write(target)
                    flush(target)
                for folder in (mine, home):
                    flush(folder)
                _make_links(home, [self.path / file.path for file in files], links)
            with story("publish", self.path), guard():
                _put_current_back(home)
                _adopt(home, [self.path / file.path for file in files], links)
                _lay_blanks(home, {self.path / file.path: file for file in files}, links, laid)
                _switch(home, mine)
                with suppress(OSError):  # the night is published; what cannot be removed goes with the next sweep
                    _sweep_generations(home)
        except BaseException:
            if _current(home) != mine.name:
                for path in laid:
                    forget(path)
                _take_blanks_away(home, [])
                shutil.rmtree(mine, ignore_errors=True)
            raise
        finally:
            for hidden in links.values():
                forget(hidden)

    def remove(self, night: str, guard: Guard) -> None:
        home = self.path / _NIGHTS / night
        with story("remove", self.path), guard():
            folders = sorted(self.path.glob(f"[!.]*/{night}"), key=lambda folder: folder.parts[-3] != "runs")
            for path in [self.path / "runs" / night / "run.json", *(p for folder in folders for p in folder.iterdir())]:
                path.unlink(missing_ok=True)
            if home.exists():
                forget(home / _CURRENT)
                shutil.rmtree(home)
            for folder in folders:
                folder.rmdir()

    def remove_earlier(self, night: str, guard: Guard) -> None:
        home = self.path / _NIGHTS / night
        with story("remove", self.path), guard():
            if current := _current(home):
                for path in home.iterdir():
                    if path.name not in (_CURRENT, current):
                        shutil.rmtree(path)


def _current(home: Path) -> str:
    """The name of the generation that readers see; empty: none."""
    try:
        return os.readlink(home / _CURRENT)
    except OSError:
        return ""


def _kept(generation: Path, name: str) -> Path:
    return generation / f"{name}.data"


def _number(generation: str) -> int:
    head = generation.partition("-")[0]
    return int(head) if head.isdigit() else 0


def _new_generation(home: Path) -> Path:
    with story("write"):
        home.mkdir(parents=True, exist_ok=True)
        number = 1 + max((_number(path.name) for path in home.iterdir()), default=0)
        folder = home / f"{number:06d}-{uuid.uuid4().hex[:12]}"
        folder.mkdir()
    return folder


def _point(home: Path, generation: str) -> None:
    hidden = beside(home / _CURRENT)
    try:
        os.symlink(generation, hidden)
        os.replace(hidden, home / _CURRENT)
    finally:
        forget(hidden)


def _make_links(home: Path, public: list[Path], links: dict[Path, Path]) -> None:
    """Fill `links` (public path -> hidden link beside it) for the paths that are not yet links to the current night."""
    for path in public:
        path.parent.mkdir(parents=True, exist_ok=True)
        # '..' follows the folder as it really lies, which may be a link to elsewhere
        target = os.path.relpath(_kept(home.resolve() / _CURRENT, path.name), path.parent.resolve())
        if not path.is_symlink() or os.readlink(path) != target:
            links[path] = beside(path)
            os.symlink(target, links[path])


def _put_current_back(home: Path) -> None:
    """A copy of a warehouse that followed links has a folder `current`, and plain public files, which are adopted."""
    current = home / _CURRENT
    if current.is_dir() and not current.is_symlink():
        os.rename(current, home / f"000000-{uuid.uuid4().hex[:12]}")


def _adopt(home: Path, public: list[Path], links: dict[Path, Path]) -> None:
    """Make a generation of a night that still has plain files, so that it too is replaced at one instant."""
    if not any(path in links and path.exists() for path in public):
        return
    kept = _new_generation(home)
    there = [path for path in public if path.exists()]
    for path in there:
        try:
            os.link(path.resolve(), _kept(kept, path.name))
        except OSError:  # not every file system has hard links
            shutil.copy2(path, _kept(kept, path.name))
            flush(_kept(kept, path.name))
    flush(kept)
    _point(home, kept.name)
    for path in there:
        if path in links:
            os.replace(links[path], path)
            del links[path]


def _lay_blanks(home: Path, files: dict[Path, File], links: dict[Path, Path], laid: list[Path]) -> None:
    """Have every public path lead somewhere, to a blank file where the night has none yet; fill `laid` with those."""
    if not links:
        return
    there = home / (_current(home) or _BLANK)
    there.mkdir(exist_ok=True)
    for path in links:
        blank, write = _kept(there, path.name), files[path].blank
        if write and not blank.exists():
            write(blank)
            flush(blank)
    flush(there)
    if not _current(home):
        _point(home, there.name)
    for path, hidden in list(links.items()):
        laid.append(path)
        os.replace(hidden, path)
        del links[path]
    for folder in {path.parent for path in files}:
        flush(folder)


def _take_blanks_away(home: Path, public: Iterable[Path]) -> None:
    """If the night is still blank: remove it, and the public links that lead to it."""
    if _current(home) == _BLANK:
        for path in public:
            if path.is_symlink():
                forget(path)
        forget(home / _CURRENT)
    if _current(home) != _BLANK:
        shutil.rmtree(home / _BLANK, ignore_errors=True)


def _switch(home: Path, mine: Path) -> None:
    """The instant at which the night is another; undone when the disk cannot hold it."""
    before = _current(home)
    try:
        _point(home, mine.name)
        flush(home)
    except BaseException:
        with suppress(OSError):
            _point(home, before)
        raise


def _sweep_generations(home: Path) -> None:
    """Keep the current generation and the one before it."""
    current = _current(home)
    if not current and (home / _CURRENT).exists():
        return  # a copied warehouse, see _put_current_back
    older = [path.name for path in home.iterdir() if path.is_dir() and _number(path.name) < _number(current)]
    keep = {_CURRENT, current, max(older, key=_number, default="")}
    for path in home.iterdir():
        if path.name not in keep:
            shutil.rmtree(path, ignore_errors=True)


class LockedFile:
    """A register in a folder: compare and swap under a lock of the file system, which dies with its process."""

    def __init__(self, path: Path) -> None:
        self._path, self._lock = path, path.with_suffix(".lock")

    def read(self) -> Seen:
        with story("read the lease"):
            try:
                return Seen(self._path.read_bytes(), None)
            except FileNotFoundError:
                return Seen(None, None)

    def swap(self, seen: Seen, text: bytes) -> Seen:
        with self.hold():
            if self.read() != seen:
                raise Moved
            with story("write the lease"):
                hidden = self._path.with_suffix(".unfinished")  # nobody else writes while the lock is held
                hidden.write_bytes(text)
                os.replace(hidden, self._path)
        return Seen(text, None)

    def age(self) -> float:
        with story("read the lease"):
            self._lock.touch()  # the file system's own now, also where a server keeps it
            return self._lock.stat().st_mtime - self._path.stat().st_mtime

    @contextmanager
    def hold(self) -> Iterator[None]:
        with story("lock the lease"):
            self._lock.parent.mkdir(parents=True, exist_ok=True)
            descriptor = os.open(self._lock, os.O_RDWR | os.O_CREAT, 0o666)
        try:
            self._wait(descriptor)
            yield
        finally:
            os.close(descriptor)

    def _wait(self, descriptor: int) -> None:
        until = time.monotonic() + _PATIENCE
        while True:
            try:
                fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
                return
            except OSError as error:
                if error.errno not in (EACCES, EAGAIN):
                    raise StoreError(
                        f"cannot lock {self._lock}: {error.strerror}; name a folder on a file system with locks"
                    ) from None
            if time.monotonic() > until:
                raise TryAgain(f"{self._lock} is locked by a run that does not move; run the same command later")
            time.sleep(0.01)
