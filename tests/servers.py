"""Object stores on loopback that the tests start: moto's S3 in this process, Azurite's blobs in one of its own."""

from __future__ import annotations

import base64
import os
import shutil
import socket
import subprocess
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from typing import Any

import fsspec
import pytest

REFUSED = [(b"InternalError", "500 Internal Server Error"), (b"SlowDown", "503 Slow Down")]


class S3:
    """moto's server, and what is to happen to each request: `fault(method, path)` gives a status to answer instead."""

    def __init__(self) -> None:
        from moto.server import DomainDispatcherApplication, create_backend_app
        from werkzeug.serving import make_server

        self.fault: Callable[[str, str], int] = lambda method, path: 0
        self.asked: list[tuple[str, str]] = []
        self._app = DomainDispatcherApplication(create_backend_app)
        self._server = make_server("127.0.0.1", 0, self._answer, threaded=True)
        self.url = f"http://127.0.0.1:{self._server.server_port}"
        self._thread = threading.Thread(target=self._server.serve_forever, daemon=True)
        self._thread.start()

    def _answer(self, environ: dict[str, Any], start: Any) -> Any:
        method, path = environ["REQUEST_METHOD"], environ["PATH_INFO"]
        self.asked.append((method, path))
        if status := self.fault(method, path):
            environ["wsgi.input"].read(int(environ.get("CONTENT_LENGTH") or 0))
            code, line = REFUSED[status == 503]
            start(line, [("Content-Type", "application/xml")])
            return [b"<Error><Code>%s</Code><Message>no</Message></Error>" % code if method != "HEAD" else b""]
        return self._app(environ, start)

    def puts(self) -> list[str]:
        return [path for method, path in self.asked if method == "PUT"]

    def close(self) -> None:
        self._server.shutdown()
        self._thread.join()
        self._server.server_close()


def free_port() -> int:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        return int(listener.getsockname()[1])


def wait_for(port: int, process: subprocess.Popen[bytes]) -> None:
    for _ in range(600):
        with socket.socket() as client:
            if client.connect_ex(("127.0.0.1", port)) == 0:
                return
        assert process.poll() is None, "the server ended before it listened"
        time.sleep(0.05)
    raise AssertionError("the server does not listen")


class Azurite:
    """Azurite's blob server; what it was told survives `stop` and `start`."""

    def __init__(self, program: str, folder: Path) -> None:
        self._program, self._folder, self._port = program, folder, free_port()
        self._key = base64.b64encode(os.urandom(32)).decode()
        self.secret = self._key
        self.connection = (
            f"DefaultEndpointsProtocol=http;AccountName=test;AccountKey={self._key};"
            f"BlobEndpoint=http://127.0.0.1:{self._port}/test;"
        )
        self.start()

    def start(self) -> None:
        self._process = subprocess.Popen(
            [self._program, "--blobPort", str(self._port), "--skipApiVersionCheck", "--silent", "--disableTelemetry"],
            env=os.environ | {"AZURITE_ACCOUNTS": f"test:{self._key}"},
            cwd=self._folder,
            stdout=subprocess.DEVNULL,
        )
        wait_for(self._port, self._process)

    def stop(self) -> None:
        """In good order: Azurite writes its catalogue every few seconds and at its end, so a kill would lose some."""
        self._process.terminate()
        self._process.wait()


@contextmanager
def azurite(folder: Path) -> Iterator[Azurite]:
    """Skips where there is none, unless ISTHMUS_AZURITE names it: then it must be there."""
    program = os.environ.get("ISTHMUS_AZURITE") or shutil.which("azurite-blob")
    if not program:
        pytest.skip("azurite-blob is not installed (npm install azurite); ISTHMUS_AZURITE may name it")
    server = Azurite(program, folder)
    try:
        yield server
    finally:
        server.stop()


def driver(scheme: str) -> Any:
    """The test's own way into the store that the environment names, beside the package's."""
    return _driver(scheme, os.environ.get("AWS_ENDPOINT_URL"), os.environ.get("AZURE_STORAGE_CONNECTION_STRING"))


@cache
def _driver(scheme: str, *_where: str | None) -> Any:
    return fsspec.filesystem(scheme, skip_instance_cache=True, use_listings_cache=False)
