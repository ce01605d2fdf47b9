"""Random small logs through ingest, and through the whole night, against plain Python."""

from __future__ import annotations

import tempfile
from datetime import UTC, date, datetime, timedelta
from itertools import pairwise
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import oracle_ingest
import oracles
from isthmus.cluster import open_door
from isthmus.errors import DataRefused
from isthmus.ingest import files, read_window, survey
from isthmus.nightly import run_night
from isthmus.settings import Graph, PlainColumns, PlainLog, Run, Score, Settings, Ties, Window
from isthmus.watch import Watch
from logs import column
from oracle_ingest import File, Row, micro

FIRST, LAST = date(2026, 3, 1), date(2026, 3, 3)
DAY = 86_400 * 10**6
LOW, HIGH = micro(datetime(2026, 3, 1)), micro(datetime(2026, 3, 4))

TEXT_KEYS = ["a", "b", "c", " a", "a\n", "\u3000b", "a b", '"', "é", "😀", "\x00", "", "  ", None]
WHOLE_KEYS = [0, 1, 2, -1, 2**62, None]
TIMES = st.one_of(
    st.integers(LOW, HIGH - 1),
    st.sampled_from([LOW, LOW + DAY - 1, LOW + DAY, HIGH - 1]),
    st.sampled_from([LOW - 1, HIGH, None, -1, 0, micro(datetime(102, 1, 1)), micro(datetime(9999, 12, 31))]),
)
AMOUNTS = st.one_of(
    st.integers(0, 10**6).map(lambda cents: cents / 100),
    st.sampled_from([0.1, 0.0, -0.0, -1.0, float("nan"), float("inf"), None, 2e18]),
)
TYPES = {
    str: [pa.string(), pa.large_string(), pa.string_view(), pa.dictionary(pa.int32(), pa.string())],
    int: [pa.int64(), pa.dictionary(pa.int32(), pa.int64())],
}
UNITS = {"s": 10**6, "ms": 1000, "us": 1}
NAMES = {
    "flat": "{number}.parquet",
    "hive": "dt={day}/{number}.parquet",
    "split": "year={day.year}/month={day.month:02}/day={day.day}/{number}.parquet",
    "nested": "{number}/x/{day}.parquet",
}


@st.composite
def logs(draw, keys=None) -> tuple[list[File], dict]:
    """Files of row groups, and how they are written."""
    kind = str if keys else draw(st.sampled_from([str, int]))
    key = st.sampled_from(keys or (TEXT_KEYS if kind is str else WHOLE_KEYS))
    id_kind = draw(st.sampled_from([str, int]))
    ids = st.sampled_from([None, *map(id_kind, range(6))])
    unit = draw(st.sampled_from(sorted(UNITS)))
    times = TIMES.map(lambda time: None if time is None else time // UNITS[unit] * UNITS[unit])
    row = st.builds(Row, key, key, times, AMOUNTS, ids)
    layout = draw(st.sampled_from(sorted(NAMES)))
    found = []
    for number in range(draw(st.integers(1, 3))):
        day = FIRST + timedelta(days=draw(st.integers(-3, 5)))
        groups = draw(st.lists(st.lists(row, max_size=6), max_size=4))
        name = NAMES[layout].format(number=number, day=day)
        found.append(File(name, groups, day if layout in ("hive", "split") else None))
    how = {
        "kind": kind,
        "key types": [draw(st.sampled_from(TYPES[kind])) for _ in found],
        "id": id_kind,
        "time": pa.timestamp(unit, draw(st.sampled_from([None, "UTC", "+02:00", "Asia/Kolkata"]))),
        "amounts": draw(st.booleans()),
        "ids": draw(st.booleans()),
        "rows per part": draw(st.sampled_from([1, 5, 1000])),
    }
    return found, how


def write(root: Path, found: list[File], how: dict) -> PlainLog:
    for file, key_type in zip(found, how["key types"], strict=True):
        unit = how["time"].unit
        schema = pa.schema(
            {
                "sender": key_type,
                "receiver": key_type,
                "time": how["time"],
                "amount": pa.float64(),
                "id": pa.string() if how["id"] is str else pa.int64(),
            }
        )
        (root / file.name).parent.mkdir(parents=True, exist_ok=True)
        with pq.ParquetWriter(root / file.name, schema) as writer:
            for group in file.groups:
                times = [None if row.time is None else row.time // UNITS[unit] for row in group]
                columns = [
                    column([row.sender for row in group], key_type),
                    column([row.receiver for row in group], key_type),
                    pa.array(times, pa.int64()).cast(how["time"]),
                    pa.array([row.amount for row in group], pa.float64()),
                    pa.array([row.id for row in group], schema.field("id").type),
                ]
                writer.write_table(pa.table(columns, schema=schema))
    amount, id = ("amount" if how["amounts"] else ""), ("id" if how["ids"] else "")
    return PlainLog(path=str(root), columns=PlainColumns(amount=amount, id=id))


# no deadline: the machine that runs the tests may be busy with something else
CALM = {"deadline": None, "report_multiple_bugs": False, "suppress_health_check": list(HealthCheck)}


@settings(max_examples=120, **CALM)
@given(logs())
def test_reading_agrees_with_the_oracle(log: tuple[list[File], dict]) -> None:
    found, how = log
    expected = oracle_ingest.read(found, FIRST, LAST, amounts=how["amounts"], ids=how["ids"])
    with tempfile.TemporaryDirectory() as folder, pytest.MonkeyPatch.context() as patch, open_door(threads=2) as door:
        patch.setattr(files, "ROWS_PER_PART", how["rows per part"])
        root = Path(folder) / "log"
        root.mkdir()
        asked = write(root, found, how)
        if not expected.ties:
            with pytest.raises(DataRefused):
                read_window(survey(asked, FIRST, LAST, door), Ties(), root / "work", root / "work", door, Watch())
            return
        reading = read_window(survey(asked, FIRST, LAST, door), Ties(), root / "work", root / "work", door, Watch())
        refused = list(reading.refused.iter_rows())
        ties = list(reading.ties.iter_rows())
    assert {outcome: reading.rows(outcome) for outcome in reading.outcomes if reading.rows(outcome)} == dict(
        expected.outcomes
    )
    assert refused == expected.refused
    assert list(reading.missing_days) == expected.missing
    moment = lambda time: datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=time)  # noqa: E731
    assert ties == [
        (
            *pair,
            tie.contacts,
            float(tie.amount) if how["amounts"] else None,
            tie.days,
            moment(tie.first),
            moment(tie.last),
        )
        for pair, tie in sorted(expected.ties.items(), key=lambda item: [key.encode() for key in item[0]])
    ]


@settings(max_examples=25, **CALM)
@given(logs(keys=["a", "b", "c", "d", "e", " a", "f ", None]), st.booleans())
def test_a_night_agrees_with_the_oracle(log: tuple[list[File], dict], directed: bool) -> None:
    """From dirty Parquet to published scores, with nothing in between taken on trust."""
    found, how = log
    expected = oracle_ingest.read(found, FIRST, LAST, amounts=how["amounts"], ids=how["ids"])
    parties = sorted({key for pair in expected.ties for key in pair})
    arcs = [(parties.index(sender), parties.index(receiver)) for sender, receiver in expected.ties]
    with tempfile.TemporaryDirectory() as folder:
        root = Path(folder)
        (root / "log").mkdir()
        asked = Settings(
            series="s",
            log=write(root / "log", found, how),
            window=Window(days=3),
            graph=Graph(directed=directed),
            score=Score(method="exact"),
            gates={"missing_days": "off", "refused": "off", "nulls": "off"},
            run=Run(warehouse=str(root / "warehouse"), work=str(root / "work"), threads=1),
        )
        if not arcs:
            with pytest.raises(DataRefused):
                run_night(asked, LAST, Watch())
            return
        scores = run_night(asked, LAST, Watch()).scores
    value = dict(zip(parties, oracles.betweenness(len(parties), arcs, directed), strict=True))
    assert set(scores["party"]) == set(parties)
    # published to 11 significant digits
    assert dict(scores.select("party", "betweenness").iter_rows()) == pytest.approx(value, rel=1e-10, abs=1e-15)
    ranked = scores.sort("rank").select("betweenness", "party").rows()
    assert all((-a, party) < (-b, other) for (a, party), (b, other) in pairwise(ranked))
    for side, counts in ((0, "contacts_out"), (1, "contacts_in")):
        counted = dict.fromkeys(parties, 0)
        for pair, tie in expected.ties.items():
            counted[pair[side]] += tie.contacts
        assert dict(scores.select("party", counts).iter_rows()) == counted
