"""What the rows of each kind of log mean: who contacted whom, what that is worth, and what is left out and why."""

from isthmus.readings.opening import open_reading
from isthmus.readings.reading import AMOUNT, DUPLICATE, FILTERED, REFUSED, Reading, Verdict

__all__ = ["AMOUNT", "DUPLICATE", "FILTERED", "REFUSED", "Reading", "Verdict", "open_reading"]
