"""A warehouse in an object store, `s3://bucket/prefix` or `abfs://container/prefix`, through fsspec's drivers.

    WAREHOUSE/.nights/series=s/as_of=D/scores.parquet.9f3c..data   an object named by its content
    WAREHOUSE/.nights/series=s/as_of=D/current.json                {"scores": "scores.parquet.9f3c..data", ..}
    WAREHOUSE/scores/series=s/as_of=D/scores.parquet               a copy

Every file of a night is made whole in a local folder and then written by one request. First come the objects named by
their content, then the one request that replaces `current.json`, which is the instant at which the night is another:
who reads `current.json` and then the objects beside it that it names has one whole night, old or new, wherever a run
was killed. What the pointer before named stays for readers that still hold it. Last come the copies under the names
that any engine finds, in the order given, run.json at the end: each is the old table or the new one, but there is no
common instant among them; `run_id` tells rows of two runs apart. What a killed run left undone
the next run of the series does: `under-way.json` tells it the night. An object that holds the same bytes already is
left alone.

Two runs: before each request the object's version is read, then the lease, and the request carries the condition that
the version is still that one. So a run that lost its lease, however late it wakes up, cannot replace what its
successor wrote. Only an object that the successor has not come to yet may still get the older run's bytes, one at
most, and the successor replaces it. This rests on conditional writes, which taking the lease proves on the store
itself. Objects above one gibibyte on S3 go up in parts, without the condition: there the lease alone stands guard.

Credentials come from the environment that the drivers read, and no error quotes a driver's own words, because those
may hold an address with a signature. What is worth trying again is tried again here, after growing pauses; the
drivers' own attempts are switched off, so that one policy holds and a dead store is told within a minute.
"""

from __future__ import annotations

import hashlib
import json
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, nullcontext, suppress
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import Any, TypeVar

import fsspec

from isthmus.errors import SettingsError, StoreError, TryAgain
from isthmus.store.files import LAYOUT_FILE, fresh, layout_in, story
from isthmus.store.places import File
from isthmus.store.register import Guard, Moved, Seen

__all__ = ["Bucket"]

PAUSES = (0.25, 1.0, 4.0, 8.0)  # seconds before the second, third, .. attempt
_DRIVERS = {"s3": ("s3fs", "s3"), "abfs": ("adlfs", "azure"), "az": ("adlfs", "azure")}
_ONE_REQUEST = 2**30  # bytes
_CURRENT, _UNDER_WAY = "current.json", "under-way.json"
_TRIES = 4  # to write an object that changes meanwhile
_PASSING = (408, 429)  # timeout, too many requests; other statuses from 400 to 499 will not change
T = TypeVar("T")


def _digest(path: Path) -> str:
    with open(path, "rb") as bytes_:
        return hashlib.file_digest(bytes_, lambda: hashlib.blake2b(digest_size=12)).hexdigest()


class _Nothing:
    _impl_policies = ()


class _Absent(Exception):
    """There is no such object."""


class Bucket:
    def __init__(self, url: str, scratch: Path | None = None) -> None:
        self._url, self._scratch = url.rstrip("/"), scratch
        self._scheme = url.partition("://")[0]
        package, extra = _DRIVERS[self._scheme]
        try:
            fsspec.get_filesystem_class(self._scheme)
        except ImportError:
            raise SettingsError(
                f"{self._scheme}:// needs the driver {package}, which is not installed: pip install 'isthmus[{extra}]'"
            ) from None

    def __str__(self) -> str:
        return self._url

    def examine(self, layout: int, key: str) -> int:
        try:
            text = self.read(LAYOUT_FILE)
        except _Absent:
            return 0
        return layout_in(text.decode("utf-8", errors="replace"), self._url, layout, key)

    def claim(self, layout: int, key: str) -> None:
        if self.examine(layout, key) != layout:
            text = json.dumps({"layout": layout}) + "\n"
            self._ask("write", LAYOUT_FILE, lambda url: self._driver.pipe_file(url, text.encode()))

    def fetch(self, path: str) -> bytes | None:
        try:
            return self.read(path)
        except _Absent:
            return None

    def size(self, path: str) -> int | None:
        try:
            return int(self.look(path)["size"])
        except _Absent:
            return None

    def below(self, path: str) -> list[str]:
        try:
            found: list[str] = self._ask("list", path, lambda url: self._driver.ls(url, detail=False, refresh=True))
        except _Absent:
            return []
        return sorted({name.rstrip("/").rpartition("/")[2] for name in found})

    def files(self) -> Iterator[str]:
        with suppress(_Absent):
            found = self._ask("list", "", lambda url: self._driver.find(url.rstrip("/")))
            top = self._driver._strip_protocol(self._url)
            yield from sorted(name.removeprefix(f"{top}/") for name in found)

    def whole(self, night: str) -> dict[str, str]:
        home = f".nights/{night}"
        return {stem: f"{home}/{name}" for stem, name in self._named(home).items()}

    def register(self, name: str) -> ConditionalObject:
        return ConditionalObject(self, f".leases/{name}.json")

    def sweep(self, series: str) -> None:
        """Finish the copies of a night that a killed run left, as its pointer names them, and forget its other objects.

        An object itself is there whole or not at all, and parts of one are the store's to forget.
        """
        marker = f".nights/series={series}/{_UNDER_WAY}"
        told = json.loads(self.fetch(marker) or b"{}")
        if not told:
            return
        home = f".nights/{told['night']}"
        named = self._named(home)
        with tempfile.TemporaryDirectory() as folder:
            for stem, path in told["copies"].items():
                if stem in named:
                    copy = Path(folder) / stem
                    copy.write_bytes(self.read(f"{home}/{named[stem]}"))
                    self._put(path, copy, nullcontext)
        self._forget_all_but(home, set(named.values()), nullcontext)
        self._ask("remove", marker, lambda url: self._driver.rm_file(url))

    def publish(self, night: str, files: Sequence[File], guard: Guard) -> None:
        home = f".nights/{night}"
        scratch = fresh(self._scratch) if self._scratch else None
        with tempfile.TemporaryDirectory(dir=scratch) as folder:
            made: dict[str, Path] = {}
            for file in files:
                made[file.name] = Path(folder) / file.name
                with story("write"):
                    file.write(made[file.name])
            marker, under_way = f"{Path(home).parent}/{_UNDER_WAY}", Path(folder) / _UNDER_WAY
            copies = {Path(file.name).stem: file.path for file in files}
            under_way.write_text(json.dumps({"night": night, "copies": copies}) + "\n")
            self._put(marker, under_way, guard)
            names = {name: f"{name}.{_digest(path)}.data" for name, path in made.items()}
            for name, path in made.items():
                self._put(f"{home}/{names[name]}", path, guard)
            pointer = Path(folder) / _CURRENT
            told = {Path(name).stem: names[name] for name in made}
            pointer.write_text(json.dumps(told, indent=2) + "\n")
            before = set(self._named(home).values())
            self._put(f"{home}/{_CURRENT}", pointer, guard)
            for file in files:
                self._put(file.path, made[file.name], guard)
        with suppress(StoreError, TryAgain):  # the night is published; what cannot be removed goes with the next sweep
            self._forget_all_but(home, before | set(told.values()), guard)
            with guard():
                self._ask("remove", marker, lambda url: self._driver.rm_file(url))

    def remove(self, night: str, guard: Guard) -> None:
        tables = [table for table in self.below("") if not table.startswith(".")]
        copies = [f"{table}/{night}/{name}" for table in tables for name in self.below(f"{table}/{night}")]
        for path in sorted(copies, key=lambda path: not path.endswith("/run.json")):
            self._remove(path, guard)
        for name in sorted(self.below(f".nights/{night}"), key=lambda name: name != _CURRENT):
            self._remove(f".nights/{night}/{name}", guard)

    def remove_earlier(self, night: str, guard: Guard) -> None:
        home = f".nights/{night}"
        if named := self._named(home):
            self._forget_all_but(home, set(named.values()), guard)

    def _remove(self, path: str, guard: Guard) -> None:
        with guard(), suppress(_Absent):
            self._ask("remove", path, lambda url: self._driver.rm_file(url))

    def _named(self, home: str) -> dict[str, str]:
        """The objects that make up the night as readers see it."""
        with suppress(ValueError, AttributeError):
            return {stem: str(name) for stem, name in json.loads(self.fetch(f"{home}/{_CURRENT}") or b"{}").items()}
        return {}

    def _forget_all_but(self, home: str, names: set[str], guard: Guard) -> None:
        for name in set(self.below(home)) - {_CURRENT, *names}:
            self._remove(f"{home}/{name}", guard)

    def _put(self, path: str, file: Path, guard: Guard) -> None:
        for _ in range(_TRIES):
            version, same = self._compare(path, file)
            if same:
                return
            large = file.stat().st_size > _ONE_REQUEST and self._scheme == "s3"
            how = {} if large else self.only_if(version)
            if how and self._scheme == "s3":
                how["chunksize"] = _ONE_REQUEST
            with guard():
                try:
                    self._ask("write", path, lambda url, how=how: self._driver.put_file(str(file), url, **how))  # type: ignore[misc]
                    return
                except Moved:
                    pass  # by a run that lost its lease; or by us, when a request arrived but its answer was lost
                except _Absent:
                    pass  # somebody removed it after it was looked at
        raise TryAgain(f"{self._url}/{path} is replaced again and again by somebody else; find out who, and run again")

    def _compare(self, path: str, file: Path) -> tuple[str | None, bool]:
        """The object's version (None: there is none), and whether the store knows it to hold the file's bytes."""
        try:
            told = self.look(path)
        except _Absent:
            return None, False
        with open(file, "rb") as bytes_:
            digest = hashlib.file_digest(bytes_, lambda: hashlib.md5(usedforsecurity=False))
        known = (
            told.get("ETag", "").strip('"') or bytes(told.get("content_settings", {}).get("content_md5") or b"").hex()
        )
        return self.version(told), told["size"] == file.stat().st_size and known == digest.hexdigest()

    @staticmethod
    def version(told: dict[str, Any]) -> str:
        return str(told.get("ETag") or told["etag"])

    def only_if(self, version: str | None) -> dict[str, Any]:
        """A write's arguments so that it fails when the object has another version, or (None) when there is one."""
        if version is None:
            return {"mode": "create"}
        if self._scheme == "s3":
            return {"IfMatch": version}
        from azure.core import MatchConditions

        return {"etag": version, "match_condition": MatchConditions.IfNotModified}

    def look(self, path: str) -> dict[str, Any]:
        """What the store tells of an object. Raises _Absent, StoreError."""
        told: dict[str, Any] = self._ask("look at", path, lambda url: self._driver.info(url, refresh=True))
        if told["type"] != "file":
            raise _Absent
        return told

    def read(self, path: str) -> bytes:
        """Raises _Absent, StoreError."""
        text: bytes = self._ask("read", path, lambda url: self._driver.cat_file(url))
        return text

    def write(self, path: str, text: bytes, condition: dict[str, Any]) -> str:
        """Returns the new version. Raises Moved, StoreError."""
        try:
            return self.version(self._ask("write", path, lambda url: self._driver.pipe_file(url, text, **condition)))
        except _Absent:
            raise Moved from None

    @cached_property
    def _driver(self) -> Any:
        options: dict[str, Any] = {"skip_instance_cache": True, "use_listings_cache": False}
        if self._scheme == "s3":
            options["config_kwargs"] = {"retries": {"total_max_attempts": 1, "mode": "standard"}}
        driver = fsspec.filesystem(self._scheme, **options)
        driver.retries = 1  # s3fs
        for policy in getattr(getattr(driver, "service_client", None), "_pipeline", _Nothing)._impl_policies:
            if hasattr(policy, "total_retries"):  # adlfs passes no setting on, so it is set where the client keeps it
                policy.total_retries = 0
        return driver

    def _ask(self, doing: str, path: str, request: Callable[[str], T]) -> T:
        """Make a request, again where that may help. Raises Moved, _Absent, StoreError."""
        url = f"{self._url}/{path}"
        for pause in (*PAUSES, None):
            try:
                return request(url)
            except Exception as error:
                status, code = _fault(error)
                if status in (409, 412) or isinstance(error, FileExistsError):
                    raise Moved from None
                missing = status == 404 or isinstance(error, FileNotFoundError)
                if missing and code not in ("NoSuchBucket", "ContainerNotFound"):
                    raise _Absent from None
                if pause is None or missing or not _passing(error, status):
                    told = " ".join(str(word) for word in (type(error).__name__, status, code) if word)
                    raise StoreError(
                        f"cannot {doing} {url}: {told}; check that the bucket exists, that the store answers, and that "
                        "the environment holds credentials which may read and write there"
                    ) from None
            time.sleep(pause)
        raise AssertionError("the last attempt returns or raises")


def _fault(error: BaseException) -> tuple[int, str]:
    """The status and the store's own word for it; 0 and an empty word when no answer came."""
    for cause in (error, error.__cause__, error.__context__):
        if isinstance(told := getattr(cause, "response", None), dict):
            status = told.get("ResponseMetadata", {}).get("HTTPStatusCode", 0)
            return int(status), str(told.get("Error", {}).get("Code", ""))
        if status := getattr(cause, "status_code", None):
            code = getattr(cause, "error_code", None)
            return int(status), str(getattr(code, "value", code) or "")
    return 0, ""


def _passing(error: BaseException, status: int) -> bool:
    """Whether the same request may work later. Without an answer it may, unless our side is at fault."""
    if status:
        return status >= 500 or status in _PASSING
    return (
        not isinstance(error, (PermissionError, ValueError, TypeError, ImportError))
        and "Credentials" not in type(error).__name__
    )


class ConditionalObject:
    """A register in an object store: compare and swap by conditional writes."""

    def __init__(self, bucket: Bucket, path: str) -> None:
        self._bucket, self._path = bucket, path

    def read(self) -> Seen:
        try:
            version = Bucket.version(self._bucket.look(self._path))
            return Seen(self._bucket.read(self._path), version)  # perhaps newer than the version: then a swap fails
        except _Absent:
            return Seen(None, None)

    def swap(self, seen: Seen, text: bytes) -> Seen:
        try:
            return Seen(text, self._bucket.write(self._path, text, self._bucket.only_if(seen.version)))
        except Moved:
            now = self.read()
            if now.text != text:
                raise
            return now  # ours: the request arrived although its answer was lost

    def age(self) -> float:
        """The store's own now is when it says a probe was written."""
        probe = f"{self._path}.now"
        self._bucket.write(probe, b"", {})
        return (self._changed(probe) - self._changed(self._path)).total_seconds()

    def _changed(self, path: str) -> datetime:
        try:
            told = self._bucket.look(path)
        except _Absent:
            raise TryAgain(
                f"the lease {self._bucket}/{path} is just changing hands; run the same command later"
            ) from None
        changed: datetime = told.get("LastModified") or told["last_modified"]
        return changed

    @contextmanager
    def hold(self) -> Iterator[None]:
        yield
