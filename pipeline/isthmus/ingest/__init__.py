"""Log files -> one table of ties per day, and over the window. Rows, dirt and Dask's tasks end in this room."""

from isthmus.ingest.files import Survey, survey
from isthmus.ingest.window import Reading, Sample, in_window, read_window, sample_ties

__all__ = ["Reading", "Sample", "Survey", "in_window", "read_window", "sample_ties", "survey"]
