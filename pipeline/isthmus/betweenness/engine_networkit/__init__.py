"""Engine `networkit`, the reference: the library's own algorithms, corrected and bounded uniformly."""

from isthmus.betweenness.engine_networkit.costs import planner
from isthmus.betweenness.engine_networkit.library import run

__all__ = ["planner", "run"]
