"""Email: who wrote to whom.

A message to n recipients is n contacts. Announcements, newsletters and machines are left out, each counted under its
name: they reach everybody and join nobody.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import re
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Self

import numpy as np
import polars as pl

from isthmus.errors import SettingsError
from isthmus.readings.email_addresses import addresses, domain_key, local_part, mailbox, within
from isthmus.readings.email_aliases import Aliases
from isthmus.readings.email_messages import NOBODY, contacts_of
from isthmus.readings.reading import AMOUNT, FILTERED, KINDS, SIDES, Judged, Verdict, identity, repeated
from isthmus.readings.tables import digest_of
from isthmus.settings.email import EmailLog, EmailRules

__all__ = ["EmailReading"]

AGAIN = "same message and receiver again"
UNDISCLOSED = "is undisclosed"
BEHAVIOUR = "bulk sender by behaviour"
# A contact's `about` is a position here. The first two are for whole messages, the others for one receiver.
FILTERS = ("", "bulk mail", "automatic mail", "sent to a machine", "between outsiders", "outside mail")
OF_MESSAGES = 2


@dataclass(frozen=True)
class EmailReading:
    """`plus_tags`, `dots` and `internal`: the rules' domains as in keys. `by_receiver`: a recipient a row."""

    rules: EmailRules
    by_receiver: bool
    plus_tags: frozenset[str]
    dots: frozenset[str]
    internal: frozenset[str]
    aliases: Aliases
    fingerprint: str

    @classmethod
    def open(cls, log: EmailLog) -> Self:
        """Raises SettingsError (a domain that is none, a table that contradicts itself), StoreError."""
        rules = log.rules
        tags, dots, internal = (_domains(rules, name) for name in ("plus_tags", "dots", "internal"))
        aliases = Aliases.open(rules.aliases, lambda raw: _mailboxes(raw, tags, dots)[0])
        said = log.model_copy(update={"path": "", "rules": rules.model_copy(update={"aliases": ""})}).model_dump_json()
        parts = (said, digest_of(rules.aliases), _code())
        told = hashlib.blake2b("\n".join(parts).encode(), digest_size=12).hexdigest()
        return cls(rules, bool(log.columns.receiver), tags, dots, internal, aliases, told)

    @property
    def settles(self) -> bool:
        return True

    def stands_for(self, key: str) -> list[str]:
        return self.aliases.table.filter(pl.col("address") == key)["person"].unique().sort().to_list()

    @property
    def names(self) -> pl.Series:
        return self.aliases.table["person"]

    @property
    def left_out(self) -> frozenset[str]:
        return frozenset({UNDISCLOSED})

    @property
    def extras(self) -> dict[str, pl.DataType]:
        """Where a row names one recipient, only the window knows how many a message has: `message` is what such rows
        share, `about` which filter their receivers are for (see FILTERS)."""
        return {"message": pl.UInt64(), "about": pl.UInt8()} if self.by_receiver else {}

    def contacts(self, rows: pl.DataFrame) -> pl.DataFrame:
        return contacts_of(rows, self.rules.count, self.rules.content_hash)

    def keys(self, raw: pl.Series) -> pl.DataFrame:
        keys, nothing = _mailboxes(raw, self.plus_tags, self.dots)
        return pl.DataFrame({"key": keys, "nothing": nothing}).select(
            "key",
            fault=pl.when(raw == NOBODY)
            .then(pl.lit(UNDISCLOSED))
            .when(pl.col("key").is_null() & ~pl.col("nothing"))
            .then(pl.lit("is not an address")),
            kind=self._kind(pl.col("key")),
            side=self._side(pl.col("key")),
            label=pl.lit(None, pl.String),
        )

    def _kind(self, keys: pl.Expr) -> pl.Expr:
        # bounces+tag@ and no_reply@ are what bounces@ and noreply@ are
        names = local_part(keys).str.replace(r"\+.*$", "").str.replace_all(r"[-_.]", "")
        machine, role = (names.is_in([_squeezed(n) for n in told]) for told in (self.rules.machines, self.rules.roles))
        named = keys.str.contains("@", literal=True)
        kind = pl.when(named & machine).then(pl.lit("machine")).when(named & role).then(pl.lit("role"))
        return kind.otherwise(pl.lit("person")).cast(KINDS)

    def _side(self, keys: pl.Expr) -> pl.Expr:
        if not self.internal:
            return pl.lit("unknown", SIDES)
        domain = keys.str.extract(r"@([^@]*)$")
        below = (domain.str.ends_with(f".{owned}") for owned in sorted(self.internal))
        inside = pl.any_horizontal(within(keys, self.internal), *below)
        return pl.when(inside).then(pl.lit("internal")).otherwise(pl.lit("external")).cast(SIDES)

    def judge(self, contacts: pl.DataFrame, book: pl.DataFrame) -> Judged:
        contacts, book = self.aliases.apply(contacts, book)
        book = book.with_columns(named=self._kind(pl.col("party")))
        book = book.with_columns(self._kinds_by_headers(contacts, book))
        hashes = book["party"].hash(seed=1)
        contacts = contacts.with_columns(
            self._about(contacts, book),
            _recipients(contacts, self._counted_from).alias("n"),
            *(hashes.gather(contacts[side]).alias(name) for side, name in (("sender", "s"), ("receiver", "r"))),
        )
        contacts = contacts.with_columns(
            *identity(*map(pl.col, ("m1", "m2", "s", "r"))),
            amount=pl.lit(1).cast(AMOUNT) if self.rules.worth == "message" else _shares(contacts["n"]),
        )
        if self.by_receiver:
            mine = pl.struct("m1", "m2", "s").hash(seed=3)
            contacts = contacts.with_columns(message=pl.when(pl.col("m1").is_not_null()).then(mine))
        return Judged(contacts.drop("s", "r"), book, self._verdicts())

    @property
    def _counted_from(self) -> int | None:
        """A message's recipients need not be told apart up to this many (null: never)."""
        if self.by_receiver:
            return None
        return 1 if self.rules.worth == "share" else self.rules.recipient_cap or None

    def _verdicts(self) -> list[Verdict]:
        about, n, cap = pl.col("about"), pl.col("n"), self.rules.recipient_cap
        other = pl.col("sender") != pl.col("receiver")  # the others are contacts with oneself, whatever else they are
        named = [Verdict(about == at, reason, FILTERED) for at, reason in enumerate(FILTERS) if at]
        if self.by_receiver:
            return named[:OF_MESSAGES]
        above = Verdict((n > cap) & other, self._above, FILTERED)
        of_receivers = [Verdict(verdict.when & other, verdict.reason, FILTERED) for verdict in named[OF_MESSAGES:]]
        return [*named[:OF_MESSAGES], *([above] if cap else []), *of_receivers]

    @property
    def _above(self) -> str:
        return f"more than {self.rules.recipient_cap} recipients"

    def _kinds_by_headers(self, contacts: pl.DataFrame, book: pl.DataFrame) -> pl.Series:
        """Who sent nothing else here than bulk or automatic mail is named after it; `weigh` knows the whole window."""
        generated = pl.col("automatic") & ~pl.col("reply")
        kinds = book["kind"]
        odd = contacts.filter(pl.col("bulk") | generated)["sender"].drop_nulls().unique()
        sent = contacts.lazy().filter(pl.col("sender").is_in(odd.implode()))
        only = sent.group_by("sender").agg(pl.col("bulk").all(), generated=generated.all()).sort("sender").collect()
        for name, kind in (("generated", "machine"), ("bulk", "bulk sender")):  # the later one wins
            codes = only.filter(name)["sender"]
            known = kinds.gather(codes)
            kinds = kinds.scatter(codes, known.set(known < kind, kind))
        return kinds

    def _about(self, contacts: pl.DataFrame, book: pl.DataFrame) -> pl.Series:
        """Which of FILTERS applies first."""
        rules = self.rules
        inside = book["side"] == "internal"
        machine = book["named"] == "machine"
        from_inside, to_inside = (inside.gather(contacts[side]) for side in ("sender", "receiver"))
        from_machine, to_machine = (machine.gather(contacts[side]) for side in ("sender", "receiver"))
        applies = [
            (1, rules.bulk == "leave out", contacts["bulk"]),
            (2, rules.automatic == "leave out", contacts["automatic"] | from_machine),
            (3, rules.automatic == "leave out", to_machine),
            (4, rules.contacts != "all", ~from_inside & ~to_inside),
            (5, rules.contacts == "both internal", from_inside ^ to_inside),
        ]
        about = pl.zeros(contacts.height, pl.UInt8, eager=True)
        for at, asked, when in reversed(applies):
            about = about.set(when.fill_null(False), at) if asked else about
        return about.alias("about")

    def settle(self, rows: pl.LazyFrame) -> pl.DataFrame:
        again = repeated(rows, AGAIN)
        if not self.by_receiver:
            return again
        place = ["part", "at"]
        known = rows.select(*place, "amount", "message", "about").collect()
        once = known.select(*place, "message").join(again, on=place, how="anti")
        n = once.drop_nulls("message").group_by("message").agg(n=pl.len())
        cap, share = self.rules.recipient_cap, self.rules.worth == "share"
        n = n.filter(pl.col("n") > (1 if share else cap)) if share or cap else n.clear()
        above = (pl.col("n") > cap).fill_null(False) if cap else pl.lit(False)
        told = known.join(n, on="message", how="left").join(
            again.select(*place, "outcome", "reason"), on=place, how="left"
        )
        empty, left_out = pl.lit(""), above | (pl.col("about") > 0)
        told = told.with_columns(
            outcome=pl.when(left_out).then(pl.lit(FILTERED)).otherwise(pl.col("outcome").fill_null(empty)),
            reason=pl.when(above)
            .then(pl.lit(self._above))
            .when(pl.col("about") > 0)
            .then(pl.col("about").replace_strict(dict(enumerate(FILTERS)), return_dtype=pl.String))
            .otherwise(pl.col("reason").fill_null(empty)),
        ).filter((pl.col("outcome") != "") | pl.col("n").is_not_null())
        if share:
            told = told.with_columns(amount=_shares(told["n"].fill_null(1)))
        return told.select(*place, "outcome", "reason", "amount")

    def weigh(self, ties: pl.DataFrame, parties: pl.DataFrame) -> tuple[pl.DataFrame, pl.DataFrame, dict[str, int]]:
        parties = self._kinds_by_ties(ties, parties)
        rules = self.rules
        if not rules.bulk_receivers:
            return ties, parties, {}
        pairs = ties.lazy().select("sender", "receiver")
        wide = pairs.group_by("sender").agg(receivers=pl.len()).filter(pl.col("receivers") >= rules.bulk_receivers)
        answers = pairs.select(sender="receiver", receiver="sender")
        answered = pairs.join(wide, on="sender", how="semi").join(answers, on=["sender", "receiver"], how="semi")
        bulk = (
            wide.join(answered.group_by("sender").agg(answered=pl.len()), on="sender", how="left")
            .filter(pl.col("answered").fill_null(0) <= rules.bulk_answered * pl.col("receivers"))
            .collect()["sender"]
            .implode()
        )
        kind = pl.when(pl.col("party").is_in(bulk)).then(pl.lit("bulk sender", KINDS)).otherwise("kind")
        parties = parties.with_columns(kind=kind)
        if rules.bulk_behaviour == "keep":
            return ties, parties, {}
        gone = pl.col("sender").is_in(bulk) | pl.col("receiver").is_in(bulk)
        taken = int(ties.filter(gone)["contacts"].sum())
        return ties.filter(~gone), parties, {BEHAVIOUR: taken} if taken else {}

    def _kinds_by_ties(self, ties: pl.DataFrame, parties: pl.DataFrame) -> pl.DataFrame:
        """Who has sent what is neither bulk nor automatic mail is no machine or bulk sender for sending that too."""
        rules = self.rules
        left_out = [k for k, rule in (("bulk sender", rules.bulk), ("machine", rules.automatic)) if rule == "leave out"]
        sent = pl.col("party").is_in(ties["sender"].unique().implode())
        doubted = pl.col("kind").cast(pl.String).is_in(left_out) & sent
        return parties.with_columns(kind=pl.when(doubted).then("named").otherwise("kind"))


def _recipients(contacts: pl.DataFrame, least: int | None) -> pl.Series:
    """How many usable recipients, each once and other than the sender, the contact's message has; 1 where `least` or
    fewer are named, or where `least` is null."""
    n = np.ones(contacts.height, np.uint32)
    if least is not None and (contacts["named"] > least).any():
        place = (contacts["named"] > least).fill_null(False).arg_true()
        some = contacts[place].select(
            "sender", "receiver", message=(pl.col("row") - pl.col("row").min()).cast(pl.UInt64)
        )
        other = (pl.col("receiver") != pl.col("sender")).fill_null(pl.col("receiver").is_not_null())
        pairs = some.filter(other).select(pl.col("message") * 2**32 + pl.col("receiver")).to_series()
        message = some["message"].to_numpy()
        counted = np.bincount(pairs.sort().unique().to_numpy() >> 32, minlength=message.max() + 1)
        n[place] = counted[message]
    return pl.Series(n)


def _shares(n: pl.Series) -> pl.Series:
    """1 / n, rounded to what an amount holds."""
    table = [Decimal(1)] + [
        (1 / Decimal(at)).quantize(Decimal("1e-9")) for at in range(1, n.to_numpy().max(initial=0) + 1)
    ]
    return pl.Series(table, dtype=AMOUNT).gather(n)


def _mailboxes(raw: pl.Series, plus_tags: frozenset[str], dots: frozenset[str]) -> tuple[pl.Series, pl.Series]:
    keys, nothing = addresses(raw)
    return pl.select(mailbox(pl.lit(keys), plus_tags, dots)).to_series(), nothing


def _squeezed(name: str) -> str:
    return re.sub(r"[-_.]", "", name.lower())


def _domains(rules: EmailRules, name: str) -> frozenset[str]:
    found = set()
    for at, domain in enumerate(getattr(rules, name), 1):
        known = "*" if domain == "*" and name != "internal" else domain_key(domain)
        if known is None:  # what stands there may be an address, which no message tells
            raise SettingsError(f"log.rules.{name}, item {at}: not a domain; write it as site.example")
        found.add(known)
    return frozenset(found)


def _code() -> str:
    """What decides how a text is read, beside the settings."""
    own = b"".join(path.read_bytes() for path in sorted(Path(__file__).parent.glob("email*.py")))
    libraries = (importlib.metadata.version(name) for name in ("email-validator", "idna"))
    return " ".join((hashlib.blake2b(own, digest_size=12).hexdigest(), *libraries))
