"""Frames -> the warehouse folder that readers see. What is published changes only by being replaced whole."""

from isthmus.publish.earlier import (
    complete,
    counted_before,
    damaged,
    kept_nights,
    nights_of,
    published,
    record_of,
    reference,
    replaced,
    volume_of,
)
from isthmus.publish.manifest import input_id_of, manifest, revision_of, run_id_of, run_row
from isthmus.publish.night import Night, publish, publish_without
from isthmus.publish.plans import checkpoint_key, plan_once, remember
from isthmus.publish.views import refresh as refresh_views

__all__ = [
    "Night",
    "checkpoint_key",
    "complete",
    "counted_before",
    "damaged",
    "input_id_of",
    "kept_nights",
    "manifest",
    "nights_of",
    "plan_once",
    "publish",
    "publish_without",
    "published",
    "record_of",
    "reference",
    "refresh_views",
    "remember",
    "replaced",
    "revision_of",
    "run_id_of",
    "run_row",
    "volume_of",
]
