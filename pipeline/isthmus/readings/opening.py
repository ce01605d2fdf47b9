"""The reading that a log's settings ask for."""

from __future__ import annotations

from isthmus.readings.calls import CallsReading
from isthmus.readings.email import EmailReading
from isthmus.readings.payments import PaymentsReading
from isthmus.readings.plain import PlainReading
from isthmus.readings.reading import Reading
from isthmus.settings import CallsLog, EmailLog, Log, PaymentsLog

__all__ = ["open_reading"]


def open_reading(log: Log) -> Reading:
    """Raises SettingsError and StoreError when a table that the user gave cannot be read."""
    if isinstance(log, EmailLog):
        return EmailReading.open(log)
    if isinstance(log, CallsLog):
        return CallsReading.open(log)
    if isinstance(log, PaymentsLog):
        return PaymentsReading.open(log)
    return PlainReading.open(log)
