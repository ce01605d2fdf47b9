"""Where nights are published: a folder or a bucket, told apart by the setting's text."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from isthmus.store.register import Guard, Register

__all__ = ["File", "Guard", "Place", "place"]


@dataclass(frozen=True)
class File:
    """A file of a night: its path below the place, and what writes it. Written in the order in which they are given.

    `blank` writes one of the same kind that tells nothing: what readers of a folder find while a night is being
    published for the first time. Without one they find no such file until the night is there.
    """

    path: str
    write: Callable[[Path], object]
    blank: Callable[[Path], object] | None = None

    @property
    def name(self) -> str:
        return self.path.rpartition("/")[2]


class Place(Protocol):
    """`str` of a place is what a person would type."""

    def examine(self, layout: int, key: str) -> int:
        """The layout that the place has (0: none yet); changes nothing.

        `key` is the setting that names the place. Raises SettingsError when a newer isthmus wrote it, StoreError.
        """

    def claim(self, layout: int, key: str) -> None:
        """Make the place ours to write, or raise what `examine` raises."""

    def fetch(self, path: str) -> bytes | None:
        """The bytes of a file below the place, None where there is none. Raises StoreError."""

    def size(self, path: str) -> int | None:
        """Bytes of a file below the place, None where there is none. Raises StoreError."""

    def below(self, path: str) -> list[str]:
        """The names directly below a path, sorted; none where there is no such path. Raises StoreError."""

    def files(self) -> Iterator[str]:
        """The paths of all files below the place, hidden ones too, each once. Raises StoreError."""

    def whole(self, night: str) -> dict[str, str]:
        """The files of a night as it is published now, all of one run: name without ending -> path below the place.

        They stay until the night is published a second time from now. Empty where it is not there whole. Raises
        StoreError.
        """

    def register(self, name: str) -> Register:
        """The register of a lease."""

    def sweep(self, series: str) -> None:
        """Remove what killed runs of this series left. To be called under the lease's guard. Raises StoreError."""

    def publish(self, night: str, files: Sequence[File], guard: Guard) -> None:
        """Replace the files of a night, such as `series=s/as_of=2026-11-30`; their names differ.

        Raises StoreError with what was there before still in place, and what `guard` raises.
        """

    def remove(self, night: str, guard: Guard) -> None:
        """Remove a night whole, run.json first; what a killed removal leaves the next one removes. Raises StoreError,
        and what `guard` raises."""

    def remove_earlier(self, night: str, guard: Guard) -> None:
        """Remove what is kept of a night as it was before it was replaced. Raises the same."""


def place(text: str | Path, scratch: Path | None = None) -> Place:
    """The place that a setting names. `scratch`: a local folder in which files for an object store are made.

    Raises SettingsError when the driver of an object store is not installed.
    """
    if "://" in str(text):
        from isthmus.store.bucket import Bucket

        return Bucket(str(text), scratch)
    from isthmus.store.folder import Folder

    return Folder(Path(text))
