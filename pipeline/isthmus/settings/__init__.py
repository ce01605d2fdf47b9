"""The whole configuration: typed, frozen, read from one TOML file per log.

Every key is declared once, in this room, with its default, unit and meaning. `configs/example.toml`, `isthmus check
--settings` and the error messages are all made from these models.
"""

from isthmus.settings.file import load, to_toml
from isthmus.settings.log import PlainColumns, PlainLog
from isthmus.settings.models import Distance, Engine, Gate, Gates, Graph, Method, Run, Score, Settings, Signals, Window
from isthmus.settings.section import types_of

Log = PlainLog

__all__ = [
    "Distance",
    "Engine",
    "Gate",
    "Gates",
    "Graph",
    "Log",
    "Method",
    "PlainColumns",
    "PlainLog",
    "Run",
    "Score",
    "Settings",
    "Signals",
    "Window",
    "load",
    "to_toml",
    "types_of",
]
