"""What types a log's columns may have, and how they become ours."""

from __future__ import annotations

from dataclasses import dataclass

import pyarrow as pa

from isthmus.errors import DataRefused

__all__ = ["DAY", "PER_SECOND", "Kind", "kind_of"]

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


_WANTED = {
    "sender": ("string", "integer"),
    "receiver": ("string", "integer"),
    "time": ("timestamp", "date"),
    "amount": ("number", "integer"),
    "id": ("string", "integer"),
}
_HINTS = {
    "number": "keys are never floats, because 7 and 7.0 must be one party: cast it to an integer or a string",
    "integer": "a count has no unit or zone: write it as a timestamp",
    "string": "text is not guessed at: write it with the type it means",
}


def kind_of(found: pa.DataType, ours: str, theirs: str, file: str) -> Kind:
    """Classify a column, or raise DataRefused when it cannot serve as `ours`."""
    kind = _classify(found)
    if kind.family not in (*_WANTED[ours], "empty"):
        hint = _HINTS.get(kind.family, "write it with one of these types")
        raise DataRefused(
            f"log file {file}: column {theirs!r} (log.columns.{ours}) holds {found}, but "
            f"{' or '.join(_WANTED[ours])} is needed; {hint}"
        )
    if ours == "amount" and kind.family == "integer":
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
    if pa.types.is_null(values):
        return Kind("empty", text)
    return Kind("other", text)
