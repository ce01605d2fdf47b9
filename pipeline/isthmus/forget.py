"""Old nights, or one party, removed from the series' folders; and looked for afterwards, in every file.

What is kept between nights costs time to make again and nothing else, so all of it that could hold the party goes.
"""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from datetime import date
from io import BytesIO
from pathlib import Path

import polars as pl

from isthmus import store
from isthmus.cluster import open_door
from isthmus.errors import DataRefused, SettingsError, StoreError
from isthmus.ingest import parties_of, survey
from isthmus.lookup import parties_behind
from isthmus.privacy import open_pseudonyms
from isthmus.publish import Night, damaged, kept_nights, publish_without, record_of
from isthmus.readings import open_reading
from isthmus.settings import Settings
from isthmus.store import Guard, Place
from isthmus.tables import LAYOUT

__all__ = ["Forgotten", "forget_nights", "forget_party", "holding", "unknown_series"]

# Of the work folder, what tells of no party: leases, layout, how runs ended, plans.
TELLS_OF_NOBODY = (".leases", store.LAYOUT_FILE, "endings", "plan.json")
SHORT = 6  # characters: a shorter key is found in any file by chance, so it is compared with whole values only
EVER = date(1970, 1, 1), date(2199, 12, 31)
WARNING = "a party was forgotten on request: its rows are gone, what is told of the others is as it was"


@dataclass(frozen=True)
class Forgotten:
    """`nights`: removed, or published again. `looked_at`: files searched. `in_log`: whether the log has the party still
    (None: nobody looked, or there is no log)."""

    nights: tuple[date, ...]
    rows: int = 0
    looked_at: int = 0
    in_log: bool | None = None


def forget_nights(every: Sequence[Settings], before: date, *, dry: bool) -> Forgotten:
    """Remove the published nights of a file's series before a day, and what is kept of days before it.

    A night at or after `before` stays whole, so it still tells of the days of its own window. `dry`: only say which.
    Raises TryAgain when a run is at work, StoreError.
    """
    gone = set[date]()
    for settings in every:
        with _both_leases(settings) as (warehouse, guard):
            nights = [night for night in kept_nights(warehouse, settings.series) if night.as_of < before]
            if not dry:
                for night in nights:
                    warehouse.remove(night.name, guard)
                _empty(settings, before)
            gone |= {night.as_of for night in nights}
    return Forgotten(tuple(sorted(gone)))


def forget_party(every: Sequence[Settings], text: str, *, dry: bool) -> Forgotten:
    """Remove one party from all published nights of a file's series, and all kept work; then search every file.

    `text`: its key, or its pseudonym. Only nights that hold it are published again. Raises TryAgain when a run is at
    work, StoreError, also when a file below run.work or run.warehouse still holds it afterwards.
    """
    _one_secret(every)
    own = every[0]  # all series of a file have one log, one warehouse and one secret
    texts = _forms(own, text)
    changed, rows = set[date](), 0
    for settings in every:
        with _both_leases(settings) as (warehouse, guard):
            for night in kept_nights(warehouse, settings.series):
                if gone := _held(night, texts) if dry else _rewritten(night, texts, guard):
                    rows += gone
                    changed.add(night.as_of)
            if not dry:
                _empty(settings)
    nights, in_log = tuple(sorted(changed)), _in_log(own, texts)
    if dry:
        return Forgotten(nights, rows, in_log=in_log)
    return Forgotten(nights, rows, _proven(own, store.place(own.run.warehouse), texts), in_log)


def _one_secret(every: Sequence[Settings]) -> None:
    """Raises SettingsError when a night has the pseudonyms of another secret, among which the party is not found."""
    pseudonyms = open_pseudonyms(every[0].privacy, every[0].log.kind)
    mine = pseudonyms.key_id if pseudonyms else None
    for settings in every:
        for night in kept_nights(store.place(settings.run.warehouse), settings.series):
            if (key_id := record_of(night).get("key_id")) not in (None, mine):
                raise SettingsError(
                    f"night {night.name} has pseudonyms of another secret, key_id {key_id}, and these settings have "
                    f"{mine or 'none'}: forget with that secret and purpose, or the night as a whole with --before"
                )


def unknown_series(every: Sequence[Settings]) -> list[str]:
    """Series in the warehouse whose names begin as this file's do, and which it no longer defines."""
    own = every[0]
    known = {settings.series for settings in every}
    found = {name.removeprefix("series=") for name in store.place(own.run.warehouse).below("runs")}
    return sorted(name for name in found - known if name.startswith(f"{own.series}-"))


@contextmanager
def _both_leases(settings: Settings) -> Iterator[tuple[Place, Guard]]:
    """As a night has them: the work folder and the series in the warehouse."""
    work, leased = settings.work, f"series={settings.series}"
    warehouse = store.place(settings.run.warehouse)
    warehouse.claim(LAYOUT, "run.warehouse")
    store.claim(work, LAYOUT, "run.work")
    with store.lease(store.Folder(work), leased), store.lease(warehouse, leased) as held:
        with held.guard():
            warehouse.sweep(settings.series)
        yield warehouse, held.guard


def _empty(settings: Settings, before: date | None = None) -> None:
    """Remove what is kept; with `before` not the later days, nor how runs of later nights ended."""
    readings = {settings.reading, settings.clear_reading}
    days = [reading / "days" for reading in readings]  # its folders are named by the day
    with store.story("remove"):
        dated = (
            [*(path for folder in days for path in folder.glob("*")), *(settings.work / "endings").glob("*")]
            if before
            else []
        )
        others = [path for path in settings.work.glob("*") if path.name not in TELLS_OF_NOBODY]
        others += [path for reading in readings for path in reading.glob("*") if not (before and path in days)]
        for path in [*(path for path in dated if path.name[:10] < str(before)), *others]:
            shutil.rmtree(path) if path.is_dir() else path.unlink()


def _forms(settings: Settings, text: str) -> list[str]:
    """All that may stand for the party: the text as given, which may be a pseudonym, its keys, their pseudonyms."""
    pseudonyms = open_pseudonyms(settings.privacy, settings.log.kind)
    keys = parties_behind(open_reading(settings.log), text) or [text]
    made = pseudonyms.of(pl.Series(keys)).to_list() if pseudonyms else []
    return list(dict.fromkeys([text, *keys, *made]))


def _rewritten(night: Night, texts: Sequence[str], guard: Guard) -> int:
    told = record_of(night)
    whole = told and not damaged(night, told)  # of another the search will name the file
    gone = publish_without(night, told, texts, WARNING, guard) if whole else 0
    night.warehouse.remove_earlier(night.name, guard)
    return gone


def _held(night: Night, texts: Sequence[str]) -> int:
    """How many rows of a night hold it."""
    rows = 0
    for table, sides in (("scores", ["party"]), ("parties", ["party"]), ("ties", ["sender", "receiver"])):
        if (stored := night.fetch(table)) is not None:
            frame = pl.read_parquet(stored, columns=sides)
            rows += frame.filter(pl.any_horizontal(pl.all().is_in(texts))).height
    return rows


def _in_log(settings: Settings, texts: Sequence[str]) -> bool | None:
    """Whether any file of the log has the party."""
    pseudonyms = open_pseudonyms(settings.privacy, settings.log.kind)
    with suppress(StoreError, DataRefused):
        with open_door(threads=settings.run.threads) as door:
            found = survey(settings.log, *EVER, door)
        for parties in parties_of(found, settings.log, open_reading(settings.log)):
            made = [parties, pseudonyms.of(parties)] if pseudonyms else [parties]
            if any(each.is_in(texts).any() for each in made):
                return True
        return False
    return None


def _proven(settings: Settings, warehouse: Place, texts: Sequence[str]) -> int:
    """How many files were searched. Raises StoreError, naming the first that holds the party."""
    looked_at = 0
    for place in (store.Folder(Path(settings.run.work)), warehouse):
        for path in place.files():
            data = place.fetch(path)
            looked_at += data is not None
            if data is not None and holding(data, texts):
                raise StoreError(
                    f"{place}/{path} still holds the party; what this series kept and published whole is without it. "
                    "A file of another series: forget with its settings; an incomplete night: run it again, or forget "
                    "it with --before; else remove the file"
                )
    return looked_at


def holding(data: bytes, texts: Sequence[str]) -> bool:
    """Whether a file's bytes hold one of the texts: tables by their values, other files byte by byte."""
    if (frame := _table(data)) is not None:
        nested = [name for name, type_ in frame.schema.items() if type_.is_nested()]
        plain = frame.select(pl.selectors.string(include_categorical=True), pl.selectors.enum()).cast(pl.String)
        if any(_among(column.unique(), texts) for column in plain.iter_columns()):
            return True
        return bool(nested) and _within(frame.select(nested).write_ndjson().encode(), texts)
    return _within(data, texts)


def _table(data: bytes) -> pl.DataFrame | None:
    with suppress(pl.exceptions.PolarsError, OSError):
        if data.startswith(b"PAR1"):
            return pl.read_parquet(BytesIO(data))
        if data.startswith(b"ARROW1"):
            return pl.read_ipc(BytesIO(data))
    return None


def _among(values: pl.Series, texts: Sequence[str]) -> bool:
    """Whether a value is one of the texts, or holds one as a word of its own (not within a longer key)."""
    words = "|".join(re.escape(text) for text in texts if len(text) >= SHORT)
    within = values.str.contains(rf"(^|[^\w.+@-])({words})($|[^\w.+@-])") if words else values.is_in(texts)
    return bool((values.is_in(texts) | within).any())


def _within(data: bytes, texts: Sequence[str]) -> bool:
    escaped = [json.dumps(text) for text in texts]
    asked = [*escaped, *(word[1:-1] for word in escaped if len(word) - 2 >= SHORT)]
    asked += [text for text in texts if len(text.encode()) >= SHORT]
    return any(text.encode() in data for text in asked)
