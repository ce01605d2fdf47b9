"""What all settings are made of: frozen sections whose keys carry unit, default and meaning."""

from __future__ import annotations

from typing import Any

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["Section", "column", "file_key", "files_of", "key", "types_of"]


class Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


def key(default: Any, meaning: str, unit: str = "", **limits: Any) -> Any:
    """A key with its default (`...`: required), its meaning and its unit; `limits` are Pydantic's."""
    return Field(default=default, description=meaning, json_schema_extra={"unit": unit}, **limits)


def file_key(default: Any, meaning: str, **limits: Any) -> Any:
    """A key that names a file; `load` resolves it against the folder of the settings."""
    return Field(default=default, description=meaning, json_schema_extra={"unit": "", "file": True}, **limits)


def column(default: str, types: str, meaning: str, *, optional: bool = False) -> Any:
    """A key that names a column of the log. Where it is optional or the default is empty, "": the log lacks it.

    types: what it may hold, separated by blanks, of string, integer, number, boolean, timestamp, date, strings
    (a list of them).
    """
    extra: dict[str, Any] = {"unit": "", "types": types}
    return Field(
        default=default,
        description=meaning,
        json_schema_extra=extra,
        min_length=1 if default and not optional else None,
    )


def types_of(columns: Section) -> dict[str, tuple[str, ...]]:
    """Key of a section of columns -> the types that the column may have."""
    told = {name: field.json_schema_extra for name, field in type(columns).model_fields.items()}
    return {name: tuple(str(extra["types"]).split()) for name, extra in told.items() if isinstance(extra, dict)}


def files_of(section: Section) -> set[str]:
    """The keys of a section that name files."""
    told = {name: field.json_schema_extra for name, field in type(section).model_fields.items()}
    return {name for name, extra in told.items() if isinstance(extra, dict) and extra.get("file")}
