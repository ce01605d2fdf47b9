"""Log files -> one table of ties per day, and over the window. Rows, dirt and Dask's tasks end in this room."""

from isthmus.ingest.columns import drift
from isthmus.ingest.files import Survey, holds, states_of, survey
from isthmus.ingest.window import Sample, Window, in_window, parties_of, read_window, sample_window

__all__ = [
    "Sample",
    "Survey",
    "Window",
    "drift",
    "holds",
    "in_window",
    "parties_of",
    "read_window",
    "sample_window",
    "states_of",
    "survey",
]
