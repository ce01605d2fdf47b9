"""Ties -> parties with integer ids -> compressed adjacency on disk. No string survives past this room."""

from isthmus.graph.adjacency import Graph, ids_of
from isthmus.graph.arrays import Arrays
from isthmus.graph.parties import describe

__all__ = ["Arrays", "Graph", "describe", "ids_of"]
