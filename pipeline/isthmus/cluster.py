"""The one door to Dask: run one function over many tasks, here, in local processes, or on a running cluster.

Tasks are small picklable values and so are results; large data goes through files that both sides see. The same
functions run behind all three doors. Results come back in the order of the tasks.
"""

from __future__ import annotations

import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor, wait
from contextlib import contextmanager
from typing import Any, Protocol, TypeVar

from isthmus.errors import SettingsError, StoreError

__all__ = ["Door", "Here", "Tick", "open_door"]

WORKER_SECONDS = 30  # workers that a batch system starts may come a little later than the scheduler
ANSWER_SECONDS = 10  # a scheduler that is there answers in one

Task = TypeVar("Task")
Result = TypeVar("Result")
Tick = Callable[[float], None]


class Door(Protocol):
    """Where tasks run."""

    def stream(
        self, function: Callable[[Task], Result], tasks: Iterable[Task], halt: Callable[[], None] | None = None
    ) -> Iterator[Result]:
        """function(task) in the order of the tasks, a few worked on ahead of what has been asked for.

        Closing the iterator, also by an error or Ctrl-C, drops what has not begun. What has begun in this process is
        waited for; `halt` is called before, and may have it end sooner.
        """
        ...

    def run(self, function: Callable[[Task], Result], tasks: Sequence[Task], tick: Tick | None = None) -> list[Result]:
        """function(task) for every task; `tick` hears the share done, 0..1. The first error raised ends it all."""
        ...


class Here:
    """Threads in this process."""

    def __init__(self, threads: int = 0) -> None:
        self._threads = threads or os.cpu_count() or 1

    def stream(
        self, function: Callable[[Task], Result], tasks: Iterable[Task], halt: Callable[[], None] | None = None
    ) -> Iterator[Result]:
        pool = ThreadPoolExecutor(self._threads, thread_name_prefix="isthmus")
        try:
            ahead: deque[Future[Result]] = deque()
            for task in tasks:
                ahead.append(pool.submit(function, task))
                if len(ahead) > self._threads:
                    yield _when_done(ahead.popleft())
            while ahead:
                yield _when_done(ahead.popleft())
        except BaseException:  # closed early, too
            if halt:
                halt()
            raise
        finally:
            pool.shutdown(wait=True, cancel_futures=True)

    def run(self, function: Callable[[Task], Result], tasks: Sequence[Task], tick: Tick | None = None) -> list[Result]:
        import dask
        from dask.callbacks import Callback

        done = 0

        def count(*_: object) -> None:
            nonlocal done
            done += 1
            if tick:
                tick(done / len(tasks))

        delayed = [dask.delayed(function, pure=False, traverse=False)(task) for task in tasks]
        with Callback(posttask=count):
            return list(dask.compute(*delayed, scheduler="threads", num_workers=self._threads, optimize_graph=False))


def _when_done(future: Future[Result]) -> Result:
    """A future's result. Wakes up now and then: a signal that the system gave to another thread is only seen then."""
    while not wait([future], timeout=0.5).done:
        pass
    return future.result()


class _Elsewhere:
    """Workers behind a Dask scheduler."""

    def __init__(self, client: Any, memory: int = 0) -> None:
        """`memory`: bytes that each worker may take, 0 when not known here."""
        self._client, self._memory = client, memory

    def stream(
        self, function: Callable[[Task], Result], tasks: Iterable[Task], halt: Callable[[], None] | None = None
    ) -> Iterator[Result]:
        # two for each of the workers' threads: one at work, one on its way
        most = 2 * max(1, sum(self._client.nthreads().values()))
        ahead: deque[Any] = deque()
        try:
            for task in tasks:
                ahead.append(self._client.submit(function, task, pure=False))
                if len(ahead) > most:
                    yield self._result(ahead.popleft())
            while ahead:
                yield self._result(ahead.popleft())
        finally:
            self._client.cancel(list(ahead))

    def run(self, function: Callable[[Task], Result], tasks: Sequence[Task], tick: Tick | None = None) -> list[Result]:
        from distributed import as_completed

        futures = self._client.map(function, tasks, pure=False)
        order = {future.key: index for index, future in enumerate(futures)}
        results: list[Any] = [None] * len(futures)
        try:
            for done, future in enumerate(as_completed(futures, loop=self._client.loop), 1):
                results[order[future.key]] = self._result(future)
                if tick:
                    tick(done / len(futures))
        except BaseException:
            self._client.cancel(futures)
            raise
        return results

    def _result(self, future: Any) -> Any:
        """Dask does the work of a worker that died again elsewhere, but not for ever."""
        from distributed import KilledWorker

        try:
            return future.result()
        except KilledWorker:
            raise SettingsError(
                "workers died again and again at the same task, most likely for want of memory"
                + (f": each may take {self._memory / 2**30:.2f} GiB" if self._memory else "")
                + "; raise run.memory, or lower run.workers or run.threads, or give the workers of run.scheduler more"
            ) from None


@contextmanager
def _ours_alone(number: int) -> Iterator[None]:
    """Processes started meanwhile do not hear the signal: Ctrl-C goes to all, but is ours to answer."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(number, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(number, before)


def _expect_answer(scheduler: str) -> None:
    """Ask the scheduler who it is: Dask's client would wait for ever for one that is up but stopped."""
    import asyncio

    from distributed import Security
    from distributed.core import rpc

    async def ask() -> None:
        async with asyncio.timeout(ANSWER_SECONDS):
            async with rpc(scheduler, connection_args=Security().get_connection_args("client")) as asked:
                await asked.identity()

    with ThreadPoolExecutor(1) as aside:  # the caller may have an event loop of its own
        aside.submit(lambda: asyncio.run(ask())).result()


@contextmanager
def open_door(
    *, workers: int = 0, threads: int = 0, scheduler: str = "", scratch: str = "", memory: int = 0
) -> Iterator[Door]:
    """In this process (the default), in `workers` local processes of `threads` each, or on `scheduler`.

    `scratch` is a folder for the local workers' own files, `memory` the bytes that all of them together may take (0: no
    limit). Raises StoreError when the scheduler does not answer.
    """
    if scheduler:
        from distributed import Client

        try:
            _expect_answer(scheduler)
            client = Client(scheduler, timeout=ANSWER_SECONDS, set_as_default=False)
        except (OSError, TimeoutError, ValueError) as error:
            raise StoreError(
                f"no Dask scheduler answers at run.scheduler = {scheduler!r} ({type(error).__name__}); start it, "
                "correct the address, or leave the key empty to run in this process"
            ) from None
        with client:
            try:
                client.wait_for_workers(1, timeout=WORKER_SECONDS)
            except TimeoutError:
                raise StoreError(
                    f"the Dask scheduler at run.scheduler = {scheduler!r} has no worker after {WORKER_SECONDS} s; "
                    "start workers that see the log, run.work and this version of isthmus"
                ) from None
            yield _Elsewhere(client)
    elif workers:
        from distributed import Client, LocalCluster

        each = threads or max(1, (os.cpu_count() or 1) // workers)
        limit = memory // workers
        # A worker runs `each` tasks at once, so no library inside a task may take more than one thread by itself.
        env = dict.fromkeys(("OMP_NUM_THREADS", "POLARS_MAX_THREADS", "NUMBA_NUM_THREADS"), "1")
        with _ours_alone(signal.SIGINT):
            local = LocalCluster(
                n_workers=workers,
                threads_per_worker=each,
                memory_limit=limit or None,
                processes=True,
                env=env,
                # Dask serves its health page in any case: any free port, for this machine only
                dashboard_address="127.0.0.1:0",
                scheduler_kwargs={"dashboard": False},
                local_directory=scratch or None,
                silence_logs=50,
            )
        with local, Client(local, set_as_default=False) as client:
            yield _Elsewhere(client, limit)
    else:
        yield Here(threads)
