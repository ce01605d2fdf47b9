"""The whole configuration: typed, frozen, read from one TOML file per log.

Every key is declared once, in this room, with its default, unit and meaning. `configs/example.toml`, `isthmus check
--settings` and the error messages are all made from these models.
"""

from isthmus.settings.calls import CallsColumns, CallsLog, CallsRules
from isthmus.settings.email import EmailColumns, EmailLog, EmailRules
from isthmus.settings.file import load, load_all, to_toml
from isthmus.settings.kinds import Log
from isthmus.settings.log import PlainColumns, PlainLog, mapped, spare
from isthmus.settings.models import (
    Distance,
    Engine,
    Gate,
    Gates,
    Graph,
    Method,
    Run,
    Score,
    Settings,
    Signals,
    Ties,
    Window,
)
from isthmus.settings.payments import PaymentsColumns, PaymentsLog, PaymentsRules
from isthmus.settings.privacy import Privacy
from isthmus.settings.section import types_of

__all__ = [
    "CallsColumns",
    "CallsLog",
    "CallsRules",
    "Distance",
    "EmailColumns",
    "EmailLog",
    "EmailRules",
    "Engine",
    "Gate",
    "Gates",
    "Graph",
    "Log",
    "Method",
    "PaymentsColumns",
    "PaymentsLog",
    "PaymentsRules",
    "PlainColumns",
    "PlainLog",
    "Privacy",
    "Run",
    "Score",
    "Settings",
    "Signals",
    "Ties",
    "Window",
    "load",
    "load_all",
    "mapped",
    "spare",
    "to_toml",
    "types_of",
]
