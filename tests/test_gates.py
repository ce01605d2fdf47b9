"""What the gates take their shares of."""

from __future__ import annotations

from datetime import datetime, timedelta

import polars as pl
import pytest

from isthmus.cluster import open_door
from isthmus.errors import GateStopped
from isthmus.gates import Gatekeeper
from isthmus.ingest import read_window, survey
from isthmus.settings import Gates, Log
from isthmus.watch import Watch


def test_rows_outside_the_window_do_not_dilute_the_refused(tmp_path) -> None:
    """Half of the window's rows are bad, but only one in a hundred of the file's."""
    day = datetime(2026, 11, 30, 12)
    times = [day] * 4 + [day - timedelta(days=90)] * 396
    senders = [None, "a", None, "b"] + ["c"] * 396
    pl.DataFrame({"sender": senders, "receiver": ["d"] * 400, "time": times}).write_parquet(tmp_path / "one.parquet")
    log = Log(path=str(tmp_path))
    with open_door() as door:
        found = survey(log, day.date(), day.date(), door)
        reading = read_window(found, log, day.date(), day.date(), tmp_path / "work", door, Watch())
    assert (reading.rows_read, reading.rows_in_window) == (400, 4)
    with pytest.raises(
        GateStopped, match=r"2 of the window's 4 rows were refused, a share of 50\.00%.*2 sender is null"
    ):
        Gatekeeper(Gates(), lambda _: None).after_reading(
            rows=reading.rows_in_window,
            refused=reading.outcomes["refused"],
            missing_days=(),
            volume=reading.volume,
            last_day=day.date(),
            drift={},
            before=None,
        )
