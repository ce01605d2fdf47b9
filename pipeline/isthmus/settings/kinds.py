"""`[log]`: one section for each kind of log, told apart by `kind`."""

from __future__ import annotations

from typing import Annotated, Any

from pydantic import Discriminator, Tag

from isthmus.settings.calls import CallsLog
from isthmus.settings.email import EmailLog
from isthmus.settings.log import PlainLog
from isthmus.settings.payments import PaymentsLog
from isthmus.settings.section import Section

__all__ = ["KINDS", "Log", "kind_of"]

KINDS: dict[str, type[Section]] = {"plain": PlainLog, "email": EmailLog, "calls": CallsLog, "payments": PaymentsLog}


def kind_of(log: Any) -> str:
    """The kind that a table `[log]`, or a section made from it, asks for; "plain" when it does not say."""
    kind = log.get("kind", "plain") if isinstance(log, dict) else getattr(log, "kind", "plain")
    return kind if isinstance(kind, str) else "plain"


Log = Annotated[
    Annotated[PlainLog, Tag("plain")]
    | Annotated[EmailLog, Tag("email")]
    | Annotated[CallsLog, Tag("calls")]
    | Annotated[PaymentsLog, Tag("payments")],
    Discriminator(kind_of),
]
