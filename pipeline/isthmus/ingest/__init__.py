"""Log files -> one table of ties per day, and over the window. Rows, dirt and Dask's tasks end in this room."""

from isthmus.ingest.columns import drift
from isthmus.ingest.files import Survey, holds, states_of, survey
from isthmus.ingest.window import Reading, Sample, in_window, read_window, sample_ties

__all__ = [
    "Reading",
    "Sample",
    "Survey",
    "drift",
    "holds",
    "in_window",
    "read_window",
    "sample_ties",
    "states_of",
    "survey",
]
