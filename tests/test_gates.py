"""Each gate: what it takes its figure of, where it warns and stops, and what it says."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, datetime, timedelta
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from isthmus.cluster import open_door
from isthmus.errors import GateStopped
from isthmus.gates import GATES, Gatekeeper, Reference
from isthmus.ingest import drift, read_window, survey
from isthmus.settings import Gates, PlainLog, Ties
from isthmus.watch import Watch
from nights import AS_OF, DAYS, PAIRS, Site, isthmus, rows

DAY = date(2026, 3, 4)
BEFORE = Reference(DAY - timedelta(days=1), {}, 0.8, frozenset({"a", "b", "c", "d"}))


def judged(
    gates: Gates | None = None, accept: str = "", **facts: Any
) -> tuple[dict[str, tuple[Any, ...]], list[str], str]:
    """gate -> (figure, state), the warnings, and what stops the night."""
    found: dict[str, tuple[Any, ...]] = {}
    warned: list[str] = []
    told = {
        "rows": 1000,
        "refused": {},
        "missing_days": (),
        "volume": {},
        "volume_before": {},
        "last_day": DAY,
        "drift": {},
        "before": None,
    }
    scored = {"component_share": 0.8, "first_parties": frozenset("abcd"), "before": facts.get("before")}
    keeper = Gatekeeper(
        gates or Gates(),
        warned.append,
        frozenset([accept] if accept else []),
        lambda name, figure, limit, state: found.__setitem__(name, (figure, state)),
    )
    try:
        keeper.after_reading(**told | {key: value for key, value in facts.items() if key in told})  # type: ignore[arg-type]
        keeper.after_scoring(**scored | {key: value for key, value in facts.items() if key in scored})  # type: ignore[arg-type]
    except GateStopped as stop:
        return found, warned, str(stop)
    return found, warned, ""


def test_rows_outside_the_window_do_not_dilute_the_refused(tmp_path: Path) -> None:
    """Half of the window's rows are bad, but only one in a hundred of the file's."""
    day = datetime(2026, 11, 30, 12)
    times = [day] * 4 + [day - timedelta(days=90)] * 396
    senders = [None, "a", None, "b"] + ["c"] * 396
    pl.DataFrame({"sender": senders, "receiver": ["d"] * 400, "time": times}).write_parquet(tmp_path / "one.parquet")
    log = PlainLog(path=str(tmp_path))
    with open_door() as door:
        found = survey(log, day.date(), day.date(), door)
        reading = read_window(found, Ties(), tmp_path / "work", tmp_path / "work", door, Watch())
    assert (reading.rows_read, reading.rows_in_window) == (400, 4)
    assert reading.volume == {day.date(): 4}
    _, _, stopped = judged(rows=reading.rows_in_window, refused=reading.outcomes["refused"])
    assert "2 of the window's 4 rows were refused, a share of 50.00%" in stopped
    assert "nulls: 2 of the window's 4 rows have no sender or no receiver, a share of 50.000%" in stopped


def test_nothing_odd_passes_and_says_what_could_not_be_judged() -> None:
    found, warned, stopped = judged()
    assert set(found) == set(GATES)
    assert {name for name, (_, state) in found.items() if state == "ok"} == {"missing_days", "refused", "nulls"}
    assert {state for _, state in found.values()} == {"ok", "nothing to compare with"}
    assert not warned
    assert not stopped


@pytest.mark.parametrize("share", [1, 2])
def test_keys_that_are_null(share: int) -> None:
    found, _, stopped = judged(refused={"sender is null": share - 1, "receiver is empty": 1, "time is null": 3})
    assert found["nulls"] == (share / 1000, "stop" if share == 2 else "ok")
    assert ("--accept nulls" in stopped) == (share == 2)


@pytest.mark.parametrize(
    ("last", "state"),
    [(100, "ok"), (81, "ok"), (79, "warn"), (126, "warn"), (200, "stop"), (125, "warn"), (50, "stop"), (0, "stop")],
)
def test_volume_against_the_same_weekdays(last: int, state: str) -> None:
    volume = {DAY - timedelta(weeks=week): rows for week, rows in enumerate([last, 90, 100, 100, 110, 5000])}
    volume |= {DAY - timedelta(days=1): 7}  # another weekday
    found, warned, stopped = judged(volume=volume)
    assert found["volume"] == (last / 100, state)
    assert (bool(warned), bool(stopped)) == (state == "warn", state == "stop")
    if state == "stop":
        assert f"volume: {DAY} has {last} rows" in stopped
        assert "of 4 same weekdays" in stopped


@pytest.mark.parametrize(("now", "state"), [(60, "ok"), (50, "stop"), (199, "ok"), (200, "stop"), (0, "stop")])
def test_a_day_that_was_counted_before(now: int, state: str) -> None:
    other = DAY - timedelta(days=3)
    found, _, stopped = judged(volume={DAY: 5, other: now}, volume_before={other: 100, DAY - timedelta(days=9): 1})
    assert found["redelivery"][1] == state
    assert (f"{other} has {now} rows, and had 100 when it was counted before" in stopped) == (state == "stop")


def test_one_weekday_before_says_nothing() -> None:
    found, _, _ = judged(volume={DAY: 1, DAY - timedelta(weeks=1): 1000})
    assert found["volume"] == (None, "nothing to compare with")


def test_volume_that_only_warns_never_stops() -> None:
    volume = {DAY - timedelta(weeks=week): rows for week, rows in enumerate([1, 100, 100])}
    found, warned, stopped = judged(Gates(volume="warn"), volume=volume)
    assert found["volume"] == (0.01, "warn")
    assert warned
    assert not stopped


@pytest.mark.parametrize(
    ("old", "new", "harmless"),
    [
        ("int32", "int64", True),
        ("int64", "int32", False),
        ("float", "double", True),
        ("int64", "double", False),
        ("string", "large_string", True),
        ("dictionary<values=string, indices=int32, ordered=0>", "string", True),
        ("string", "int64", False),
        ("timestamp[ms]", "timestamp[us]", False),
        ("timestamp[us]", "timestamp[us, tz=UTC]", False),
        ("decimal128(10, 2)", "decimal128(12, 2)", True),
        ("decimal128(12, 2)", "decimal128(12, 3)", False),
        ("null", "string", True),
    ],
)
def test_drift_of_a_used_column(old: str, new: str, harmless: bool) -> None:
    assert drift({"x": old}, {"x": new}, ["x"]) == {"x": (f"changed from {old} to {new}", harmless)}
    assert drift({"x": old}, {"x": new}, ["y"])["x"][1]
    found, warned, stopped = judged(
        before=replace(BEFORE, columns={"x": "int8"}), drift=drift({"x": old}, {"x": new}, ["x"])
    )
    assert found["schema_drift"][1] == ("warn" if harmless else "stop")
    assert f"'x' changed from {old} to {new}" in (warned[0] if harmless else stopped)


def test_drift_of_other_columns_is_harmless() -> None:
    assert drift({"a": "string"}, {"a": "string", "b": "int8"}, ["a"]) == {"b": ("(int8) is new", True)}
    assert drift({"a": "string", "b": "int8"}, {"a": "string"}, ["a"]) == {"b": ("is gone", True)}


def test_component_and_overlap_against_the_night_before() -> None:
    found, warned, stopped = judged(before=BEFORE, component_share=0.69, first_parties=frozenset("axyz"))
    assert found["component"] == (pytest.approx(0.11), "warn")
    assert found["overlap"] == (0.25, "warn")
    assert len(warned) == 2
    assert not stopped
    strict = Gates(component="stop", overlap="stop")
    _, _, stopped = judged(strict, before=BEFORE, component_share=0.69, first_parties=frozenset("axyz"))
    assert "component: the largest component holds 69.0% of the parties, 80.0% on the night before" in stopped
    assert "overlap: 25% of the first 100 parties" in stopped
    for key in "axyz":
        assert f"'{key}'" not in stopped


@pytest.mark.parametrize("gate", GATES)
def test_every_gate_can_be_off_or_accepted(gate: str) -> None:
    facts: dict[str, Any] = {
        "refused": {"sender is null": 500},
        "missing_days": (DAY,),
        "volume": {DAY - timedelta(weeks=week): 100 * bool(week) for week in range(5)},
        "volume_before": {DAY - timedelta(weeks=1): 1000},
        "drift": {"x": ("is gone", False)},
        "before": replace(BEFORE, columns={"x": "int8"}),
        "component_share": 0.1,
        "first_parties": frozenset(),
    }
    others = dict.fromkeys(GATES, "off")
    found, warned, stopped = judged(Gates(**others | {gate: "stop"}), **facts)
    assert (found[gate][1], warned) == ("stop", [])
    assert stopped.count("\n") == 1
    assert f"--accept {gate};" in stopped
    found, warned, stopped = judged(Gates(**others | {gate: "stop"}), accept=gate, **facts)
    assert (found[gate][1], stopped) == ("accepted", "")
    assert warned[0].endswith("(accepted)")
    found, warned, stopped = judged(Gates(**others), **facts)
    assert (found[gate][1], warned, stopped) == ("off", [], "")


def test_a_night_with_half_of_its_last_day(tmp_path: Path) -> None:
    """Through the command: three weeks of days, the last of them cut short; then published knowingly."""
    site = Site(tmp_path / "site")
    site.config.write_text(site.config.read_text().replace("days = 4", "days = 18"))
    for day in [AS_OF - timedelta(days=at) for at in range(18)]:
        site.write(rows(day, PAIRS * 3), day)
    site.write(rows(AS_OF, PAIRS), AS_OF)
    said = site.score()
    assert said.code == 65
    assert "volume: 2026-03-04 has 8 rows, 0.33 times the median of 2 same weekdays before" in said.err
    assert not list(site.warehouse.rglob("scores.parquet"))
    assert isthmus("score", site.config, "--as-of", AS_OF, "--accept", "nonsense").code == 64
    said = site.score("--accept", "volume")
    assert said.code == 0
    assert "(accepted)" in said.err
    states = {gate["gate"]: gate["state"] for gate in site.table("runs")["gates"].item().to_list()}
    assert states["volume"] == "accepted"
    assert DAYS[-1] == AS_OF


def test_a_unit_that_changes_stops_the_next_night(tmp_path: Path) -> None:
    site = Site(tmp_path / "site")
    assert site.score().code == 0
    for day in [*DAYS, AS_OF + timedelta(days=1)]:
        site.write(rows(day).with_columns(pl.col("sent_at").cast(pl.Datetime("ms", "UTC"))), day)
    said = isthmus("score", site.config, "--as-of", AS_OF + timedelta(days=1))
    assert said.code == 65
    assert "column 'sent_at' changed from timestamp[us, tz=UTC] to timestamp[ms, tz=UTC]" in said.err
