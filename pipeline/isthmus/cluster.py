"""The one door to Dask: run one function over many tasks, here, in local processes, or on a running cluster.

Tasks are small picklable values and so are results; large data goes through files that both sides see. The same
functions run behind all three doors. Results come back in the order of the tasks.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any, Protocol, TypeVar

from isthmus.errors import StoreError

__all__ = ["Door", "open_door"]

ANSWER_SECONDS = 10  # a scheduler that is there answers in one

Task = TypeVar("Task")
Result = TypeVar("Result")
Tick = Callable[[float], None]


class Door(Protocol):
    """Where tasks run."""

    def run(self, function: Callable[[Task], Result], tasks: Sequence[Task], tick: Tick | None = None) -> list[Result]:
        """function(task) for every task; `tick` hears the share done, 0..1. The first error raised ends it all."""
        ...


class _Here:
    """Dask's threads in this process."""

    def __init__(self, threads: int) -> None:
        self._threads = threads

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


class _Elsewhere:
    """Workers behind a Dask scheduler."""

    def __init__(self, client: Any) -> None:
        self._client = client

    def run(self, function: Callable[[Task], Result], tasks: Sequence[Task], tick: Tick | None = None) -> list[Result]:
        from distributed import as_completed

        futures = self._client.map(function, tasks, pure=False)
        order = {future.key: index for index, future in enumerate(futures)}
        results: list[Any] = [None] * len(futures)
        for done, (future, result) in enumerate(as_completed(futures, with_results=True), 1):
            results[order[future.key]] = result
            if tick:
                tick(done / len(futures))
        return results


@contextmanager
def open_door(*, workers: int = 0, threads: int = 0, scheduler: str = "", scratch: str = "") -> Iterator[Door]:
    """In this process (the default), in `workers` local processes of `threads` each, or on `scheduler`.

    `scratch` is a folder for the local workers' own files. Raises StoreError when the scheduler does not answer.
    """
    if scheduler:
        from distributed import Client

        try:
            client = Client(scheduler, timeout=ANSWER_SECONDS, set_as_default=False)
        except (OSError, TimeoutError, ValueError) as error:
            raise StoreError(
                f"no Dask scheduler answers at run.scheduler = {scheduler!r} ({type(error).__name__}); start it, "
                "correct the address, or leave the key empty to run in this process"
            ) from None
        with client:
            yield _Elsewhere(client)
    elif workers:
        from distributed import Client, LocalCluster

        each = threads or max(1, (os.cpu_count() or 1) // workers)
        # Dask starts workers with one OpenMP thread, and Polars in every worker would take all cores: say it outright.
        env = {name: str(each) for name in ("OMP_NUM_THREADS", "POLARS_MAX_THREADS", "NUMBA_NUM_THREADS")}
        with (
            LocalCluster(
                n_workers=workers,
                threads_per_worker=1,
                processes=True,
                env=env,
                dashboard_address=None,
                local_directory=scratch or None,
                silence_logs=50,
            ) as local,
            Client(local, set_as_default=False) as client,
        ):
            yield _Elsewhere(client)
    else:
        yield _Here(threads or os.cpu_count() or 1)
