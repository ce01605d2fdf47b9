"""Frames -> the warehouse folder that readers see. What is published changes only by being replaced whole."""

from isthmus.publish.manifest import manifest, run_id_of, run_row
from isthmus.publish.night import Night, publish
from isthmus.publish.plans import plan_once, remember

__all__ = ["Night", "manifest", "plan_once", "publish", "remember", "run_id_of", "run_row"]
