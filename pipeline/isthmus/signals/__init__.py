"""What a run tells machines: JSON log lines, a Prometheus text file, OpenLineage events. Never a party's key."""

from isthmus.signals.follow import examine, follow
from isthmus.signals.lines import note

__all__ = ["examine", "follow", "note"]
