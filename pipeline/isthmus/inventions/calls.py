"""An invented log of calls and texts: seeded, of any size, with the truth about itself.

The Orrin Sound islands and their telephone company do not exist. Eight villages talk among themselves, and almost
nothing passes from one to another except through six pilots of the ferries, who know three people in each of four
villages. Nobody owns the numbers: those of people begin with 06, which the United Kingdom's plan leaves unused, so
that `phonenumbers` finds them possible and none valid; those of pilots and services are Ofcom's for drama
(07700 900xxx, 03069 990xxx); those abroad are the 555-01xx of North America, kept for fiction.

What lasts is drawn once from the seed, a day from (seed, day) alone; one day is in memory at a time.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

__all__ = ["CONFIG", "NUMBERS", "Truth", "make_log"]

NUMBERS = "special_numbers.csv"  # beside the folder of the log

CONFIG = f"""\
# Settings of the invented log. Every key that is not here has its default: `isthmus check` tells them.
series = "orrin"

[log]
path = "calls"
kind = "calls"

[log.columns]
redirecting = "redirecting_number"
country = "serving_country"
conference = "conference_id"

[log.rules]
default_country = "GB"
numbers = "{NUMBERS}"

[window]
days = 28

[graph]
directed = false

[run]
warehouse = "warehouse"
work = "work"
"""

VILLAGES, BROKERS = 8, 6
ABROAD = 3  # numbers abroad, for each village its own, so that they join none
VOICEMAIL, BRIDGE, CLOCK, DIALLER, LOOSE_BRIDGE = "3069990001", "3069990002", "3069990003", "3069990004", "3069990005"
SERVICES = (VOICEMAIL, BRIDGE, CLOCK, DIALLER, LOOSE_BRIDGE)
LISTED = {VOICEMAIL: ("voicemail", "Voicemail"), BRIDGE: ("conference", "Bridge"), CLOCK: ("machine", "Clock")}
DIALLED = 40  # by the dialler, each day
DIALLER_RECEIVERS = 200  # the reading's default

CALLS_A_DAY = 1.5  # per person
HABIT = 2.5  # as in the payments log: a call picks the tie at share u**HABIT of the book
HOURS = np.array([1, 1, 1, 1, 1, 1, 3, 8, 14, 18, 20, 20, 20, 18, 18, 18, 20, 24, 28, 30, 24, 14, 6, 2])
REFERENCED = 0.8  # of calls have a reference in their records
FAR_END = 0.6  # of calls leave a record at the called end too
AGAIN = 0.003  # of records are delivered a second time

# Shares of a day's calls that are not simply answered; what cannot be understood stays below one in a hundred.
SHARES = {
    "unanswered": 0.12,
    "text": 0.2,
    "voicemail": 0.04,
    "forwarded leg": 0.02,
    "conference leg": 0.02,
    "short code": 0.02,
    "listed machine": 0.005,
    "neither call nor text": 0.01,
    "abroad": 0.01,
    "self-contact": 0.001,
    "sender is withheld": 0.003,
    "sender is null": 0.0005,
    "receiver is too long": 0.001,
    "receiver has no known country": 0.0005,
    "duration cannot be": 0.001,
    "time is null": 0.0005,
}
REFUSED = tuple(SHARES)[-5:]
LEFT_OUT = tuple(name for name in SHARES if name not in (*REFUSED, "abroad"))
WITHHELD = ("anonymous", "Unknown", "", "sip:anonymous@anonymous.invalid")  # the last as RFC 3323 writes it

Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Truth:
    """What the log holds, counted while it was written: outcome -> reason -> contacts, under the default rules.

    `ties`: distinct ordered pairs among contacts used; `seconds`: their durations together. `texts`: texts sent, each
    counted once; `kinds`: keys of the parties that are more than a party -> their kind.
    """

    rows: int
    counts: dict[str, dict[str, int]]
    ties: int
    seconds: int
    texts: int
    kinds: dict[str, str]
    brokers: tuple[str, ...]


@dataclass
class _Told:
    counts: Counter[tuple[str, str]] = field(default_factory=Counter)
    pairs: list[Ints] = field(default_factory=list)
    dialled: list[Ints] = field(default_factory=list)
    rows: int = 0
    seconds: int = 0
    texts: int = 0


def make_log(folder: Path, last_day: date, days: int = 28, people: int = 2_000, seed: int = 1) -> Truth:
    """Write `folder/dt=YYYY-MM-DD/part-0.parquet` for each day, and the special numbers beside `folder`.

    Raises ValueError (fewer than 400 people or 1 day).
    """
    if days < 1 or people < 50 * VILLAGES:
        raise ValueError(f"days={days}, people={people}: give at least 1 day and {50 * VILLAGES} people")
    book, told = _Book.draw(people, seed), _Told()
    for back in range(days - 1, -1, -1):
        day = last_day - timedelta(days=back)
        home = folder / f"dt={day}"
        home.mkdir(parents=True, exist_ok=True)
        _day(book, day, np.random.default_rng([seed, day.toordinal()]), told).write_parquet(home / "part-0.parquet")
    listed = {"number": [f"0{number}" for number in LISTED], "role": [role for role, _ in LISTED.values()]}
    pl.DataFrame(listed | {"label": [label for _, label in LISTED.values()]}).write_csv(folder.parent / NUMBERS)
    return _truth(book, told)


def _truth(book: _Book, told: _Told) -> Truth:
    counts = told.counts
    dialled = np.concatenate(told.dialled)
    found = len(np.unique(dialled)) >= DIALLER_RECEIVERS
    counts["filtered", "dialler by behaviour"] = len(dialled) * found
    counts["used", "used"] += len(dialled) * (not found)
    outcomes: dict[str, dict[str, int]] = {}
    for (outcome, reason), number in sorted(counts.items()):
        if number:
            outcomes.setdefault(outcome, {})[reason] = number
    machines = {f"+44{number}": "machine" for number in (*LISTED, *([DIALLER] if found else []))}
    return Truth(
        rows=told.rows,
        counts=outcomes,
        ties=len(np.unique(np.concatenate(told.pairs))) + (0 if found else len(np.unique(dialled))),
        seconds=told.seconds + (0 if found else 5 * len(dialled)),
        texts=told.texts,
        kinds=machines | {"GB:112": "short code", "US:911": "short code"},
        brokers=tuple(f"+44{number}" for number in book.national[book.people : book.people + BROKERS]),
    )


@dataclass(frozen=True)
class _Book:
    """What lasts.

    `national`: everybody's number without its country: people, pilots, services, numbers abroad. `village`: people's.
    `caller`, `called` have one entry per tie; ties from `ordinary` on are the pilots'.
    """

    national: pl.Series
    village: Ints
    people: int
    caller: Ints
    called: Ints
    ordinary: int

    @classmethod
    def draw(cls, people: int, seed: int) -> _Book:
        rng = np.random.default_rng([seed, 0])
        village = np.sort(rng.integers(0, VILLAGES, people))
        start, end = (np.searchsorted(village, np.arange(VILLAGES), side) for side in ("left", "right"))
        of = village[rng.integers(0, people, 4 * people)]
        one, two = (start[of] + ((end - start)[of] * rng.random(len(of)) ** 2).astype(np.int64) for _ in range(2))
        back = rng.random(len(of)) < 0.6  # most ties of talk go both ways
        pair = np.unique(np.concatenate([one * people + two, (two * people + one)[back]]))
        pair = rng.permutation(pair[pair // people != pair % people])
        piloted = []
        for pilot in range(BROKERS):
            for step in (0, 1, 2, 5):
                home = (pilot + step) % VILLAGES
                known = start[home] + (end - start)[home] // 2 + rng.permutation((end - start)[home] // 2)[:3]
                piloted += [(people + pilot, int(one)) for one in known] + [(int(one), people + pilot) for one in known]
        ties = np.array(piloted)
        number = (np.arange(people) * 48_271 + 271_828_183) % 999_999_937  # prime, so distinct
        names = [f"7700900{100 + 7 * pilot}" for pilot in range(BROKERS)]
        names += [*SERVICES, *(f"20255501{line:02}" for line in range(ABROAD * VILLAGES))]
        return cls(
            national=pl.concat([pl.Series(6_000_000_000 + number).cast(pl.String), pl.Series(names)]),
            village=village,
            people=people,
            caller=np.concatenate([pair // people, ties[:, 0]]),
            called=np.concatenate([pair % people, ties[:, 1]]),
            ordinary=len(pair),
        )

    def service(self, number: str) -> int:
        return self.people + BROKERS + SERVICES.index(number)

    @property
    def abroad(self) -> int:
        return self.people + BROKERS + len(SERVICES)


def _day(book: _Book, day: date, rng: np.random.Generator, told: _Told) -> pl.DataFrame:
    """One day's records. Calls of one pair never begin in the same minute, so that only legs of a call look alike."""
    calls = round(CALLS_A_DAY * book.people * (1.15 if day.weekday() > 4 else 0.95))
    tie = (book.ordinary * rng.random(calls) ** HABIT).astype(np.int64)
    piloted = np.arange(book.ordinary, len(book.caller))
    tie = np.concatenate([tie, piloted[piloted % 7 == day.toordinal() % 7]])
    minute = rng.choice(24, len(tie), p=HOURS / HOURS.sum()) * 60 + rng.integers(0, 60, len(tie))
    tie, minute = np.divmod(rng.permutation(np.unique(tie * 1440 + minute)), 1440)
    calls = len(tie)
    kind = np.full(calls, "answered", "U32")
    ordinary = rng.permutation(np.flatnonzero(tie < book.ordinary))
    ends = np.cumsum([round(share * calls) for share in SHARES.values()])
    for name, which in zip(SHARES, np.split(ordinary[: ends[-1]], ends[:-1]), strict=True):
        kind[which] = name
    events = pl.DataFrame(
        {
            "kind": kind,
            "caller": book.caller[tie],
            "called": book.called[tie],
            "start": minute * 60 + rng.integers(0, 50, calls),
            "seconds": 2 + rng.exponential(110, calls).astype(np.int64),
            "odd": rng.integers(0, 4, calls),
            "number": np.arange(calls),
            "referenced": rng.random(calls) < REFERENCED,
        }
    )
    events = _directed(book, events, rng, told)
    records = _records(events, rng, told)
    told.rows += records.height
    return _written(book, records, day)


def _directed(book: _Book, events: pl.DataFrame, rng: np.random.Generator, told: _Told) -> pl.DataFrame:
    """Calls of special kinds get their special parties; the dialler's come along. Counts what will be used."""
    kind, first = pl.col("kind"), pl.col("odd") == 0
    home = pl.Series(book.village[np.minimum(events["caller"].to_numpy(), book.people - 1)])
    called = (
        pl.when((kind == "voicemail") & first)
        .then(book.service(VOICEMAIL))
        .when((kind == "conference leg") & first)
        .then(book.service(BRIDGE))
        .when(kind == "conference leg")
        .then(book.service(LOOSE_BRIDGE))
        .when(kind == "listed machine")
        .then(book.service(CLOCK))
        .when(kind == "abroad")
        .then(book.abroad + ABROAD * home + pl.col("number") % ABROAD)
        .when(kind == "self-contact")
        .then("caller")
        .otherwise("called")
    )
    events = events.with_columns(called=called.cast(pl.Int64))
    counted = events.filter(kind.is_in(["answered", "abroad"]))
    size = len(book.national)
    told.pairs.append((counted["caller"] * size + counted["called"]).to_numpy())
    told.seconds += int(counted["seconds"].sum())
    told.counts["used", "used"] += counted.height
    told.texts += events.filter(kind == "text").height
    receivers = rng.permutation(book.people)[:DIALLED]
    told.dialled.append(receivers)
    dialled = {
        "kind": ["dialled"] * DIALLED,
        "caller": [book.service(DIALLER)] * DIALLED,
        "called": receivers,
        "start": 36_000 + 60 * np.arange(DIALLED),
        "seconds": [5] * DIALLED,
        "odd": [0] * DIALLED,
        "number": events.height + np.arange(DIALLED),
        "referenced": [True] * DIALLED,
    }
    return pl.concat([events, pl.DataFrame(dialled, schema=events.schema)])


def _records(events: pl.DataFrame, rng: np.random.Generator, told: _Told) -> pl.DataFrame:
    """What the network writes of each call, at one end or both, once or twice. Counts what will not be used."""
    kind, record = pl.col("kind"), pl.col("record")
    near = events.with_columns(record=pl.when(kind == "forwarded leg").then(2).otherwise(0))
    both = kind.is_in(["answered", "text", "unanswered"])
    far = events.filter(both & pl.Series(rng.random(events.height) < FAR_END))
    late = rng.integers(0, 3, far.height)
    far = far.with_columns(
        record=pl.lit(1),
        start=far["start"] + late,
        seconds=far["seconds"] - np.minimum(late, 1),  # never where both start at once: the first one counts
    )
    told.counts["duplicate", "other record of the same call"] += far.filter(kind == "answered").height
    near, far = (frame.with_columns(pl.col("record").cast(pl.Int64)) for frame in (near, far))
    again = near.filter((kind == "answered") & pl.Series(rng.random(near.height) < AGAIN))
    told.counts["duplicate", "record delivered again"] += again.height
    records = pl.concat([near, far, again])
    for name, number in records["kind"].value_counts().iter_rows():
        if name in LEFT_OUT or name in REFUSED:
            told.counts["filtered" if name in LEFT_OUT else "refused", name] += number
    return records.sort("start", record, maintain_order=True)


def _written(book: _Book, records: pl.DataFrame, day: date) -> pl.DataFrame:
    """Records under the log's names, each number in one of the forms that such logs have."""
    kind, odd, form = pl.col("kind"), pl.col("odd"), pl.col("form")
    abroad = kind.is_in(["abroad", "receiver has no known country"])
    # a switch writes a caller always in one form, and a telephone book remembers how each number is dialled
    records = records.with_columns(
        caller_form=pl.col("caller") * 37 % 100, called_form=(pl.col("caller") * 31 + pl.col("called") * 17) % 100
    )
    # who calls from elsewhere is told in full; in a country without a name the called number is in national form
    elsewhere = abroad | ((kind == "short code") & (odd == 0))
    records = records.with_columns(
        caller_form=pl.when(elsewhere).then(0).otherwise("caller_form"),
        called_form=pl.when(abroad).then(60).otherwise("called_form"),
    )
    texts = {}
    for side in ("caller", "called"):
        national = book.national.gather(records[side])
        frame = pl.DataFrame({"nsn": national, "form": records[f"{side}_form"]})
        nsn = pl.col("nsn")
        written = (
            pl.when(form < 55).then("+44" + nsn)
            .when(form < 80).then("0" + nsn)
            .when(form < 90).then("44" + nsn)
            .when(form < 94).then("+44 " + nsn.str.slice(0, 4) + " " + nsn.str.slice(4))
            .when(form < 96).then("0044" + nsn)
            .when(form < 98).then("sip:+44" + nsn + "@orrin.example;user=phone")
            .otherwise("tel:+44-" + nsn.str.slice(0, 4) + "-" + nsn.str.slice(4))
        )  # fmt: skip
        texts[side] = frame.select(written).to_series()
    there = book.national.gather(records["called"])
    records = records.with_columns(caller_text=texts["caller"], called_text=texts["called"], there=there)
    local = pl.format("({}) {}-{}", *(pl.col("there").str.slice(*cut) for cut in ((0, 3), (3, 3), (6, 4))))
    withheld = pl.lit(pl.Series([list(WITHHELD)])).list.get(odd)
    calling = (
        pl.when(kind == "sender is withheld")
        .then(withheld)
        .when(kind != "sender is null")
        .then("caller_text")
    )  # fmt: skip
    called = (
        pl.when((kind == "short code") & (odd == 0)).then(pl.lit("911"))
        .when(kind == "short code").then(pl.lit("112"))
        .when(kind == "receiver is too long").then("+44" + pl.col("there") + "1234567")
        .when(kind == "abroad").then(local)
        .otherwise("called_text")
    )  # fmt: skip
    country = (
        pl.when(kind == "receiver has no known country").then(pl.lit("--"))
        .when(elsewhere).then(pl.lit("US"))
        .when(odd < 3).then(pl.lit("GB"))
    )  # fmt: skip
    service = pl.when(kind == "text").then(pl.lit("SMS")).when(kind == "neither call nor text").then(pl.lit("data"))
    disposition = (
        pl.when((kind == "voicemail") & (odd > 0)).then(pl.lit("VOICEMAIL"))
        .when((kind == "unanswered") & (odd > 1)).then(pl.lit("NO_ANSWER"))
    )  # fmt: skip
    duration = pl.when((kind == "unanswered") & (odd < 3)).then(0).when(kind == "text").then(None)
    since = pl.lit(day).cast(pl.Datetime("us", "UTC")) + pl.duration(seconds=pl.col("start"))
    names = ["originating", "terminating", "forwarded"]
    reference = pl.format("{}-{}", pl.lit(f"{day:%y%m%d}"), pl.col("number"))
    return records.select(
        calling_number=calling,
        called_number=called,
        start_time=pl.when(kind != "time is null").then(since),
        duration=duration.when(kind == "duration cannot be").then(-5).otherwise("seconds"),
        call_type=service.otherwise(pl.lit("voice")),
        record_type=pl.col("record").replace_strict([0, 1, 2], names),
        call_reference=pl.when("referenced").then(reference),
        disposition=disposition.otherwise(pl.lit("ANSWERED")),
        redirecting_number=pl.when(kind == "forwarded leg").then("called_text"),
        serving_country=country,
        conference_id=pl.when((kind == "conference leg") & (odd > 0)).then(pl.format("C{}", pl.col("number"))),
    )
