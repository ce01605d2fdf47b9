"""Small tables that the user keeps beside the settings: aliases, owners, hubs, rates."""

from __future__ import annotations

import difflib
import hashlib
from collections.abc import Mapping
from pathlib import Path

import polars as pl

from isthmus.errors import SettingsError, StoreError

__all__ = ["digest_of", "read_table"]


def read_table(
    path: str, key: str, columns: Mapping[str, pl.DataType], optional: frozenset[str] = frozenset()
) -> pl.DataFrame:
    """A CSV file with a header, or a Parquet file, with these columns and types, others left out.

    `key`: the setting that names the file, for messages. `optional` columns are null when the file lacks them, and
    only they may hold nulls. An empty path is an empty table. Raises SettingsError, StoreError; a message names line
    and column, never a value.
    """
    schema = dict(columns)
    if not path:
        return pl.DataFrame(schema=schema)
    try:
        raw = pl.read_parquet(path) if path.endswith(".parquet") else pl.read_csv(path, infer_schema=False)
    except OSError as error:
        raise StoreError(f"cannot read {key} = {path}: {error.strerror or 'no such file'}; check the path") from None
    except pl.exceptions.PolarsError:
        raise SettingsError(f"{key}: {path} is neither CSV with a header nor Parquet; write it as one") from None
    for name in schema:
        if name not in raw.columns and name not in optional:
            near = difflib.get_close_matches(name, raw.columns, n=1)
            hint = f"did you mean {near[0]}?" if near else f"it has {', '.join(raw.columns)}"
            raise SettingsError(f"{key}: {path} has no column {name!r}; {hint}")
    read: list[pl.Series] = []
    for name, type_ in schema.items():
        if name not in raw.columns:
            read.append(pl.Series(name, [None] * raw.height, type_))
            continue
        values = raw[name]
        if values.dtype == pl.String:
            values = values.str.strip_chars().replace("", None)
        cast = _cast(values, type_)
        bad = (cast.is_null() & values.is_not_null()) | (cast.is_null() & (name not in optional))
        if (at := bad.arg_max()) is not None and bad[at]:
            raise SettingsError(f"{key}: {path}, row {at + 1} after the header: column {name!r} is not {_told(type_)}")
        read.append(cast.alias(name))
    return pl.DataFrame(read)


def _cast(values: pl.Series, type_: pl.DataType) -> pl.Series:
    if values.dtype == pl.String and type_ == pl.Date():
        return values.str.to_date("%Y-%m-%d", strict=False)
    return values.cast(type_, strict=False)


def _told(type_: pl.DataType) -> str:
    if type_ == pl.Date():
        return "a date like 2026-11-30"
    return "text" if type_ == pl.String() else "a number"


def digest_of(path: str) -> str:
    """Changes with the file's content; empty for an empty path. Raises StoreError."""
    try:
        return hashlib.blake2b(Path(path).read_bytes(), digest_size=12).hexdigest() if path else ""
    except OSError as error:
        raise StoreError(f"cannot read {path}: {error.strerror}; check the path") from None
