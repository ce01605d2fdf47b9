"""The one room that knows how files are put where readers look for them: folders, object stores, leases."""

from isthmus.store.files import LAYOUT_FILE, claim, examine, forget, fresh, layout_in, put, story, sweep
from isthmus.store.folder import Folder
from isthmus.store.leases import Lease, lease
from isthmus.store.places import File, Guard, Place, place

__all__ = [
    "LAYOUT_FILE",
    "File",
    "Folder",
    "Guard",
    "Lease",
    "Place",
    "claim",
    "examine",
    "forget",
    "fresh",
    "layout_in",
    "lease",
    "place",
    "put",
    "story",
    "sweep",
]
