"""Log files of every shape that occurs -> ties, refused rows, counts."""

from __future__ import annotations

import random
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal
from pathlib import Path

import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from isthmus.cluster import open_door
from isthmus.errors import DataRefused, SettingsError, StoreError, TryAgain
from isthmus.ingest import files, read_window, survey
from isthmus.settings import CallsColumns, CallsLog, PaymentsLog, PaymentsRules, PlainLog, Ties
from isthmus.watch import Watch
from logs import (
    EPOCH,
    FIRST,
    LAST,
    NOON,
    TIME,
    at,
    column,
    log_of,
    look,
    pairs_of,
    read,
    refused_of,
    table,
    ties_of,
    write,
)

# ---------------------------------------------------------------- keys

TEXTS = {
    "string": pa.string(),
    "large_string": pa.large_string(),
    "string_view": pa.string_view(),
    "dictionary": pa.dictionary(pa.int32(), pa.string()),
    "small dictionary": pa.dictionary(pa.int8(), pa.large_string()),
}
WHOLE = [pa.int8(), pa.int16(), pa.int32(), pa.int64(), pa.uint8(), pa.uint16(), pa.uint32(), pa.uint64()]


def keyed(keys: pa.DataType, senders: list, receivers: list) -> pa.Table:
    rows = table([""] * len(senders), [""] * len(senders))
    for place, (side, values) in enumerate((("sender", senders), ("receiver", receivers))):
        rows = rows.set_column(place, side, column(values, keys))
    return rows


@pytest.mark.parametrize("name", TEXTS)
def test_text_keys_of_any_type(tmp_path: Path, name: str) -> None:
    odd = 'line\nbreak "quoted", 😀'
    long = "k" * 10_240
    rows = keyed(TEXTS[name], ["b", "b", odd, None, ""], ["a", "a", long, "a", "a"])
    assert rows.schema.field("sender").type == TEXTS[name]
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work")
    assert pairs_of(reading) == {("b", "a"): 2, (odd, long): 1}
    assert reading.ties["sender"].dtype == pl.Enum(sorted(["a", "b", odd, long], key=str.encode))
    assert refused_of(reading) == [("f.parquet", 3, "sender is null"), ("f.parquet", 4, "sender is empty")]


@pytest.mark.parametrize("keys", [*WHOLE, pa.dictionary(pa.int32(), pa.int64())], ids=str)
def test_whole_number_keys_of_any_type(tmp_path: Path, keys: pa.DataType) -> None:
    plain = keys.value_type if pa.types.is_dictionary(keys) else keys
    bits = plain.bit_width
    unsigned = pa.types.is_unsigned_integer(plain)
    least, most = (0, 2**bits - 1) if unsigned else (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1)
    rows = keyed(keys, [least, 7, None], [most, 10, 7])
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work")
    assert pairs_of(reading) == {(str(least), str(most)): 1, ("7", "10"): 1}
    assert refused_of(reading) == [("f.parquet", 2, "sender is null")]


def test_blanks_around_a_key_do_not_count(tmp_path: Path) -> None:
    rows = table(["ann    ", "ann", "\tann\n", "    "], ["bob  ", "bob", "a b", "bob"])
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work")
    assert pairs_of(reading) == {("ann", "a b"): 1, ("ann", "bob"): 2}
    assert refused_of(reading) == [("f.parquet", 3, "sender is empty")]


def test_one_party_under_several_key_types(tmp_path: Path) -> None:
    """Files of one log may differ in width, never in meaning."""
    for number, keys in enumerate((pa.int8(), pa.uint64(), pa.dictionary(pa.int32(), pa.int64()))):
        write(tmp_path / "log" / f"{number}.parquet", keyed(keys, [1], [2]))
    assert pairs_of(read(tmp_path / "log", tmp_path / "work")) == {("1", "2"): 3}


@pytest.mark.parametrize("first", ["empty", "string"])
def test_files_that_disagree_on_a_key_are_refused(tmp_path: Path, first: str) -> None:
    """An all-null column agrees with anything, but must not hide that two others disagree."""
    if first == "empty":
        write(tmp_path / "log" / "0.parquet", keyed(pa.null(), [None], [None]))
    write(tmp_path / "log" / "1.parquet", keyed(pa.string(), ["1"], ["2"]))
    write(tmp_path / "log" / "2.parquet", keyed(pa.int64(), [1], [2]))
    with pytest.raises(DataRefused, match=r"disagree on log\.columns\.sender: 1\.parquet holds string, 2\.parquet"):
        look(log_of(tmp_path / "log"))


@pytest.mark.parametrize(
    ("ours", "type_", "told"),
    [
        ("sender", pa.float64(), "keys are never floats"),
        ("receiver", pa.binary(), "string or integer is needed"),
        ("time", pa.int64(), "a count has no unit"),
        ("time", pa.string(), "text is not guessed at"),
        ("amount", pa.string(), "number or integer is needed"),
        ("id", pa.float32(), "string or integer is needed"),
    ],
)
def test_a_column_that_cannot_serve_is_refused(tmp_path: Path, ours: str, type_: pa.DataType, told: str) -> None:
    rows = table(["a"], ["b"], amount=[1.0], id=[1])
    place = rows.schema.get_field_index(ours)
    write(tmp_path / "log" / "f.parquet", rows.set_column(place, ours, pa.nulls(1, type_)))
    with pytest.raises(DataRefused, match=told) as caught:
        look(log_of(tmp_path / "log", amount=True, id=True))
    assert f"log.columns.{ours}" in str(caught.value)


def test_a_renamed_column_is_refused_with_the_nearest_name(tmp_path: Path) -> None:
    write(tmp_path / "log" / "f.parquet", table(["a"], ["b"]).rename_columns(["sendr", "receiver", "time"]))
    with pytest.raises(DataRefused, match=r"no column 'sender' \(log\.columns\.sender\); did you mean sendr\?"):
        look(log_of(tmp_path / "log"))


def test_who_lacks_an_optional_column_is_told_how_to_say_so(tmp_path: Path) -> None:
    write(tmp_path / "log" / "f.parquet", table(["a"], ["b"]))
    with pytest.raises(DataRefused, match=r"If the log has none, set log\.columns\.amount = \"\"$"):
        look(log_of(tmp_path / "log", amount=True))
    calls = CallsLog(
        path=str(tmp_path / "log"), columns=CallsColumns(sender="sender", receiver="receiver", time="time")
    )
    with pytest.raises(DataRefused, match=r"If the log has none, set log\.columns\.duration = \"\"$"):
        look(calls)
    write(tmp_path / "log" / "f.parquet", table(["a"], ["b"]).rename_columns(["sendr", "receiver", "time"]))
    paid = PaymentsLog(path=str(tmp_path / "log"), rules=PaymentsRules(reporting_currency="EUR"))
    for log in (log_of(tmp_path / "log"), paid):  # which cannot do without
        with pytest.raises(DataRefused) as caught:
            look(log)
        assert "has none" not in str(caught.value)


# ---------------------------------------------------------------- times


def micro(moment: datetime) -> int:
    return (moment - EPOCH) // timedelta(microseconds=1)


EDGES = [micro(datetime(2026, 3, 1, tzinfo=UTC)), micro(datetime(2026, 3, 4, tzinfo=UTC))]


@pytest.mark.parametrize("zone", [None, "UTC", "+02:00", "Europe/Helsinki", "America/St_Johns"])
@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
def test_times_of_any_unit_and_zone(tmp_path: Path, unit: str, zone: str | None) -> None:
    """A zone says how a moment is shown, not which one it is; the window's edges are sharp to the unit."""
    ticks = {"s": 10**6, "ms": 10**3, "us": 1, "ns": 1}[unit]
    moments = [EDGES[0] - ticks, EDGES[0], micro(NOON), EDGES[1] - ticks, EDGES[1]]
    type_ = pa.timestamp(unit, zone)
    values = [m * 1000 if unit == "ns" else m // ticks for m in moments] + [None]
    rows = table([str(number) for number in range(6)], ["hub"] * 6)
    write(tmp_path / "log" / "f.parquet", rows.set_column(2, "time", pa.array(values, pa.int64()).cast(type_)))
    reading = read(tmp_path / "log", tmp_path / "work")
    inside = [EPOCH + timedelta(microseconds=m) for m in moments[1:4]]
    assert reading.ties["first_seen"].to_list() == inside == reading.ties["last_seen"].to_list()
    assert pairs_of(reading) == {("1", "hub"): 1, ("2", "hub"): 1, ("3", "hub"): 1}
    assert reading.outcomes["filtered"] == {"outside the window": 2}
    assert refused_of(reading) == [("f.parquet", 5, "time is null")]
    assert reading.missing_days == ()


@pytest.mark.parametrize("type_", [pa.date32(), pa.date64()], ids=str)
def test_dates_are_moments_at_midnight(tmp_path: Path, type_: pa.DataType) -> None:
    days = [date(2026, 2, 28), FIRST, LAST, date(2026, 3, 4), date(102, 1, 1), date(9999, 12, 31), date(1969, 12, 31)]
    rows = table([str(number) for number in range(7)], ["hub"] * 7).set_column(2, "time", pa.array(days, type_))
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work")
    assert reading.ties["first_seen"].to_list() == [datetime(2026, 3, 1, tzinfo=UTC), datetime(2026, 3, 3, tzinfo=UTC)]
    assert reading.outcomes["filtered"] == {"outside the window": 2}
    assert refused_of(reading) == [("f.parquet", row, "time is outside 1970..2199") for row in (4, 5, 6)]


@pytest.mark.parametrize("unit", ["s", "ms", "us"])
@pytest.mark.parametrize("int96", [False, True], ids=["int64", "int96"])
def test_impossible_times_are_refused_in_every_unit(tmp_path: Path, unit: str, int96: bool) -> None:
    times = [
        datetime(102, 11, 5, tzinfo=UTC),
        datetime(9999, 12, 31, 23, 59, 59, tzinfo=UTC),
        datetime(1969, 12, 31, 23, 59, 59, tzinfo=UTC),
        datetime(2200, 1, 1, tzinfo=UTC),
        NOON,
    ]
    rows = table(list("abcde"), ["hub"] * 5)
    seconds = [(moment - EPOCH) // timedelta(seconds=1) for moment in times]
    ticks = pa.array([s * {"s": 1, "ms": 10**3, "us": 10**6}[unit] for s in seconds], pa.int64())
    rows = rows.set_column(2, "time", ticks.cast(pa.timestamp(unit, "UTC")))
    write(tmp_path / "log" / "f.parquet", rows, use_deprecated_int96_timestamps=int96)
    reading = read(tmp_path / "log", tmp_path / "work")
    assert pairs_of(reading) == {("e", "hub"): 1}
    assert reading.ties["first_seen"].to_list() == [NOON]
    assert refused_of(reading) == [("f.parquet", row, "time is outside 1970..2199") for row in range(4)]


@pytest.mark.parametrize("zone", [None, "UTC"])
def test_int96_times_keep_the_microsecond(tmp_path: Path, zone: str | None) -> None:
    moments = [EDGES[0] - 1, EDGES[0], EDGES[1] - 1, EDGES[1]]
    rows = table(list("abcd"), ["hub"] * 4)
    rows = rows.set_column(2, "time", pa.array(moments, pa.int64()).cast(pa.timestamp("us", zone)))
    write(tmp_path / "log" / "f.parquet", rows, use_deprecated_int96_timestamps=True)
    assert pq.read_schema(tmp_path / "log" / "f.parquet").field("time").type != rows.schema.field("time").type
    reading = read(tmp_path / "log", tmp_path / "work")
    assert [micro(moment) for moment in reading.ties["first_seen"]] == moments[1:3]


def test_nanoseconds_are_cut_not_rounded(tmp_path: Path) -> None:
    """The last nanosecond of the window must not become the first microsecond after it."""
    ticks = pa.array([EDGES[0] * 1000, EDGES[1] * 1000 - 1], pa.int64()).cast(pa.timestamp("ns", "UTC"))
    write(tmp_path / "log" / "f.parquet", table(["a", "b"], ["hub"] * 2).set_column(2, "time", ticks))
    assert [micro(m) for m in read(tmp_path / "log", tmp_path / "work").ties["first_seen"]] == [EDGES[0], EDGES[1] - 1]


def test_files_with_and_without_a_zone_are_refused(tmp_path: Path) -> None:
    write(tmp_path / "log" / "a.parquet", table(["a"], ["b"]))
    naive = pa.array([NOON.replace(tzinfo=None)], pa.timestamp("us"))
    write(tmp_path / "log" / "b.parquet", table(["a"], ["b"]).set_column(2, "time", naive))
    with pytest.raises(DataRefused, match=r"disagree on log\.columns\.time"):
        look(log_of(tmp_path / "log"))


def test_files_with_different_zones_and_units_are_one_log(tmp_path: Path) -> None:
    for name, type_ in {"a": pa.timestamp("ms", "Asia/Tokyo"), "b": pa.timestamp("ns", "UTC")}.items():
        times = pa.array([micro(NOON)], pa.int64()).cast(TIME).cast(type_)
        write(tmp_path / "log" / f"{name}.parquet", table(["a"], ["b"]).set_column(2, "time", times))
    assert ties_of(read(tmp_path / "log", tmp_path / "work")) == {("a", "b"): (2, None, 1, NOON, NOON)}


# ---------------------------------------------------------------- folders

LAYOUTS = {
    "hive": "dt=2026-03-0{day}/part-0.parquet",
    "any key name": "booked=2026-03-0{day}/x.parq",
    "year, month, day": "year=2026/month=3/day={day}/x.pq",
    "padded": "year=2026/month=03/day=0{day}/x.PARQUET",
    "more keys": "region=north/dt=2026-03-0{day}/hour=07/x.parquet",
    "flat": "{day}.parquet",
    "nested": "2026/03/{day}/x.parquet",
}
FAR = {
    "hive": "dt=2026-02-27/part-0.parquet",
    "any key name": "booked=2026-03-05/x.parq",
    "year, month, day": "year=2026/month=2/day=27/x.pq",
    "padded": "year=2026/month=03/day=05/x.PARQUET",
    "more keys": "region=north/dt=2025-03-02/hour=07/x.parquet",
}


@pytest.mark.parametrize("layout", LAYOUTS)
def test_layouts(tmp_path: Path, layout: str) -> None:
    """A partition too far from the window is not opened: it holds garbage here."""
    for day in (1, 2, 3):
        name = LAYOUTS[layout].format(day=day)
        write(tmp_path / "log" / name, table(["a"], ["b"], [at(days=day - 2)]))
    if far := FAR.get(layout):
        (tmp_path / "log" / far).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / "log" / far).write_bytes(b"no Parquet at all")
    reading = read(tmp_path / "log", tmp_path / "work")
    assert ties_of(reading) == {("a", "b"): (3, None, 3, at(days=-1), at(days=1))}
    found = look(log_of(tmp_path / "log"))
    assert [file.name for file in found.files] == [LAYOUTS[layout].format(day=day) for day in (1, 2, 3)]
    assert found.skipped_files == (1 if far else 0)
    if not far:
        (tmp_path / "log" / "garbage.parquet").write_bytes(b"no Parquet at all")
        with pytest.raises(DataRefused, match=r"garbage\.parquet is not whole Parquet"):
            look(log_of(tmp_path / "log"))


def test_rows_of_a_neighbouring_day_in_a_partition_count(tmp_path: Path) -> None:
    """A partition's date may be a local one: its neighbours are read, and a row counts by its own time."""
    write(tmp_path / "log" / "dt=2026-02-28" / "x.parquet", table(["a", "b"], ["b", "c"], [at(days=-1), at(days=-2)]))
    write(tmp_path / "log" / "dt=2026-03-02" / "x.parquet", table(["c", "c"], ["d", "d"], [at(), at(days=2)]))
    write(tmp_path / "log" / "dt=2026-03-04" / "x.parquet", table(["d", "d"], ["e", "e"], [at(days=1), at(days=2)]))
    reading = read(tmp_path / "log", tmp_path / "work")
    assert pairs_of(reading) == {("a", "b"): 1, ("c", "d"): 1, ("d", "e"): 1}
    assert reading.outcomes["filtered"] == {"outside the window": 3}


def test_one_single_file(tmp_path: Path) -> None:
    path = write(tmp_path / "odd name.bin", table(["a", ""], ["b", "b"]))
    reading = read(path, tmp_path / "work")
    assert pairs_of(reading) == {("a", "b"): 1}
    assert refused_of(reading) == [("odd name.bin", 1, "sender is empty")]


def test_globs(tmp_path: Path) -> None:
    for name in ("x/1/a.parquet", "x/2/deep/b.parquet", "y/c.parquet"):
        write(
            tmp_path / "log" / name,
            table(
                [name],
                [
                    "hub",
                ],
            ),
        )
    for pattern, names in {
        "log/**/*.parquet": ["x/1/a.parquet", "x/2/deep/b.parquet", "y/c.parquet"],
        "log/x/*/*.parquet": ["1/a.parquet"],
        "log/[y]/*": ["y/c.parquet"],
        "log/?/**": ["x/1/a.parquet", "x/2/deep/b.parquet", "y/c.parquet"],
    }.items():
        found = look(log_of(tmp_path / pattern))
        assert [file.name for file in found.files] == names, pattern
    with pytest.raises(StoreError, match="matches no file"):
        look(log_of(tmp_path / "log" / "*.csv"))


@pytest.mark.parametrize("pattern", ["log", "log/**", "log/**/*.parquet"])
def test_writers_own_files_are_left_alone(tmp_path: Path, pattern: str) -> None:
    """Half-written and bookkeeping files have names that begin with a dot or an underscore."""
    write(tmp_path / "log" / "dt=2026-03-02" / "_x=1" / "a.parquet", table(["a"], ["b"]))
    for name in ("_SUCCESS", ".hidden.parquet", "_temporary/0/b.parquet", "dt=2026-03-02/.b.parquet.crc", "_c.parquet"):
        (tmp_path / "log" / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / "log" / name).write_bytes(b"no Parquet at all")
    assert pairs_of(read(tmp_path / pattern, tmp_path / "work")) == {("a", "b"): 1}


def test_paths_that_lead_nowhere(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match="does not exist"):
        look(log_of(tmp_path / "log"))
    (tmp_path / "log").mkdir()
    (tmp_path / "log" / "a.csv").write_text("a,b")
    with pytest.raises(DataRefused, match=r"holds no Parquet file \(1 other files\)"):
        look(log_of(tmp_path / "log"))
    write(tmp_path / "log" / "dt=2020-01-01" / "a.parquet", table(["a"], ["b"]))
    with pytest.raises(DataRefused, match=r"1 Parquet files, but no partition for 2026-03-01\.\.2026-03-03"):
        look(log_of(tmp_path / "log"))
    with pytest.raises(SettingsError, match="only local paths"):
        look(log_of("s3://bucket/log"))


# ---------------------------------------------------------------- what is opened and read


def spoil(path: Path, group: int, columns: tuple[str, ...] = ()) -> None:
    """Overwrite the pages of a row group (of some columns, or all) and leave the footer whole."""
    footer = pq.read_metadata(path).row_group(group)
    data = bytearray(path.read_bytes())
    for number in range(footer.num_columns):
        column = footer.column(number)
        if not columns or column.path_in_schema in columns:
            start = column.data_page_offset
            if column.dictionary_page_offset is not None:
                start = min(start, column.dictionary_page_offset)
            data[start : start + column.total_compressed_size] = b"\xff" * column.total_compressed_size
    path.write_bytes(bytes(data))


@pytest.mark.parametrize("type_", [TIME, pa.timestamp("s"), pa.timestamp("ns", "Asia/Tokyo"), pa.date32()], ids=str)
def test_row_groups_that_cannot_hold_the_window_are_not_read(tmp_path: Path, type_: pa.DataType) -> None:
    """Groups 0 and 4 lie wholly outside and are garbage; group 1 only touches the window."""
    minute = 60 * 10**6
    starts = [EDGES[0] - 2 * minute, EDGES[0] - minute, EDGES[0], EDGES[1] - 2 * minute, EDGES[1]]
    if pa.types.is_date32(type_):
        day = 24 * 60 * minute
        pairs = [
            (s // day * day + step, s // day * day + step) for s, step in zip(starts, (0, day, day, 0, 0), strict=False)
        ]
        pairs[0] = (EDGES[0] - day, EDGES[0] - day)
        pairs[1] = (EDGES[0] - day, EDGES[0])
    else:
        pairs = [(start, start + minute) for start in starts]
        pairs[0] = (starts[0], EDGES[0] - 10**6)
    flat = [moment for pair in pairs for moment in pair]
    times = pa.array(flat, pa.int64()).cast(pa.timestamp("us")).cast(type_ if type_ != TIME else pa.timestamp("us"))
    times = times.cast(type_)
    senders = [str(number) for number in range(9)] + [""]
    rows = table(senders, ["hub"] * 10).set_column(2, "time", times)
    path = write(tmp_path / "log" / "f.parquet", rows, row_group_size=2)
    whole = read(tmp_path / "log", tmp_path / "work")
    for group in (0, 4):
        spoil(path, group)
    assert read(tmp_path / "log", tmp_path / "work").ties.equals(whole.ties)
    spoil(path, 1)
    with pytest.raises(DataRefused, match=r"f\.parquet is not whole Parquet"):
        read(tmp_path / "log", tmp_path / "work")


def test_files_whose_footer_is_outside_are_not_read(tmp_path: Path) -> None:
    write(tmp_path / "log" / "a.parquet", table(["a"], ["b"]))
    late = write(tmp_path / "log" / "b.parquet", table(["c"], ["d"], [at(days=30)]))
    spoil(late, 0)
    found = look(log_of(tmp_path / "log"))
    assert [file.name for file in found.files] == ["a.parquet"]
    assert (found.skipped_files, found.rows) == (1, 1)
    assert pairs_of(read(tmp_path / "log", tmp_path / "work")) == {("a", "b"): 1}


def test_row_groups_without_statistics_are_read(tmp_path: Path) -> None:
    write(tmp_path / "log" / "a.parquet", table(["a", "c"], ["b", "d"], [at(), at(days=9)]), write_statistics=False)
    reading = read(tmp_path / "log", tmp_path / "work")
    assert pairs_of(reading) == {("a", "b"): 1}
    assert reading.outcomes["filtered"] == {"outside the window": 1}


def test_only_needed_columns_are_read(tmp_path: Path) -> None:
    rows = table(["a"], ["b"], amount=[1.0], id=["x"], text=["a long letter"])
    path = write(tmp_path / "log" / "f.parquet", rows)
    spoil(path, 0, ("text", "id", "amount"))
    assert pairs_of(read(tmp_path / "log", tmp_path / "work")) == {("a", "b"): 1}
    with pytest.raises(DataRefused, match="not whole Parquet"):
        read(tmp_path / "log", tmp_path / "work", amount=True)


def test_a_truncated_file_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "log" / "f.parquet", table(["a"], ["b"]))
    for data in (path.read_bytes()[:-20], b"", b"PAR1"):
        path.write_bytes(data)
        with pytest.raises(DataRefused, match=r"log file f\.parquet is not whole Parquet .*deliver it again"):
            look(log_of(tmp_path / "log"))


def test_large_files_are_cut_by_row_groups(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Rows keep their number in the file, also behind groups that are not read."""
    outside = [3, 4, 5]  # group 1
    times = [at(days=20) if row in outside else at(row) for row in range(14)]
    senders = ["" if row % 4 == 0 else f"s{row % 3}" for row in range(14)]
    rows = table(senders, ["hub"] * 14, times, amount=[0.1] * 14)
    write(tmp_path / "log" / "f.parquet", rows, row_group_size=3)
    whole = read(tmp_path / "log", tmp_path / "work", amount=True)
    assert refused_of(whole) == [("f.parquet", row, "sender is empty") for row in (0, 8, 12)]
    for most, cut in {1: [(0,), (2,), (3,), (4,)], 6: [(0,), (2, 3), (4,)], 8: [(0,), (2, 3, 4)]}.items():
        monkeypatch.setattr(files, "ROWS_PER_PART", most)
        found = look(log_of(tmp_path / "log"))
        assert [part.groups for part in found.parts] == cut
        assert [part.first_row for part in found.parts] == [3 * groups[0] for groups in cut]
        again = read(tmp_path / "log", tmp_path / "work", amount=True, threads=2)
        assert again.ties.equals(whole.ties)
        assert again.refused.equals(whole.refused)
        assert again.outcomes == whole.outcomes


# ---------------------------------------------------------------- refused rows


def test_every_reason(tmp_path: Path) -> None:
    """A row gets the first reason that applies; a self-contact is filtered, a row of another day too."""
    nan, inf = float("nan"), float("inf")
    rows = [
        ("a", "b", at(), 1.0, None),
        (None, "b", at(), 1.0, "sender is null"),
        ("a", None, at(), 1.0, "receiver is null"),
        (None, None, None, None, "sender is null"),
        (" ", "b", at(), 1.0, "sender is empty"),
        ("a", "", at(), 1.0, "receiver is empty"),
        ("", None, at(), nan, "receiver is null"),
        ("a", "b", None, 1.0, "time is null"),
        ("a", "b", datetime(102, 1, 1, tzinfo=UTC), 1.0, "time is outside 1970..2199"),
        ("a", "b", datetime(9999, 1, 1, tzinfo=UTC), 1.0, "time is outside 1970..2199"),
        ("a", "b", at(), None, "amount is null"),
        ("a", "b", at(), nan, "amount is not finite"),
        ("a", "b", at(), inf, "amount is not finite"),
        ("a", "b", at(), -inf, "amount is not finite"),
        ("a", "b", at(), -0.01, "amount is negative"),
        ("a", "b", at(), 1.1e18, "amount is above 1e+18"),
        ("a", "a", at(), -1.0, "amount is negative"),
        ("a", " a ", at(), 1.0, None),  # a self-contact
        ("", "b", at(days=9), -1.0, None),  # of another day, whatever else is wrong
        ("b", "a", at(), -0.0, None),
        ("b", "a", at(), 1e18, None),
    ]
    senders, receivers, times, amounts, reasons = (list(values) for values in zip(*rows, strict=True))
    write(tmp_path / "log" / "dt=2026-03-02" / "f.parquet", table(senders, receivers, times, amount=amounts))
    reading = read(tmp_path / "log", tmp_path / "work", amount=True)
    name = "dt=2026-03-02/f.parquet"
    assert refused_of(reading) == [(name, row, reason) for row, reason in enumerate(reasons) if reason]
    assert reading.outcomes["filtered"] == {"outside the window": 1, "self-contact": 1}
    assert {pair: more[:2] for pair, more in ties_of(reading).items()} == {("a", "b"): (1, 1.0), ("b", "a"): (2, 1e18)}
    counted = {reason: sum(r == reason for r in reasons) for reason in reasons if reason}
    assert reading.outcomes["refused"] == counted
    assert {o: reading.rows(o) for o in ("used", "refused", "filtered", "duplicate")} == {
        "used": 3,
        "refused": 16,
        "filtered": 2,
        "duplicate": 0,
    }


def test_nothing_usable_is_told_with_the_reasons(tmp_path: Path) -> None:
    rows = table(["a", None, "b"], ["a", "b", "c"], [at(), at(), at(days=1.5)])
    write(tmp_path / "log" / "f.parquet", rows)
    with pytest.raises(DataRefused, match="1 sender is null, 1 outside the window, 1 self-contact"):
        read(tmp_path / "log", tmp_path / "work", last=date(2026, 3, 2))
    with pytest.raises(DataRefused, match="no row group of the log can hold 2026-05-01"):
        read(tmp_path / "log", tmp_path / "work", first=date(2026, 5, 1), last=date(2026, 5, 1))


def test_days_without_a_usable_row_are_missing(tmp_path: Path) -> None:
    rows = table(["a", "", "a"], ["b", "b", "a"], [at(days=1), at(), at(days=-1)])
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work")
    assert reading.missing_days == (date(2026, 3, 1), date(2026, 3, 2))


@pytest.mark.parametrize("ours", ["sender", "receiver", "time", "amount", "id"])
def test_a_column_of_nulls_alone(tmp_path: Path, ours: str) -> None:
    """Written with its own type or, as some writers do, with none."""
    rows = table(["a", "a"], ["b", "b"], amount=[1.0, 2.0], id=["x", "y"])
    place = rows.schema.get_field_index(ours)
    write(tmp_path / "log" / "good.parquet", rows)
    for name, type_ in (("typed", rows.schema.field(ours).type), ("untyped", pa.null())):
        write(tmp_path / "log" / f"{name}.parquet", rows.set_column(place, ours, pa.nulls(2, type_)))
    reading = read(tmp_path / "log", tmp_path / "work", amount=True, id=True)
    if ours == "id":  # rows without an id are never duplicates
        assert pairs_of(reading) == {("a", "b"): 6}
    else:
        assert pairs_of(reading) == {("a", "b"): 2}
        names = ("typed.parquet", "untyped.parquet")
        assert refused_of(reading) == [(name, row, f"{ours} is null") for name in names for row in (0, 1)]


def test_empty_files_and_row_groups(tmp_path: Path) -> None:
    rows = table(["a"], ["b"])
    write(tmp_path / "log" / "empty.parquet", rows.slice(0, 0))
    with pq.ParquetWriter(tmp_path / "log" / "f.parquet", rows.schema) as writer:
        for batch in (rows.slice(0, 0), rows, rows.slice(0, 0), table([""], ["b"])):
            writer.write_table(batch)
    reading = read(tmp_path / "log", tmp_path / "work")
    assert pairs_of(reading) == {("a", "b"): 1}
    assert refused_of(reading) == [("f.parquet", 1, "sender is empty")]


# ---------------------------------------------------------------- duplicates


@pytest.mark.parametrize("kind", ["string", "integer", "dictionary"])
def test_a_row_delivered_twice_counts_once(tmp_path: Path, kind: str) -> None:
    """Within a file, in another file, in another day's partition; the first by file and row counts."""
    make = {"string": str, "integer": int, "dictionary": str}[kind]
    type_ = {
        "string": pa.string(),
        "integer": pa.int64(),
        "dictionary": pa.dictionary(pa.int32(), pa.string()),
    }[kind]

    def part(name: str, senders: list[str | None], ids: list[int | None], day: int) -> None:
        rows = table(senders, ["hub"] * len(senders), [at(minute, day) for minute in range(len(senders))])
        written = pa.array([None if i is None else make(i) for i in ids])
        rows = rows.append_column("id", written.dictionary_encode() if kind == "dictionary" else written.cast(type_))
        write(tmp_path / "log" / name, rows.append_column("amount", pa.array([0.1] * len(senders))))

    part("dt=2026-03-01/a.parquet", ["a", "b", "a", "c", None], [1, 2, 1, None, 4], -1)
    part("dt=2026-03-02/a.parquet", ["a", "d", "c", "d", "e"], [1, 3, None, 3, 4], 0)
    part("dt=2026-03-02/b.parquet", ["a", "a"], [2, 5], 0)
    part("dt=2026-03-04/a.parquet", ["f", "g"], [6, 6], 2)  # of no day in the window
    reading = read(tmp_path / "log", tmp_path / "work", id=True, amount=True)
    assert {pair: more[:3] for pair, more in ties_of(reading).items()} == {
        ("a", "hub"): (2, 0.2, 2),  # ids 1 and 5
        ("b", "hub"): (1, 0.1, 1),
        ("c", "hub"): (2, 0.2, 2),  # two rows without an id
        ("d", "hub"): (1, 0.1, 1),
        ("e", "hub"): (1, 0.1, 1),  # the other row with id 4 was refused, so it is no first delivery
    }
    assert ties_of(reading)[("a", "hub")][3:] == (at(0, -1), at(1, 0))
    assert ties_of(reading)[("d", "hub")][3:] == (at(1, 0), at(1, 0))
    assert reading.outcomes["duplicate"] == {"duplicate": 4}
    assert refused_of(reading) == [("dt=2026-03-01/a.parquet", 4, "sender is null")]
    without = read(tmp_path / "log", tmp_path / "work", amount=True)
    assert without.rows("duplicate") == 0
    assert without.rows("used") == reading.rows("used") + 4


def test_only_rows_of_the_window_make_a_duplicate(tmp_path: Path) -> None:
    """A first delivery before the window takes nothing from it; a day of second deliveries alone is missing."""
    write(tmp_path / "log" / "0.parquet", table(["a", "a"], ["b", "b"], [at(days=-1), at()], id=[7, 7]))
    write(tmp_path / "log" / "1.parquet", table(["a"], ["b"], [at(days=1)], id=[7]))
    reading = read(tmp_path / "log", tmp_path / "work", id=True, first=date(2026, 3, 2))
    assert ties_of(reading) == {("a", "b"): (1, None, 1, NOON, NOON)}
    assert reading.missing_days == (date(2026, 3, 3),)
    assert {o: reading.rows(o) for o in ("used", "filtered", "duplicate")} == {"used": 1, "filtered": 1, "duplicate": 1}


def test_duplicates_do_not_depend_on_how_the_log_is_cut(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    draw = random.Random(1)
    senders = [draw.choice("abcd") for _ in range(200)]
    receivers = [draw.choice("abcd") for _ in range(200)]
    rows = table(senders, receivers, id=[draw.randrange(80) for _ in range(200)])
    write(tmp_path / "log" / "f.parquet", rows, row_group_size=7)
    whole = read(tmp_path / "log", tmp_path / "work", id=True)
    assert whole.rows("duplicate") > 50
    monkeypatch.setattr(files, "ROWS_PER_PART", 20)
    cut = read(tmp_path / "log", tmp_path / "work", id=True, threads=2)
    assert cut.ties.equals(whole.ties)
    assert cut.outcomes == whole.outcomes


# ---------------------------------------------------------------- amounts


def total(reading: object) -> float:
    return ties_of(reading)[("a", "b")][1]  # type: ignore[arg-type]


def test_amounts_add_up_exactly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """0.1 ten times is 1, in any order and any number of parts; as floats it is not."""
    assert sum([0.1] * 10) != 1.0
    write(tmp_path / "one" / "f.parquet", table(["a"] * 10, ["b"] * 10, amount=[0.1] * 10))
    assert total(read(tmp_path / "one", tmp_path / "work", amount=True)) == 1.0
    amounts = [0.1, 1e15, 0.2, 0.3, 1e-9, 7.77, 123456.789] * 30
    expected = float(sum(map(Decimal, map(repr, amounts))))
    for seed in range(3):
        random.Random(seed).shuffle(amounts)
        for number in range(4):
            share = amounts[number::4]
            rows = table(["a"] * len(share), ["b"] * len(share), amount=share)
            write(tmp_path / "many" / f"{number}.parquet", rows, row_group_size=5)
        for most in (1, 20, 1000):
            monkeypatch.setattr(files, "ROWS_PER_PART", most)
            assert total(read(tmp_path / "many", tmp_path / "work", amount=True)) == expected


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        (pa.array([3, 4], pa.int8()), 7.0),
        (pa.array([2**53 + 1, 2**53 + 1], pa.int64()), float(2**54 + 2)),
        (pa.array([2**62, 1], pa.uint64()), "above"),
        (pa.array([Decimal("0.10")] * 10, pa.decimal128(10, 2)), 1.0),
        (pa.array([Decimal("90071992547409.93"), Decimal("0.01")], pa.decimal128(38, 2)), 90071992547409.94),
        (pa.array([Decimal("0.1")] * 10, pa.decimal256(50, 4)), 1.0),
        (pa.array([0.5, 0.25], pa.float32()), 0.75),
        (pa.array([0.5, 0.25], pa.float16()), 0.75),
        (pa.array([Decimal("-0.01"), Decimal("1.00")], pa.decimal128(10, 2)), "negative"),
        (pa.array([0.1, 0.2], pa.float64()).dictionary_encode(), 0.3),
    ],
    ids=lambda value: str(getattr(value, "type", value)),
)
def test_amounts_of_any_type(tmp_path: Path, values: pa.Array, expected: float | str) -> None:
    rows = table(["a"] * len(values), ["b"] * len(values)).append_column("amount", values)
    reading = read(write(tmp_path / "log" / "f.parquet", rows), tmp_path / "work", amount=True)
    if isinstance(expected, float):
        assert total(reading) == expected
        assert reading.rows("used") == len(values)
    else:
        assert next(reason for _, _, reason in refused_of(reading)).startswith(f"amount is {expected}")
        assert reading.rows("used") == 1


def test_amount_widths_may_differ_between_files(tmp_path: Path) -> None:
    for number, type_ in enumerate((pa.int32(), pa.float64(), pa.decimal128(12, 2))):
        amount = pa.array([Decimal(2)], pa.decimal128(12, 2)).cast(type_)
        write(tmp_path / "log" / f"{number}.parquet", table(["a"], ["b"]).append_column("amount", amount))
    assert total(read(tmp_path / "log", tmp_path / "work", amount=True)) == 6.0


def test_a_file_replaced_after_its_footer_was_read_is_not_mixed_in(tmp_path: Path) -> None:
    """Neither silently read with half of its rows nor called damaged: the same command works later."""
    log, rows = (
        tmp_path / "log",
        pl.DataFrame(
            {
                "sender": ["a", "b"],
                "receiver": ["b", "c"],
                "time": [datetime(2026, 11, 30, 12), datetime(2026, 11, 30, 13)],
            }
        ),
    )
    log.mkdir()
    rows.write_parquet(log / "one.parquet")
    asked, day = PlainLog(path=str(log)), date(2026, 11, 30)
    with open_door() as door:
        found = survey(asked, day, day, door)
        rows.head(1).write_parquet(log / "one.parquet")
        with pytest.raises(TryAgain, match=r"one\.parquet was changed while it was being read"):
            read_window(found, Ties(), tmp_path / "work", tmp_path / "work", door, Watch())


def test_links_are_followed_and_dead_ones_told(tmp_path: Path) -> None:
    log, elsewhere, day = tmp_path / "log", tmp_path / "elsewhere", date(2026, 11, 30)
    rows = pl.DataFrame({"sender": ["a"], "receiver": ["b"], "time": [datetime(2026, 11, 30, 12)]})
    log.mkdir()
    elsewhere.mkdir()
    rows.write_parquet(elsewhere / "one.parquet")
    (log / "dt=2026-11-30").symlink_to(elsewhere)
    with open_door() as door:
        assert survey(PlainLog(path=str(log)), day, day, door).rows == 1
        (log / "two.parquet").symlink_to(tmp_path / "nothing")
        with pytest.raises(StoreError, match=r"two\.parquet is a link to nothing"):
            survey(PlainLog(path=str(log)), day, day, door)


def test_two_columns_of_one_name_are_refused(tmp_path: Path) -> None:
    table = pa.table([["a"], ["b"], ["c"], [datetime(2026, 11, 30)]], names=["sender", "sender", "receiver", "time"])
    pq.write_table(table, tmp_path / "one.parquet")
    day = date(2026, 11, 30)
    with open_door() as door, pytest.raises(DataRefused, match="2 columns named 'sender'"):
        survey(PlainLog(path=str(tmp_path)), day, day, door)
