"""Frames -> the warehouse folder that readers see. What is published changes only by being replaced whole."""

from isthmus.publish.manifest import input_id_of, manifest, run_id_of, run_row
from isthmus.publish.night import Night, publish
from isthmus.publish.plans import plan_once, remember

__all__ = ["Night", "input_id_of", "manifest", "plan_once", "publish", "remember", "run_id_of", "run_row"]
