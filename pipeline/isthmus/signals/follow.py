"""Follow a run from start to end and pass on what it tells. No fault of a signal stops or fails a night."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import date
from importlib import import_module
from typing import Any

from isthmus.errors import SettingsError
from isthmus.settings import Settings
from isthmus.signals.run import Run, Signal
from isthmus.watch import Watch

__all__ = ["examine", "follow"]

# key of [signals] -> the module that tells it; one that needs a library is an extra of the same name as the key
HOMES = {"log": "lines", "prometheus": "metrics", "openlineage": "lineage"}


def examine(settings: Settings) -> None:
    """Raise SettingsError when a signal that is asked for cannot be given: its library is missing, its file taken."""
    _open(settings)


@contextmanager
def follow(
    settings: Settings, first_day: date, as_of: date, watch: Watch
) -> Iterator[Callable[[dict[str, Any]], None]]:
    """Tell the signals what happens within the block. Yields the function that takes the manifest once published.

    Raises what `examine` raises, before anything is told, and passes on what the block raises, after that is told.
    """
    run = Run(settings, first_day, as_of, watch)
    signals = [_Guarded(key, signal) for key, signal in _open(settings).items()]

    def hear(event: str, figures: dict[str, Any]) -> None:
        for signal in signals:
            signal.hear(event, run, figures)

    watch.listeners.append(hear)
    try:
        hear("run_started", {"window_start": first_day, "definition": settings.definition})
        yield run.published
    except BaseException as error:
        run.ended_in(error)
        raise
    finally:
        signals.reverse()  # so that the log's last line is the end, after what the others may have to warn of
        hear(run.state, {})
        watch.listeners.remove(hear)


def _open(settings: Settings) -> dict[str, Signal]:
    """The signals that are asked for. Importing them here, by name, keeps their libraries out of nights without."""
    signals: dict[str, Signal] = {}
    for key, home in HOMES.items():
        if getattr(settings.signals, key):
            try:
                module = import_module(f"isthmus.signals.{home}")
            except ImportError:
                raise SettingsError(
                    f'signals.{key} needs a library that is not installed; install isthmus[{key}], or set {key} = ""'
                ) from None
            signals[key] = module.signal(settings)
    return signals


class _Guarded:
    """A signal whose first fault becomes a warning; it is tried again at the next event."""

    def __init__(self, key: str, signal: Signal) -> None:
        self._key, self._signal, self._faulty = key, signal, False

    def hear(self, event: str, run: Run, figures: dict[str, Any]) -> None:
        try:
            self._signal.hear(event, run, figures)
        except Exception as error:
            if not self._faulty:
                self._faulty = True
                run.watch.warning(f"signals.{self._key} could not be told: {_reason(error)}; the night goes on")


def _reason(error: Exception) -> str:
    """The kind of fault. Not the library's own words: they may hold what stands in headers and addresses."""
    cause = error.__cause__ or error
    status = getattr(getattr(cause, "response", None), "status_code", None)
    if status is not None:
        return f"the endpoint answered {status}"
    return getattr(cause, "strerror", None) or type(cause).__name__
