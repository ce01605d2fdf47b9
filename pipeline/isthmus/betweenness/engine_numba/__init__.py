"""Engine `numba`: this project's own kernels, exact and sampled, with an interval for each party."""

from isthmus.betweenness.engine_numba.costs import planner
from isthmus.betweenness.engine_numba.engine import run

__all__ = ["planner", "run"]
