"""Calls and texts: numbers as others write them, records of one call, what is left out, the invented log's truth."""

from __future__ import annotations

import random
import tomllib
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from decimal import Decimal
from pathlib import Path
from typing import Any

import igraph
import phonenumbers
import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from isthmus.errors import SettingsError
from isthmus.inventions import calls as orrin
from isthmus.readings.calls import CallsReading
from isthmus.readings.calls_plans import evident, known_whole, whole
from isthmus.settings.calls import CallsLog, plain
from reading_harness import Told, tell

ROOT = Path(__file__).parent.parent
NOON = datetime(2026, 11, 30, 12)
ANN, BEN, CAL = "+447700900001", "+447700900002", "+447700900003"
OPTIONAL = {"redirecting": "redirecting_number", "country": "serving_country", "conference": "conference_id"}


def a_log(columns: dict[str, str] | None = None, **rules: Any) -> CallsLog:
    raw = {"path": "calls", "columns": OPTIONAL | (columns or {}), "rules": {"default_country": "GB"} | rules}
    return CallsLog.model_validate(raw)


def reading(columns: dict[str, str] | None = None, **rules: Any) -> CallsReading:
    return CallsReading.open(a_log(columns, **rules))


def record(sender: str | None = ANN, receiver: str | None = BEN, **others: Any) -> dict[str, Any]:
    row = {"time": NOON, "duration": 60, "service": "voice", "record_type": "originating", "call_reference": None}
    ends = {"disposition": "ANSWERED", "redirecting": None, "country": None, "conference": None}
    return {"sender": sender, "receiver": receiver} | row | ends | others


TYPES = {
    "sender": pl.String, "receiver": pl.String, "time": pl.Datetime("us"), "duration": pl.Int64, "service": pl.String,
    "record_type": pl.String, "call_reference": pl.String, "disposition": pl.String, "redirecting": pl.String,
    "country": pl.String, "conference": pl.String,
}  # fmt: skip


def frame(*records: dict[str, Any]) -> pl.DataFrame:
    return pl.DataFrame(list(records), schema=TYPES)


def told(*records: dict[str, Any], columns: dict[str, str] | None = None, **rules: Any) -> Told:
    return tell(reading(columns, **rules), frame(*records))


def after(seconds: float) -> datetime:
    return NOON + timedelta(seconds=seconds)


def one_key(text: str, **rules: Any) -> tuple[str | None, str | None, str]:
    row = reading(**rules).keys(pl.Series([text])).row(0, named=True)
    return row["key"], row["fault"], row["kind"]


# Numbers


@pytest.mark.parametrize(
    ("text", "key"),
    [
        # national and international forms as ITU-T E.123 shows them; numbers are Ofcom's for drama
        ("020 7946 0123", "+442079460123"),
        ("(020) 7946 0123", "+442079460123"),
        ("+44 20 7946 0123", "+442079460123"),
        ("0044 20 7946 0123", "+442079460123"),
        ("442079460123", "+442079460123"),
        ("+44 (0)20 7946 0123", "+442079460123"),
        (" 07700-900.123 ", "+447700900123"),
        # RFC 3966, section 6: the tel address, and the local one with its context
        ("tel:+1-201-555-0123", "+12015550123"),
        ("tel:201-555-0123;phone-context=+1", "+12015550123"),
        # RFC 3261, section 19.1.6: the tel address's text as the user of a SIP address
        ("sip:+1-201-555-0123@gateway.example;user=phone", "+12015550123"),
        ("sips:%2B12015550123:secret@gateway.example", "+12015550123"),
        ("sip:02079460123@gateway.example;user=phone", "+442079460123"),
        # the country of the row wins over the default; 555-01xx is North America's for fiction
        ("US:(201) 555-0123", "+12015550123"),
        ("US:+442079460123", "+442079460123"),
        # Italy keeps the zero, as the library's metadata says
        ("IT:06 1234 5678", "+390612345678"),
    ],
)
def test_a_number_is_one_key_however_it_is_written(text: str, key: str) -> None:
    assert one_key(text) == (key, None, "party")


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("", "is withheld"),
        ("Anonymous", "is withheld"),
        ("US: unknown", "is withheld"),
        ("sip:anonymous@anonymous.invalid", "is withheld"),  # RFC 3323, section 4.1.1.3
        ("sip:ann@gateway.example", "is not a telephone number"),
        ("+1234567890123456", "is too long"),  # E.164: 15 digits
        ("+12015550123456", "is too long"),
        ("+4412", "is too short"),
        ("+9991234567", "has an unknown calling code"),
        ("ZZ:0207946", "has no known country"),
        ("tel:7042;phone-context=example.com", "lacks its area code"),
        ("+4900301234567", "is ambiguous"),  # two trunk prefixes: the library takes one at a time
        ("Ann", "is not a telephone number"),
    ],
)
def test_what_is_no_number_is_refused_with_its_reason(text: str, fault: str) -> None:
    assert one_key(text)[:2] == (None, fault)


def test_without_a_country_national_forms_are_refused_and_international_ones_read() -> None:
    assert one_key("020 7946 0123", default_country="")[1] == "has no known country"
    assert one_key("+44 20 7946 0123", default_country="")[0] == "+442079460123"


def test_short_codes_are_keyed_with_their_country() -> None:
    assert one_key("112") == ("GB:112", None, "short code")
    assert one_key("IE:112") == ("IE:112", None, "short code")
    assert one_key("123456", short_code_digits=5)[2] != "short code"
    # five digits are a whole number on the Falkland Islands: the library's plan of FK
    assert one_key("FK:55512") == ("+50055512", None, "party")


@pytest.mark.parametrize("shard", range(5))
def test_what_skips_the_library_reads_as_the_library_would(shard: int) -> None:
    """Against `phonenumbers` itself, for every country: numbers of every length with every kind of prefix."""
    rng, checked = random.Random(shard), 0
    for country in sorted(phonenumbers.SUPPORTED_REGIONS)[shard::5]:
        plan = phonenumbers.PhoneMetadata.metadata_for_region(country)
        code, trunk = str(plan.country_code), plan.national_prefix or ""
        examples = [phonenumbers.example_number_for_type(country, kind) for kind in (0, 1, 3)]
        tails = [phonenumbers.national_significant_number(found) for found in examples if found]
        tails += ["".join(rng.choices("0123456789", k=rng.randint(3, 13))) for _ in range(60)]
        heads = ["", trunk, code, code + trunk, "0", "00", f"00{code}", "000", f"011{code}"]
        texts = sorted({head + tail for head in heads for tail in tails})
        read = pl.DataFrame({"text": texts}).select(
            "text", whole=whole(pl.col("text"), country), evident=evident("+" + pl.col("text"))
        )
        for text, key, normal in read.iter_rows():
            if key is not None:
                assert by_library(text, country) == key
            if normal:
                assert by_library(f"+{text}", country) == f"+{text}"
            checked += (key is not None) + normal
    assert checked > 5_000


def by_library(text: str, country: str) -> str | None:
    number = phonenumbers.parse(text, country)
    if phonenumbers.is_possible_number_with_reason(number) != phonenumbers.ValidationResult.IS_POSSIBLE:
        return None
    return phonenumbers.format_number(number, phonenumbers.PhoneNumberFormat.E164)


def test_short_whole_numbers_are_those_of_the_library() -> None:
    texts = pl.DataFrame({"text": ["112", "40404", "55512", "201234"]})
    for country, whole_ones in (("GB", []), ("FK", ["40404", "55512"]), ("FO", ["201234"])):
        assert texts.filter(known_whole(pl.col("text"), country))["text"].to_list() == whole_ones


pieces = st.sampled_from([
    "+", "0", "00", "44", "+44", "1", "7700900123", "2079460123", "112", "sip:", "sips:", "tel:", "@", ";user=phone",
    ";phone-context=", "GB:", "US:", "ZZ:", "FK:", "+490", " ", "-", "ext", "x", "anonymous", "%2b", "٠", "＋", "\x00",
    "\u200b",
])  # fmt: skip
likely = st.lists(pieces, max_size=7).map("".join)


READINGS = [reading(default_country=country) for country in ("", "GB", "DE")]


@settings(max_examples=200, deadline=None)
@given(st.lists(st.one_of(st.text(max_size=40), likely), min_size=1, max_size=30, unique=True))
def test_any_text_is_the_same_key_twice_or_refused(texts: list[str]) -> None:
    for one in READINGS:
        first = one.keys(pl.Series(texts, dtype=pl.String))
        assert len(first) == len(texts)
        assert (first["key"].is_null() == first["fault"].is_not_null()).all()
        keys = first.drop_nulls("key")
        again = one.keys(keys["key"].unique(maintain_order=True))
        assert again["key"].to_list() == keys["key"].unique(maintain_order=True).to_list()
        kinds = dict(again.select("key", "kind").iter_rows())
        assert [kinds[key] for key in keys["key"]] == keys["kind"].to_list()


# What counts


@pytest.mark.parametrize(
    ("others", "outcome", "reason"),
    [
        ({}, "used", "used"),
        ({"duration": 0}, "filtered", "unanswered"),
        ({"duration": None}, "filtered", "unanswered"),
        ({"disposition": "NO-ANSWER"}, "filtered", "unanswered"),
        ({"disposition": "VoiceMail"}, "filtered", "voicemail"),
        ({"record_type": "forwarded"}, "filtered", "forwarded leg"),
        ({"redirecting": CAL}, "filtered", "forwarded leg"),
        ({"conference": "C1"}, "filtered", "conference leg"),
        ({"receiver": "112"}, "filtered", "short code"),
        ({"service": "SMS"}, "filtered", "text"),
        ({"service": "data"}, "filtered", "neither call nor text"),
        ({"service": None}, "filtered", "neither call nor text"),
        ({"duration": -1}, "refused", "duration cannot be"),
        ({"duration": 86_401}, "refused", "duration cannot be"),
        ({"sender": None}, "refused", "sender is null"),
        ({"sender": "private"}, "filtered", "sender is withheld"),
        ({"receiver": "07700 900001"}, "filtered", "self-contact"),
        ({"redirecting": " ", "conference": ""}, "used", "used"),
    ],
)
def test_each_record_has_one_outcome_with_its_name(others: dict[str, Any], outcome: str, reason: str) -> None:
    expected = {"used": {"used": 0}} | {outcome: {reason: 1}}
    assert told(record(**others)).counts == expected


@pytest.mark.parametrize(
    ("rule", "others"),
    [
        ({"unanswered": "keep"}, {"duration": 0}),
        ({"voicemail": "keep"}, {"disposition": "voicemail"}),
        ({"forwarded": "as caller"}, {"redirecting": CAL}),
        ({"conference": "keep"}, {"conference": "C1"}),
        ({"short_codes": "keep"}, {"receiver": "112"}),
        ({"count": "texts"}, {"service": "text", "duration": None}),
        ({"count": "both"}, {"service": "text", "duration": -1}),
    ],
)
def test_each_filter_is_a_choice(rule: dict[str, Any], others: dict[str, Any]) -> None:
    assert told(record(**others), **rule).counts["used"] == {"used": 1}
    assert told(record(**others)).counts["used"] == {"used": 0}


def test_a_forwarded_leg_may_be_a_contact_of_who_forwarded() -> None:
    found = told(record(receiver=CAL, redirecting=BEN), record(record_type="forwarded"), forwarded="from forwarder")
    assert found.ties.select("sender", "receiver").rows() == [(BEN, CAL)]
    assert found.counts["filtered"] == {"forwarded leg": 1}  # the second does not say who


def test_seconds_add_up_along_a_tie_and_texts_add_nothing() -> None:
    rows = [record(duration=40), record(time=after(600), duration=2), record(service="text", time=after(900))]
    ties = told(*rows, count="both").ties
    assert ties.select("contacts", "amount").rows() == [(3, 42.0)]


def test_a_mutual_call_is_two_contacts_and_a_text_is_one() -> None:
    rows = [record(), record(service="text", time=after(900))]
    found = told(*rows, count="both", mutual="calls", dialler_receivers=0)
    assert found.ties.select("sender", "receiver", "contacts").rows() == [(ANN, BEN, 2), (BEN, ANN, 1)]
    assert told(*rows, count="both", mutual="all", dialler_receivers=0).counts["used"] == {"used": 4}


def test_special_numbers_of_the_users_table(tmp_path: Path) -> None:
    table = tmp_path / "numbers.csv"
    table.write_text(f"number,role,label\n07700 900002,machine,Clock\n121,Voicemail,\n{CAL},conference,Bridge\n")
    found = told(record(), record(receiver="121"), record(receiver=CAL), record(sender="121"), numbers=str(table))
    assert found.counts["filtered"] == {"conference leg": 1, "listed machine": 1, "voicemail": 2}
    one = reading(numbers=str(table))
    assert one.keys(pl.Series([BEN])).select("kind", "label").row(0) == ("machine", "Clock")
    table.write_text("number,role\n07700 900002,machine\n")
    assert reading(numbers=str(table)).fingerprint != one.fingerprint


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("number,role\n121,mailbox\n", "row 1 after the header: role is none of voicemail, conference, machine"),
        ("number,role\n121,machine\nAnn,machine\n", "row 2 after the header: number cannot be read"),
        ("number,role\n121,machine\nGB:121,voicemail\n", "row 2 after the header: number stands there twice"),
    ],
)
def test_a_table_with_a_fault_is_not_taken(tmp_path: Path, text: str, message: str) -> None:
    table = tmp_path / "numbers.csv"
    table.write_text(text)
    with pytest.raises(SettingsError, match=message):
        reading(numbers=str(table))


def test_who_calls_many_and_is_called_back_by_none_is_a_dialler() -> None:
    many = [record(BEN, f"07700 9001{at:02}", time=after(60 * at)) for at in range(50)]
    friend = [record(ANN, f"07700 9001{at:02}", time=after(60 * at)) for at in range(50)]
    friend += [record(f"07700 9001{at:02}", ANN, time=after(9_000 + 60 * at)) for at in range(2)]
    found = told(*many, *friend, record(CAL, BEN), dialler_receivers=50, dialler_back=0.03)
    assert found.counts == {"filtered": {"dialler by behaviour": 51}, "used": {"used": 52}}
    assert found.parties.filter(pl.col("kind") == "machine")["party"].cast(pl.String).to_list() == [BEN]
    assert told(*many, dialler_receivers=51).counts["used"] == {"used": 50}


# Records of one call

TERM = {"record_type": "terminating"}


@pytest.mark.parametrize(
    ("second", "reason"),
    [
        (TERM | {"call_reference": "R1", "time": after(300), "duration": 9}, "other record of the same call"),
        ({"call_reference": "R1"}, "record delivered again"),
        (TERM | {"call_reference": "R2"}, None),
        (TERM | {"call_reference": "R1", "receiver": CAL}, None),
        (TERM, None),  # one with a reference and one without are not compared
    ],
)
def test_records_with_one_reference_and_parties_are_one_call(second: dict[str, Any], reason: str | None) -> None:
    found = told(record(call_reference="R1"), record(**second))
    assert found.counts.get("duplicate", {}) == ({reason: 1} if reason else {})
    assert found.counts["used"] == {"used": 1 if reason else 2}


@pytest.mark.parametrize(
    ("second", "reason"),
    [
        (TERM, "other record of the same call"),
        (TERM | {"time": after(2), "duration": 58}, "other record of the same call"),
        (TERM | {"time": after(-2)}, "other record of the same call"),
        (TERM | {"time": after(2.000001)}, None),
        (TERM | {"duration": 63}, None),
        ({}, "record delivered again"),
        ({"time": after(1)}, None),  # both written at the caller's side: two calls
        ({"record_type": None, "time": after(1)}, "other record of the same call"),
        (TERM | {"sender": BEN, "receiver": ANN}, None),
    ],
)
def test_without_reference_records_that_look_alike_are_one_call(second: dict[str, Any], reason: str | None) -> None:
    found = told(record(), record(**second))
    assert found.counts.get("duplicate", {}) == ({reason: 1} if reason else {})


def test_two_texts_in_one_second_stay_two() -> None:
    rows = [record(service="text", duration=None, time=after(at), **kind) for kind in ({}, TERM) for at in (0.0, 0.5)]
    found = told(*rows, count="texts")
    assert found.counts == {"duplicate": {"other record of the same call": 2}, "used": {"used": 2}}


def by_hand(rows: list[Likeness], slack: int) -> int:
    """How many records are one more of a call: each goes to the first call that it fits, in the order of time."""
    calls: list[tuple[Likeness, set[int]]] = []
    seen: list[Likeness] = []
    more = 0
    for row in sorted(rows, key=lambda row: row.start):  # stable: as delivered
        fits = [
            sides
            for first, sides in calls
            if row.start - first.start <= slack
            and abs(row.length - first.length) <= slack
            and not (row.side and row.side in sides)
        ]
        if row.side and row in seen:
            more += 1
        elif fits:
            fits[0].add(row.side)
            more += 1
        else:
            calls.append((row, {row.side}))
        seen.append(row)
    return more


@dataclass(frozen=True)
class Likeness:
    start: int
    length: int
    side: int


likenesses = st.builds(Likeness, st.integers(0, 12), st.integers(1, 4), st.integers(0, 2))


@settings(max_examples=150, deadline=None)
@given(st.lists(likenesses, min_size=1, max_size=14), st.integers(0, 3), st.integers(0, 14))
def test_look_alikes_are_told_apart_the_same_way_however_the_log_is_cut(
    rows: list[Likeness], slack: int, cut: int
) -> None:
    sides = [None, "originating", "terminating"]
    all_ = frame(*(record(time=after(row.start), duration=row.length, record_type=sides[row.side]) for row in rows))
    one = reading(leg_slack=slack)
    whole_ = tell(one, all_)
    assert sum(whole_.counts.get("duplicate", {}).values()) == by_hand(rows, slack)
    parted = tell(one, all_[:cut], all_[cut:])
    assert parted.counts == whole_.counts
    assert parted.ties.equals(whole_.ties)


# Nothing raises

words = st.one_of(st.none(), st.text(max_size=12), likely)
strategies = {
    "time": st.one_of(st.none(), st.datetimes(datetime(1970, 1, 1), datetime(2199, 1, 1))),
    "duration": st.one_of(st.none(), st.integers(-(2**63), 2**63 - 1)),
    "service": st.one_of(st.sampled_from(["voice", "text"]), words),
    "record_type": st.one_of(st.sampled_from(["originating", "terminating", "forwarded"]), words),
}
mixed = st.fixed_dictionaries({name: strategies.get(name, words) for name in TYPES})


@settings(max_examples=100, deadline=None)
@given(st.lists(mixed, min_size=1, max_size=12), st.sampled_from(["calls", "texts", "both"]), st.booleans())
def test_any_mix_of_values_is_counted_and_raises_nothing(rows: list[dict[str, Any]], count: str, mutual: bool) -> None:
    rules = {"mutual": "all", "dialler_receivers": 0} if mutual else {}
    found = tell(reading(count=count, **rules), frame(*rows))
    known = [row for row in rows if plain(row["service"] or "") in ("call", "voice", "text", "sms")]
    contacts = sum(number for reasons in found.counts.values() for number in reasons.values())
    assert contacts == len(rows) + mutual * len(known)


@pytest.mark.parametrize(
    ("type_", "values"),
    [
        (pl.Float64, [60.5, float("nan"), float("inf"), 1e300, -0.0, None]),
        (pl.Decimal(38, 0), [Decimal(60), Decimal(10**30), Decimal(-1), Decimal(0), Decimal(1), None]),
        (pl.UInt64, [60, 2**64 - 1, 0, 1, 2, None]),
    ],
)
def test_durations_of_any_type_and_size(type_: Any, values: list[Any]) -> None:
    rows = frame(*(record(time=after(600 * at)) for at in range(len(values))))
    found = tell(reading(), rows.with_columns(duration=pl.Series(values, dtype=type_)))
    assert sum(n for reasons in found.counts.values() for n in reasons.values()) == len(values)
    assert found.counts["refused"]["duration cannot be"] == sum(v is not None and not 0 <= v <= 86_400 for v in values)


@pytest.mark.parametrize("name", ["duration", "service", "record_type", "call_reference", "disposition", *OPTIONAL])
def test_a_log_may_lack_any_column_but_parties_and_time(name: str) -> None:
    found = tell(reading({name: ""}), frame(record()).drop(name))
    assert found.counts["used"] == {"used": 1}


def test_without_durations_only_the_disposition_tells_unanswered() -> None:
    rows = frame(record(), record(disposition="no answer", receiver="07700900124")).drop("duration")
    told = tell(reading({"duration": ""}), rows).counts
    assert (told["used"], told["filtered"]) == ({"used": 1}, {"unanswered": 1})


# Settings


@pytest.mark.parametrize(
    ("columns", "rules", "message"),
    [
        ({"service": ""}, {"count": "both"}, "nothing tells calls from texts"),
        ({"redirecting": ""}, {"forwarded": "from forwarder"}, "nobody knows who"),
        ({}, {"mutual": "calls"}, "dialler_receivers = 200"),
        ({}, {"text_types": ["VOICE"]}, "'voice' stands in more than one of call_types, text_types"),
        ({}, {"default_country": "gb"}, "default_country"),
        ({}, {"longest_seconds": 0}, "longest_seconds"),
    ],
)
def test_settings_that_contradict_each_other_are_refused(
    columns: dict[str, str], rules: dict[str, Any], message: str
) -> None:
    with pytest.raises(ValidationError, match=message):
        a_log(columns, **rules)


def test_a_country_without_telephones_is_refused() -> None:
    with pytest.raises(SettingsError, match='default_country = "XX"'):
        reading(default_country="XX")


def test_the_fingerprint_follows_the_rules_and_not_the_path() -> None:
    assert reading().fingerprint == reading().fingerprint != reading(leg_slack=3).fingerprint
    moved = CallsReading.open(a_log().model_copy(update={"path": "elsewhere"}))
    assert moved.fingerprint == reading().fingerprint


def test_the_example_shows_every_key_with_its_default() -> None:
    raw = tomllib.loads((ROOT / "configs" / "calls.toml").read_text(encoding="utf-8"))["log"]
    log = CallsLog.model_validate(raw)
    assert set(raw["columns"]) == set(type(log.columns).model_fields)
    assert set(raw["rules"]) == set(type(log.rules).model_fields)


# The invented log


def the_log(folder: Path, **made: Any) -> tuple[orrin.Truth, CallsLog, list[pl.DataFrame]]:
    truth = orrin.make_log(folder / "calls", date(2026, 11, 30), **made)
    raw = tomllib.loads(orrin.CONFIG)["log"]
    raw["rules"]["numbers"] = str(folder / orrin.NUMBERS)
    log = CallsLog.model_validate(raw)
    names = {theirs: ours for ours, theirs in log.columns.model_dump().items() if theirs}
    files = sorted((folder / "calls").glob("dt=*/*.parquet"))
    frames = [pl.read_parquet(file).rename(names) for file in files]
    return truth, log, [rows.with_columns(pl.col("time").dt.replace_time_zone(None)) for rows in frames]


@pytest.mark.parametrize("seed", [1, 2])
def test_the_invented_log_is_read_as_it_was_planted(tmp_path: Path, seed: int) -> None:
    truth, log, days = the_log(tmp_path, days=8, people=900, seed=seed)
    assert {*truth.counts["filtered"]} >= {"dialler by behaviour", "voicemail", "self-contact"}
    assert sum(map(len, days)) == truth.rows == sum(sum(reasons.values()) for reasons in truth.counts.values())
    whole_ = pl.concat(days)
    for parts in (days, [whole_], [whole_[: len(whole_) // 3], whole_[len(whole_) // 3 :]]):
        found = tell(CallsReading.open(log), *parts)
        assert found.counts == truth.counts
        assert len(found.ties) == truth.ties
        assert found.ties["amount"].sum() == truth.seconds
        kinds = found.parties.filter(pl.col("kind") != "party").select(pl.col("party", "kind").cast(pl.String))
        assert dict(kinds.iter_rows()) == truth.kinds
        assert {*found.ties["sender"]} >= {*truth.brokers}


def test_the_pilots_of_the_invented_log_are_its_brokers(tmp_path: Path) -> None:
    truth, log, days = the_log(tmp_path, days=14, people=1_000)
    found = tell(CallsReading.open(log), *days)
    graph = igraph.Graph.TupleList(found.ties.select("sender", "receiver").rows(), directed=False).simplify()
    ranked = sorted(zip(graph.betweenness(), graph.vs["name"], strict=True), reverse=True)
    assert {name for _, name in ranked[: len(truth.brokers)]} == {*truth.brokers}


def test_texts_of_the_invented_log_without_references_merge_alike(tmp_path: Path) -> None:
    truth, log, days = the_log(tmp_path, days=3, people=500)
    rules = log.rules.model_copy(update={"count": "texts"})
    found = tell(CallsReading.open(log.model_copy(update={"rules": rules})), *days)
    assert found.counts["used"] == {"used": truth.texts}


def test_nobody_owns_the_invented_numbers(tmp_path: Path) -> None:
    """Possible by the library's metadata, and valid only in ranges kept for drama."""
    _, log, days = the_log(tmp_path, days=1, people=400)
    parties = tell(CallsReading.open(log), *days).parties["party"].cast(pl.String)
    valid = [key for key in parties if key[0] == "+" and phonenumbers.is_valid_number(phonenumbers.parse(key))]
    assert all(
        key.startswith(("+447700900", "+443069990", "+1202555010", "+1202555011", "+1202555012")) for key in valid
    )
    assert len(valid) < 0.1 * len(parties)


def test_the_same_seed_writes_the_same_log(tmp_path: Path) -> None:
    one, two = (the_log(tmp_path / name, days=2, people=400, seed=3) for name in ("one", "two"))
    assert one[0] == two[0]
    assert all(a.equals(b) for a, b in zip(one[2], two[2], strict=True))
    with pytest.raises(ValueError, match="people=10"):
        orrin.make_log(tmp_path, date(2026, 11, 30), people=10)
