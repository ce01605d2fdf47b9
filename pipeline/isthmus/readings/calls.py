"""Calls and texts: which records of a network show that one party chose to speak or write to another."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Self

import phonenumbers
import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings import calls_legs, calls_numbers, calls_plans
from isthmus.readings.calls_legs import ORIGINATING, TERMINATING, other_records
from isthmus.readings.calls_numbers import countries, read_numbers, with_country
from isthmus.readings.calls_plans import is_country
from isthmus.readings.reading import AMOUNT, FILTERED, KINDS, REFUSED, SIDES, Judged, Verdict, identity
from isthmus.readings.tables import digest_of, read_table
from isthmus.settings.calls import CallsLog, plain

__all__ = ["CallsReading"]

CALL, TEXT = 1, 2
FORWARDED = 3  # beside ORIGINATING and TERMINATING
UNANSWERED, VOICEMAIL = 1, 2
ROLES = {"voicemail": 2, "conference": 3, "machine": 4}  # of a party; 1: a short code that has none of these
SHORT_CODE = 1


@dataclass(frozen=True)
class CallsReading:
    """`special`: key, role, label of the user's special numbers, each key once."""

    log: CallsLog
    special: pl.DataFrame = field(repr=False)
    fingerprint: str

    @classmethod
    def open(cls, log: CallsLog) -> Self:
        """Raises SettingsError, StoreError."""
        rules = log.rules
        if rules.default_country and not is_country(rules.default_country):
            raise SettingsError(
                f'log.rules.default_country = "{rules.default_country}": no country with telephone numbers; '
                "give its two letters of ISO 3166-1, such as GB"
            )
        special = _special(log)
        code = b"".join(Path(str(part.__file__)).read_bytes() for part in (calls_legs, calls_numbers, calls_plans))
        told = log.model_dump_json(exclude={"path": True, "rules": {"numbers"}})
        parts = [Path(__file__).read_bytes(), code, told.encode(), digest_of(rules.numbers).encode()]
        parts.append(phonenumbers.__version__.encode())
        digests = b"".join(hashlib.blake2b(part, digest_size=12).digest() for part in parts)
        return cls(log, special, hashlib.blake2b(digests, digest_size=12).hexdigest())

    @property
    def settles(self) -> bool:
        return True

    def stands_for(self, key: str) -> list[str]:
        return []

    @property
    def names(self) -> pl.Series:
        return pl.Series(dtype=pl.String)

    @property
    def left_out(self) -> frozenset[str]:
        return frozenset({"is withheld"})

    @property
    def extras(self) -> dict[str, pl.DataType]:
        """`side`: whose record (0: not told). `loose`: 1 without a call reference."""
        return {"side": pl.UInt8(), "loose": pl.UInt8()}

    def contacts(self, rows: pl.DataFrame) -> pl.DataFrame:
        columns, rules = self.log.columns, self.log.rules
        if columns.service:
            words = {CALL: rules.call_types, TEXT: rules.text_types}
            rows = rows.with_columns(service=_words(rows["service"], words))
        else:
            rows = rows.with_columns(service=pl.lit(CALL if rules.count == "calls" else TEXT, pl.UInt8))
        rows = self._records(rows)
        if columns.country:
            names = ["sender", "receiver", *(["redirecting"] if columns.redirecting else [])]
            rows = rows.with_columns(country=countries(rows["country"], rules.default_country))
            rows = rows.with_columns(with_country(pl.col(name), pl.col("country")).alias(name) for name in names)
        if rules.forwarded == "from forwarder":
            rows = rows.with_columns(sender=pl.when("nobody").then("sender").otherwise("redirecting"))
        if rules.mutual != "none":
            both = pl.col("service").is_in([CALL] if rules.mutual == "calls" else [CALL, TEXT])
            back = rows.filter(both).with_columns(sender="receiver", receiver="sender")
            rows = pl.concat([rows, back])
        return rows.select(*KEPT, *(name for name in rows.columns if name.startswith("_")))

    def _records(self, rows: pl.DataFrame) -> pl.DataFrame:
        """What each record says besides its parties: seconds (AMOUNT), side, cause, reference, and what kind of leg."""
        columns, rules = self.log.columns, self.log.rules
        call = pl.col("service") == CALL
        seconds, strange = pl.lit(0).cast(AMOUNT), pl.lit(False)
        if columns.duration:
            duration = pl.col("duration")
            possible = duration.is_between(0, rules.longest_seconds)
            # a text's duration means nothing, and null is none; masked before the cast, which fails on huge values
            seconds = pl.when(call & possible).then(duration).cast(AMOUNT).fill_null(0)
            strange = call & ~possible.fill_null(True)
        sides, causes = pl.lit(0, pl.UInt8), pl.lit(0, pl.UInt8)
        if columns.record_type:
            words = {
                ORIGINATING: rules.originating_types,
                TERMINATING: rules.terminating_types,
                FORWARDED: rules.forwarded_types,
            }
            rows = rows.with_columns(record_type=_words(rows["record_type"], words))
            sides = pl.col("record_type").fill_null(0)
        if columns.disposition:
            words = {UNANSWERED: rules.unanswered_causes, VOICEMAIL: rules.voicemail_causes}
            rows = rows.with_columns(disposition=_words(rows["disposition"], words))
            causes = pl.col("disposition").fill_null(0)
        told = {name: _told(name) if getattr(columns, name) else pl.lit(None, pl.String) for name in TOLD}
        return rows.with_columns(
            seconds=seconds, strange=strange, side=sides, cause=causes, reference=told["call_reference"],
            forwarded=(sides == FORWARDED) | told["redirecting"].is_not_null(),
            nobody=told["redirecting"].is_null(), bridged=told["conference"].is_not_null(),
        )  # fmt: skip

    def keys(self, raw: pl.Series) -> pl.DataFrame:
        found = read_numbers(raw, self.log.rules.default_country, self.log.rules.short_code_digits)
        found = found.join(self.special, on="key", how="left", maintain_order="left")
        listed = pl.when(pl.col("role").is_not_null()).then(pl.lit("machine"))
        kind = listed.when("short").then(pl.lit("short code")).otherwise(pl.lit("party"))
        return found.select("key", "fault", kind=kind.cast(KINDS), side=pl.lit("unknown").cast(SIDES), label="label")

    def judge(self, contacts: pl.DataFrame, book: pl.DataFrame) -> Judged:
        names = book["party"]
        role = pl.when(pl.col("kind") == "short code").then(pl.lit(SHORT_CODE)).otherwise(pl.lit(0))
        listed = pl.DataFrame({"party": names}).join(
            self.special.select(pl.col("key").alias("party"), given=pl.col("role").replace_strict(ROLES)),
            on="party", how="left", maintain_order="left",
        )  # fmt: skip
        roles = book.select(pl.coalesce(listed["given"], role).cast(pl.UInt8)).to_series()
        prints = names.hash(seed=0)
        contacts = contacts.with_columns(
            *(roles.gather(contacts[side]).alias(f"{side}_role") for side in ("sender", "receiver")),
            *(prints.gather(contacts[side]).alias(f"{side}_print") for side in ("sender", "receiver")),
        )
        told = pl.col("reference")
        contacts = contacts.with_columns(
            *identity(pl.col("sender_print"), pl.col("receiver_print"), pl.col("service"), told.fill_null("")),
            loose=told.is_null().cast(pl.UInt8),
            amount="seconds",
        )
        return Judged(contacts, book, self._verdicts())

    def _verdicts(self) -> list[Verdict]:
        rules = self.log.rules
        service, cause = pl.col("service"), pl.col("cause")
        call = service == CALL

        def is_a(role: int) -> pl.Expr:
            return (pl.col("sender_role") == role) | (pl.col("receiver_role") == role)

        forwarded = pl.col("forwarded")
        if rules.forwarded == "from forwarder":
            forwarded = forwarded & pl.col("nobody")
        short = pl.col("seconds") < rules.least_seconds if self.log.columns.duration else pl.lit(False)
        unanswered = call & ((cause == UNANSWERED) | short)
        filters = {
            "neither call nor text": service.is_null(),
            "call": call & (rules.count == "texts"),
            "text": (service == TEXT) & (rules.count == "calls"),
            "forwarded leg": forwarded & (rules.forwarded != "as caller"),
            "conference leg": (pl.col("bridged") | is_a(ROLES["conference"])) & (rules.conference == "leave out"),
            "voicemail": (call & (cause == VOICEMAIL) | is_a(ROLES["voicemail"])) & (rules.voicemail == "leave out"),
            "listed machine": is_a(ROLES["machine"]) & (rules.machines == "leave out"),
            "short code": is_a(SHORT_CODE) & (rules.short_codes == "leave out"),
            "unanswered": unanswered & (rules.unanswered == "leave out"),
        }
        return [
            Verdict(pl.col("strange"), "duration cannot be", REFUSED),
            *(Verdict(when, reason, FILTERED) for reason, when in filters.items()),
        ]

    def settle(self, rows: pl.LazyFrame) -> pl.DataFrame:
        return other_records(rows, self.log.rules.leg_slack)

    def weigh(self, ties: pl.DataFrame, parties: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, dict[str, int]]:
        rules = self.log.rules
        if not rules.dialler_receivers:
            return ties, parties, {}
        busy = ties.group_by("sender").len("receivers").filter(pl.col("receivers") >= rules.dialler_receivers)
        back = ties.join(busy, left_on="receiver", right_on="sender", how="inner").select(one="receiver", two="sender")
        called = ties.select(one="sender", two="receiver")
        back = back.join(called, on=["one", "two"], how="semi").group_by(sender="one").len("answers")
        busy = busy.join(back, on="sender", how="left").with_columns(pl.col("answers").fill_null(0))
        found = busy.filter(pl.col("answers") <= rules.dialler_back * pl.col("receivers"))["sender"]
        if found.is_empty():
            return ties, parties, {}
        theirs = pl.col("sender").is_in(found.implode()) | pl.col("receiver").is_in(found.implode())
        machine = pl.when(pl.col("party").is_in(found.implode())).then(pl.lit("machine").cast(KINDS))
        left_out = int(ties.filter(theirs)["contacts"].sum())
        return ties.filter(~theirs), parties.with_columns(kind=machine.otherwise("kind")), {DIALLER: left_out}


DIALLER = "dialler by behaviour"
TOLD = ("call_reference", "redirecting", "conference")
KEPT = (
    *("row", "time", "sender", "receiver", "service", "seconds", "strange", "side", "cause", "reference"),
    *("forwarded", "nobody", "bridged"),
)


def _told(name: str) -> pl.Expr:
    """The text of a column, null where it is blank."""
    text = pl.col(name).cast(pl.String).str.strip_chars()
    return pl.when(text != "").then(text)


def _words(column: pl.Series, meanings: Mapping[int, list[str]]) -> pl.Series:
    """What each word means (UInt8); null where it is none of these."""
    codes = {plain(word): code for code, words in meanings.items() for word in words}
    column = column.cast(pl.String)
    # distinct values first: few words, many rows
    words = column.unique().drop_nulls()
    known = [codes.get(plain(word)) for word in words]
    return column.replace_strict(words, pl.Series(known, dtype=pl.UInt8), default=None, return_dtype=pl.UInt8)


def _special(log: CallsLog) -> pl.DataFrame:
    """The user's special numbers by their keys. Raises SettingsError, StoreError."""
    rules = log.rules
    columns = {"number": pl.String(), "role": pl.String(), "label": pl.String()}
    table = read_table(rules.numbers, "log.rules.numbers", columns, frozenset({"label"}))
    found = read_numbers(table["number"], rules.default_country, rules.short_code_digits)
    table = table.hstack(found).with_columns(pl.col("role").str.to_lowercase())
    for bad, what in (
        (~table["role"].is_in(list(ROLES)), f"role is none of {', '.join(ROLES)}"),
        (table["key"].is_null(), "number cannot be read; write it with + and its country's code"),
        (~table["key"].is_first_distinct(), "number stands there twice; leave it once"),
    ):
        if bad.any():
            raise SettingsError(
                f"log.rules.numbers: {rules.numbers}, row {int(bad.arg_max() or 0) + 1} after the header: {what}"
            )
    return table.select("key", "role", "label")
