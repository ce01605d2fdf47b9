"""What types a log's columns may have, and how they become ours."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass

import pyarrow as pa

from isthmus.errors import DataRefused

__all__ = ["DAY", "PER_SECOND", "Kind", "drift", "kind_of"]

DAY = 86_400 * 10**6  # microseconds
PER_SECOND = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}


@dataclass(frozen=True)
class Kind:
    """A column's type as far as its meaning goes. `unit` and `zoned` are of times only; `text` is Arrow's name."""

    family: str
    text: str
    unit: str = ""
    zoned: bool = False

    def agrees(self, other: Kind) -> bool:
        """Whether two files may hold these side by side: widths, time units and zone names may differ."""
        return self.family == other.family and self.zoned == other.zoned


_WORDS = {"strings": "list of strings"}
_HINTS = {
    "number": "keys are never floats, because 7 and 7.0 must be one party: cast it to an integer or a string",
    "integer": "a count has no unit or zone: write it as a timestamp",
    "string": "text is not guessed at: write it with the type it means",
}


def kind_of(found: pa.DataType, ours: str, theirs: str, file: str, wanted: tuple[str, ...]) -> Kind:
    """Classify a column, or raise DataRefused when it is of no `wanted` type and so cannot serve as `ours`."""
    kind = _classify(found)
    if kind.family not in (*wanted, "empty"):
        hint = _HINTS.get(kind.family, "write it with one of these types")
        raise DataRefused(
            f"log file {file}: column {theirs!r} (log.columns.{ours}) holds {found}, but "
            f"{' or '.join(_WORDS.get(family, family) for family in wanted)} is needed; {hint}"
        )
    if "number" in wanted and kind.family == "integer":
        return Kind("number", kind.text)
    return kind


def _classify(found: pa.DataType) -> Kind:
    values = found.value_type if pa.types.is_dictionary(found) else found
    text = str(found)
    if pa.types.is_timestamp(values):
        return Kind("timestamp", text, values.unit, values.tz is not None)
    if pa.types.is_date32(values):
        return Kind("date", text)
    if pa.types.is_date64(values):
        return Kind("timestamp", text, "ms")
    if pa.types.is_string(values) or pa.types.is_large_string(values) or pa.types.is_string_view(values):
        return Kind("string", text)
    if pa.types.is_integer(values):
        return Kind("integer", text)
    if pa.types.is_floating(values) or pa.types.is_decimal(values):
        return Kind("number", text)
    if pa.types.is_boolean(values):
        return Kind("boolean", text)
    if pa.types.is_list(values) or pa.types.is_large_list(values):
        inner = _classify(values.value_type).family
        return Kind("strings" if inner in ("string", "empty") else "other", text)
    if pa.types.is_null(values):
        return Kind("empty", text)
    return Kind("other", text)


# Each holds all values of those before it. Ways of storing text are all alike.
_WIDTHS = (
    ("int8", "int16", "int32", "int64"),
    ("uint8", "uint16", "uint32", "uint64"),
    ("halffloat", "float", "double"),
)
_TEXTS = re.compile(r"(large_)?string(_view)?|dictionary<values=(large_)?string.*")
_DECIMAL = re.compile(r"decimal\d*\((\d+), (-?\d+)\)")


def drift(before: Mapping[str, str], now: Mapping[str, str], used: Collection[str]) -> dict[str, tuple[str, bool]]:
    """How a log's columns (name -> Arrow's name of the type) have changed: name -> (what, whether that is harmless).

    Harmless: a wider type of the same kind, and whatever happens to columns that are not `used`. A narrower type,
    another kind and another unit are not: the same numbers may now mean something else.
    """
    found: dict[str, tuple[str, bool]] = {}
    for name in sorted({*before, *now}):
        old, new = before.get(name), now.get(name)
        if old == new:
            continue
        if old is None:
            found[name] = f"({new}) is new", name not in used
        elif new is None:
            found[name] = "is gone", name not in used
        else:
            found[name] = f"changed from {old} to {new}", name not in used or _widened(old, new)
    return found


def _widened(old: str, new: str) -> bool:
    if old == "null" or (_TEXTS.fullmatch(old) and _TEXTS.fullmatch(new)):
        return True
    if (one := _DECIMAL.fullmatch(old)) and (two := _DECIMAL.fullmatch(new)):
        return one[2] == two[2] and int(one[1]) <= int(two[1])
    return any(old in row and new in row and row.index(old) <= row.index(new) for row in _WIDTHS)
