"""An invented email log: seeded, of any size, in each of three layouts, with the truth about itself.

The Thornwick Almanac does not exist. Its people write within their departments; half a dozen desks with few
correspondents join the departments. The rest is the dirt of the trade: newsletters, machines, announcements, answers
from absent people, mail seen on two servers, addresses that change hands, and addresses that are none.

Who exists and who writes to whom is drawn once from the seed, a day from (seed, day) alone. The truth is what was
planted: each contact is written with its fate.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import date, timedelta
from pathlib import Path
from typing import Literal

import numpy as np
import polars as pl
from numpy.typing import ArrayLike

from isthmus.errors import StoreError
from isthmus.inventions.email_people import BRIDGES, CIRCLE, FORMS, OWN, PLUS, SPECIAL, Book
from isthmus.store import story

__all__ = ["CONFIG", "LAYOUTS", "Layout", "Truth", "config", "make_log"]

Layout = Literal["list", "headers", "rows"]
LAYOUTS: dict[Layout, tuple[str, ...]] = {
    "list": ("recipients",),
    "headers": ("to", "cc", "bcc"),
    "rows": ("receiver",),
}

CAP = 50  # the reading's default
FATES = {
    "used": ("used", "used"),
    "again": ("duplicate", "same message and receiver again"),
    "bulk": ("filtered", "bulk mail"),
    "automatic": ("filtered", "automatic mail"),
    "to machine": ("filtered", "sent to a machine"),
    "above": ("filtered", f"more than {CAP} recipients"),
    "outsiders": ("filtered", "between outsiders"),
    "behaviour": ("filtered", "bulk sender by behaviour"),
    "self": ("filtered", "self-contact"),
    "null sender": ("refused", "sender is null"),
    "empty sender": ("refused", "sender is empty"),
    "broken sender": ("refused", "sender is not an address"),
    "null receiver": ("refused", "receiver is null"),
    "nobody": ("filtered", "receiver is undisclosed"),  # where a row names one recipient, that one is null
    "empty receiver": ("refused", "receiver is empty"),
    "broken receiver": ("refused", "receiver is not an address"),
    "null time": ("refused", "time is null"),
}
FATE = {name: at for at, name in enumerate(FATES)}
USED, AGAIN = FATE["used"], FATE["again"]

# Return-Path, Auto-Submitted, List-Id, List-Unsubscribe, Precedence
HEADERS = ("return_path", "auto_submitted", "list_id", "list_unsubscribe", "precedence")
HEADS: dict[str, tuple[str | None, ...]] = {
    "ordinary": (f"<mail@{OWN}>", None, None, None, None),
    "said no": (f"<mail@{OWN}>", "No", None, None, None),
    "not told": (None, None, None, None, None),
    "list": (f"<bounce@{OWN}>", None, f"Weekly <weekly.lists.{OWN}>", None, None),
    "newsletter": (f"<bounce@{OWN}>", None, f"<weekly.lists.{OWN}>", f"<mailto:leave@{OWN}>", "list"),
    "offers": (f"<bounce@{OWN}>", None, None, None, "Bulk"),
    "bounce": ("<>", None, None, None, None),
    "away": ("<>", "auto-replied (vacation)", None, None, None),
    "generated": (f"<build@{OWN}>", "auto-generated; owner-email=x", None, None, None),
}
HEAD = {name: at for at, name in enumerate(HEADS)}
MICROS_PER_DAY = 86_400_000_000
WITHOUT_ID = 0.1
SEEN_TWICE = 0.02  # of ordinary messages, on the same day; and as many the day after


def config(layout: Layout = "list") -> str:
    """The settings of the log in this layout."""
    columns = "\n".join(f'{name} = "{name}"' for name in LAYOUTS[layout])
    headers = "\n".join(f'{name} = "{name}"' for name in HEADERS)
    domains = ", ".join(f'"{domain}"' for domain in PLUS)
    return f"""\
# Settings of the invented log. Every key that is not here has its default: `isthmus check` tells them.
series = "thornwick"

[log]
path = "email"
kind = "email"

[log.columns]
sender = "from"
time = "date"
{columns}
message_id = "message_id"
size = "bytes"
{headers}

[log.rules]
internal = ["{OWN}"]
contacts = "one internal"
plus_tags = [{domains}]
aliases = "aliases.csv"

[window]
days = 28

[run]
warehouse = "warehouse"
work = "work"
"""


CONFIG = config()


@dataclass(frozen=True)
class Truth:
    """What the log holds, counted while it was planted.

    `counts`: outcome -> reason -> contacts, as CONFIG reads them. `ties`: sender, receiver, contacts and share (the sum
    of 1 / recipients, each rounded to nine places) of what is used. `kinds`: party -> kind, of those that are no plain
    person and of persons who might be mistaken for one. `brokers` join the departments.
    """

    rows: int
    contacts: int
    counts: dict[str, dict[str, int]]
    ties: pl.DataFrame
    kinds: dict[str, str]
    brokers: tuple[str, ...]


def make_log(
    folder: Path, last_day: date, days: int = 28, people: int = 1_000, seed: int = 1, layout: Layout = "list"
) -> Truth:
    """Write `folder/dt=YYYY-MM-DD/part-0.parquet` for each day, and `aliases.csv` beside the folder.

    About 3 messages and 8 contacts for each of the `people` a day. Raises ValueError (under 160 people or 1 day),
    StoreError (the folder cannot be written, or holds other days, which would be read along).
    """
    if days < 1 or people < 160:
        raise ValueError(f"days={days}, people={people}: give at least 1 day and 160 people")
    wanted = [last_day - timedelta(days=back) for back in range(days - 1, -1, -1)]
    if others := {found.name for found in folder.glob("dt=*")} - {f"dt={day}" for day in wanted}:
        raise StoreError(f"{folder} holds other days ({min(others)} .. {max(others)}); give an empty folder")
    book = Book.draw(people, seed)
    handover = wanted[days // 2]  # the first day of whoever has the duty then
    rows, counts, used = 0, Counter[int](), list[pl.DataFrame]()
    with story("write the log"):
        for day, messages, contacts in _days(book, wanted, seed):
            home = folder / f"dt={day}"
            home.mkdir(parents=True, exist_ok=True)
            frame = _laid_out(messages, contacts, layout, len(book.keys))
            frame.write_parquet(home / "part-0.parquet")
            rows += frame.height
            counts.update(dict(contacts["fate"].value_counts().iter_rows()))
            used.append(_ties(contacts, book, handover))
        _aliases(book, handover).write_csv(folder.parent / "aliases.csv")
    told: dict[str, dict[str, int]] = {}
    fates = FATES | {"nobody": FATES["null receiver"]} if layout == "rows" else FATES
    for name, (outcome, reason) in sorted(fates.items(), key=lambda item: item[1]):
        if number := counts[FATE[name]]:
            reasons = told.setdefault(outcome, {})
            reasons[reason] = reasons.get(reason, 0) + number
    ties = pl.concat(used).group_by("sender", "receiver").agg(pl.col("contacts", "share").sum())
    parties = ties.select(
        *(book.keys.gather(ties[side]).alias(side) for side in ("sender", "receiver")), "contacts", "share"
    ).sort("sender", "receiver")
    brokers = tuple(f"{name}@{OWN}" for name in BRIDGES)
    return Truth(rows, counts.total(), told, parties, _kinds(book), brokers)


def _kinds(book: Book) -> dict[str, str]:
    kinds = dict.fromkeys(SPECIAL, "bulk sender")
    kinds |= {"orders": "role"} | dict.fromkeys(("no-reply", "daemon", "build"), "machine")
    del kinds["duty"], kinds["moved"]  # which are persons' by the table
    mistakable = {str(book.keys[at]): "person" for at in (POSTER, AWAY, DUTY, NEXT_DUTY, MOVED)}
    return {SPECIAL[name]: kind for name, kind in kinds.items()} | mistakable


# People with a part to play, all in the first department.
DUTY, NEXT_DUTY, MOVED, POSTER, AWAY = range(5)


def _aliases(book: Book, handover: date) -> pl.DataFrame:
    duty, moved = SPECIAL["duty"], SPECIAL["moved"]
    rows = [
        (duty.upper(), book.keys[DUTY], None, handover - timedelta(days=1)),
        (duty, book.keys[NEXT_DUTY], handover, None),
        (f"Old box <{moved}>", book.keys[MOVED], None, None),
    ]
    return pl.DataFrame(rows, ["address", "person", "from", "to"], orient="row")


@dataclass
class _Day:
    """Messages of one day, in batches of like ones. `to`, `fate` and `n` are lists, one entry a contact."""

    batches: list[pl.DataFrame] = field(default_factory=list)

    def add(
        self,
        sender: ArrayLike,
        to: ArrayLike,
        fate: str | list[str] = "used",
        n: int = 1,
        head: str = "ordinary",
        *,
        hollow: int = 0,
        timed: bool = True,
        plain: bool = False,
    ) -> None:
        """`to`: messages x recipients. `n`: how many recipients count. `hollow`: 1 an empty list, 2 none at all.
        `plain`: may be seen twice, or lack its Message-ID."""
        receivers = np.atleast_2d(np.asarray(to, np.int64))
        fates = [FATE[name] for name in ([fate] * receivers.shape[1] if isinstance(fate, str) else fate)]
        self.batches.append(
            pl.DataFrame(
                {
                    "sender": np.broadcast_to(np.asarray(sender, np.int64), len(receivers)),
                    "to": pl.Series(receivers).cast(pl.List(pl.Int64)),
                    "fate": pl.Series(np.broadcast_to(np.array(fates), receivers.shape)).cast(pl.List(pl.Int64)),
                }
            ).with_columns(
                n=pl.lit(n, pl.Int64), head=pl.lit(HEAD[head], pl.Int64), hollow=hollow, timed=timed, plain=plain
            )
        )


def _days(book: Book, days: list[date], seed: int) -> Iterator[tuple[date, pl.DataFrame, pl.DataFrame]]:
    """Each day's messages, and their contacts with texts and fates."""
    late = pl.DataFrame()
    for day in days:
        number = day.toordinal()
        rng = np.random.default_rng([seed, number])
        planted = _Day()
        _ordinary(planted, book, rng, number)
        _left_out(planted, book, rng, number)
        _refused(planted, book, rng)
        messages = pl.concat(planted.batches)
        count = messages.height
        micros = np.sort(rng.integers(0, MICROS_PER_DAY - count, count)) + np.arange(count)  # no two alike
        start = (day - date(1970, 1, 1)).days * MICROS_PER_DAY
        plain = messages["plain"].to_numpy()
        messages = messages.with_columns(
            time=pl.Series(start + rng.permutation(micros)),
            bytes=pl.Series(rng.integers(900, 90_000, count)),
            id=pl.format("<{}.{}@mx.{}>", pl.lit(number), pl.int_range(pl.len()), pl.lit(OWN)),
            copy=pl.lit(False),
        ).with_columns(id=pl.when(pl.Series(~plain | (rng.random(count) >= WITHOUT_ID))).then("id"))
        again = messages.filter(pl.Series(plain & (rng.random(count) < 2 * SEEN_TWICE))).with_columns(copy=pl.lit(True))
        half = again.height // 2
        written = pl.concat([part for part in (messages, again[:half], late) if part.height]).sort("time")
        late = again[half:]
        yield day, *_written(written, book, rng)


def _ordinary(day: _Day, book: Book, rng: np.random.Generator, number: int) -> None:
    people, near = book.people, book.near
    each = np.bincount(1 + rng.geometric(0.45, 3 * people) % 5, minlength=6)
    for size in range(1, 6):
        sender = rng.integers(0, people, each[size])
        turn = rng.integers(0, CIRCLE, (each[size], 1)) + np.arange(size)
        head = ("ordinary", "said no", "not told")[size % 3]
        day.add(sender, near[sender[:, None], turn % CIRCLE], n=size, head=head, plain=True)
    due = [(b, p) for b, row in zip(book.bridge, book.bridged, strict=True) for p in row if (b + p + number) % 7 == 0]
    for bridge, person in due:
        day.add(bridge, [[person]])
        day.add(person, [[bridge]])
    partners = np.arange(number % 3, book.partners, 3)
    day.add(book.partner[partners], partners[:, None], plain=True)
    day.add(partners, book.partner[partners][:, None])
    # The desk of orders writes to as many as a message may have, and is answered by some of them.
    orders = book.place("orders")
    guests = book.guest[(number * 37 + np.arange(CAP)) % len(book.guest)]
    day.add(orders, [guests], n=CAP)
    day.add(guests[:4], np.full((4, 1), orders))
    someone = rng.permutation(np.arange(5, people // 8))[:4]  # in the department of those who have the duty
    day.add(book.place("duty"), someone[:2, None])
    day.add(someone[:2], np.full((2, 1), book.place("duty")))
    day.add(someone[2:], np.full((2, 1), book.place("moved")))
    day.add(book.place("moved"), [someone[2:]], n=2)
    some = rng.integers(0, people, 3)
    day.add(some, np.column_stack([near[some, 0], near[some, 0]]), ["used", "again"])
    day.add(some, np.column_stack([near[some, 1], some]), ["used", "self"])
    day.add(some, some[:, None], "self")


def _left_out(day: _Day, book: Book, rng: np.random.Generator, number: int) -> None:
    people = book.people
    crowd = rng.permutation(people)
    sender, others = crowd[0], crowd[1:]
    day.add(sender, [others[: CAP + 1 + number % 9]], "above")
    day.add(book.place("weekly"), [others[:40]], "bulk", head="newsletter")
    day.add(book.place("offers"), others[:9, None], "bulk", head="offers")
    day.add(POSTER, [book.near[POSTER]], "bulk", head="list")
    day.add([POSTER, AWAY], book.near[[POSTER, AWAY], :1])  # who write as persons too
    day.add(AWAY, book.near[AWAY][:3, None], "automatic", head="away")
    day.add(book.place("no-reply"), others[:20, None], "automatic", head="not told")
    day.add(book.place("daemon"), others[:5, None], "automatic", head="bounce")
    day.add(book.place("build"), [others[:12]], "automatic", head="generated")
    day.add(others[:3], np.full((3, 1), book.place("no-reply")), "to machine")
    outside = rng.permutation(book.partner)
    day.add(outside[0], [outside[1:4]], "outsiders")
    # Never a header, and never an answer, but everybody hears from it.
    readers = (number * 53 + np.arange(120)) % people
    day.add(book.place("gazette"), readers.reshape(3, 40), "behaviour", head="not told")


def _refused(day: _Day, book: Book, rng: np.random.Generator) -> None:
    some = rng.integers(0, book.people, 4)
    near = book.near[some, :2]
    for name in ("null", "empty"):
        day.add(book.place(name), near[:1], f"{name} sender")
        day.add(some[:1], [[near[0, 0], book.place(name)]], ["used", f"{name} receiver"])
    for at in range(4):
        broken = book.place(f"broken {at}")
        day.add(broken, near[at : at + 1], "broken sender")
        day.add(some[at], [[near[at, 0], broken]], ["used", "broken receiver"])
    for hollow in (1, 2):
        day.add(some[0], [[book.place("null")]], "nobody", hollow=hollow)
    day.add(some, near, "null time", timed=False)


def _written(messages: pl.DataFrame, book: Book, rng: np.random.Generator) -> tuple[pl.DataFrame, pl.DataFrame]:
    """Messages with their sender's text, and contacts with their receiver's. Forms are drawn anew for each delivery."""

    def texts(places: pl.Series) -> pl.Series:
        form = rng.choice(FORMS, len(places), p=[0.5, 0.1, 0.15, 0.15, 0.05, 0.05])
        return book.written.gather(places.to_numpy() * FORMS + form)

    messages = messages.with_row_index("m").with_columns(texts(messages["sender"]).alias("from"))
    contacts = messages.explode("to", "fate")
    fate = pl.when(pl.col("copy")).then(AGAIN).otherwise("fate").cast(pl.Int64)
    return messages, contacts.with_columns(texts(contacts["to"]).alias("text"), fate=fate)


def _laid_out(messages: pl.DataFrame, contacts: pl.DataFrame, layout: Layout, clean: int) -> pl.DataFrame:
    """The file: `clean` places and above are no addresses, and stand under To as lists can hold them."""
    heads = pl.DataFrame(list(HEADS.values()), HEADERS, orient="row").with_row_index("head").cast({"head": pl.Int64})
    time = pl.when("timed").then(pl.col("time").cast(pl.Datetime("us", "UTC")))
    server = pl.when("copy").then(pl.lit("mx2")).otherwise(pl.lit("mx1"))
    named = ("from", time.alias("date"), pl.col("id").alias("message_id"), "bytes", server.alias("server"), "head")
    if layout == "rows":
        frame = contacts.select(*named, receiver="text")
    else:
        at = pl.int_range(pl.len()).over("m")
        where = pl.when((at == 0) | (pl.col("to") >= clean)).then(pl.lit("to")).when(at < 3).then(pl.lit("cc"))
        contacts = contacts.with_columns(where=where.otherwise(pl.lit("bcc")))
        by_message = contacts.group_by("m", maintain_order=True)
        if layout == "list":
            lists = by_message.agg(recipients="text")
        else:
            under = {name: pl.col("text").filter(pl.col("where") == name) for name in LAYOUTS["headers"]}
            lists = by_message.agg(under["to"].alias("to"), under["cc"].alias("cc"), under["bcc"].alias("bcc"))
            lists = lists.with_columns(pl.col("cc").list.join(", "))  # as the header's text
        main = "recipients" if layout == "list" else "to"
        empty = pl.lit([], pl.List(pl.String))
        hollow = pl.when(pl.col("hollow") == 0).then(main).when(pl.col("hollow") == 1).then(empty)
        joined = messages.drop("to").join(lists, on="m", maintain_order="left")
        frame = joined.with_columns(hollow.alias(main)).select(*named, *LAYOUTS[layout])
    return frame.join(heads, on="head", maintain_order="left").drop("head")


def _ties(contacts: pl.DataFrame, book: Book, handover: date) -> pl.DataFrame:
    """A day's used contacts by the persons' places, with what they are worth when shared."""
    duty, moved = book.place("duty"), book.place("moved")
    later = pl.col("time") >= (handover - date(1970, 1, 1)).days * MICROS_PER_DAY
    holder = pl.when(later).then(NEXT_DUTY).otherwise(DUTY)
    places = [
        pl.when(pl.col(old) == duty).then(holder).when(pl.col(old) == moved).then(MOVED).otherwise(old).alias(side)
        for side, old in (("sender", "sender"), ("receiver", "to"))
    ]
    nano = (10**9 / pl.col("n")).round().cast(pl.Int64)
    return (
        contacts.filter(pl.col("fate") == USED)
        .select(*places, nano=nano)
        .group_by("sender", "receiver")
        .agg(contacts=pl.len(), share=pl.col("nano").sum())
    )
