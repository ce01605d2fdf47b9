"""`[log]` of every kind: where the rows come from, and how they are to be understood."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, ValidationError, model_validator

from isthmus.settings.section import Section, column, file_key, key

__all__ = ["PATH", "PlainColumns", "PlainLog", "mapped", "spare"]

PATH = "folder or glob of Parquet files; a folder may hold date partitions such as dt=2026-11-30"


class PlainColumns(Section):
    """Our name = the log's own column name."""

    sender: str = column("sender", "string integer", "who contacted or paid; any string or integer type")
    receiver: str = column("receiver", "string integer", "who was contacted or paid; any string or integer type")
    time: str = column(
        "time", "timestamp date", "when: a timestamp of any unit or zone, or a date; without a zone it is UTC"
    )
    amount: str = column("", "number integer", "what it was worth, 0 or more; empty: the log has no amounts")
    id: str = column(
        "", "string integer", "identifies a row, so that one delivered twice counts once; empty: no such column"
    )


class PlainLog(Section):
    """Where the rows come from."""

    path: str = file_key(..., PATH, min_length=1)
    kind: Literal["plain"] = key("plain", "how the rows are to be understood")
    columns: PlainColumns = Field(default_factory=PlainColumns)

    @property
    def has_amounts(self) -> bool:
        """Whether a contact has a worth that adds up along a tie."""
        return bool(self.columns.amount)

    @model_validator(mode="after")
    def _two_sides(self) -> PlainLog:
        if self.columns.sender == self.columns.receiver:
            raise ValueError(
                f'log.columns.sender and log.columns.receiver are both "{self.columns.sender}"; '
                "name the column of each side"
            )
        return self


def mapped(columns: Section) -> dict[str, str]:
    """Our name -> the log's, of the columns that the log has."""
    return {ours: theirs for ours, theirs in columns.model_dump().items() if theirs}


def spare(log: Section, name: str) -> bool:
    """Whether the settings, otherwise as they are, may say that the log has no such column."""
    told = log.model_dump()
    try:
        type(log).model_validate({**told, "columns": {**told["columns"], name: ""}})
    except ValidationError:
        return False
    return True
