"""Kind "email": what its rows mean, against the standards' own examples and against a log with the truth beside it."""

from __future__ import annotations

import inspect
import tomllib
from datetime import date, datetime, timedelta
from decimal import Decimal
from itertools import pairwise
from pathlib import Path
from typing import Any

import igraph
import numpy as np
import polars as pl
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from isthmus.errors import SettingsError, StoreError
from isthmus.inventions.email import CONFIG, LAYOUTS, Truth, config, make_log
from isthmus.readings.email import EmailReading
from isthmus.settings.email import EmailLog, EmailRules
from reading_harness import Told, tell

NOON = datetime(2026, 11, 30, 12)
LAST = date(2026, 11, 30)
HEADERS = ("return_path", "auto_submitted", "list_id", "list_unsubscribe", "precedence")
LISTED = {"recipients": "recipients"}


def reading(columns: dict[str, str] = LISTED, /, **rules: Any) -> EmailReading:
    return EmailReading.open(
        EmailLog.model_validate({"path": "log", "kind": "email", "columns": columns, "rules": rules})
    )


def messages(*rows: dict[str, Any]) -> pl.DataFrame:
    """Messages under our names; what a row leaves out is null, but for its time."""
    lists = {"recipients": pl.List(pl.String), "to": pl.List(pl.String), "size": pl.Int64, "time": pl.Datetime("us")}
    names = sorted({"sender", "time", *(name for row in rows for name in row)})
    told = {name: [row.get(name, NOON if name == "time" else None) for row in rows] for name in names}
    return pl.DataFrame(told, schema={name: lists.get(name, pl.String) for name in names})


def key_of(text: str, **rules: Any) -> str | None:
    return reading(**rules).keys(pl.Series([text], dtype=pl.String))["key"][0]


def kind_of(told: Told, party: str) -> str:
    return told.parties.filter(pl.col("party").cast(pl.String) == party)["kind"][0]


def arcs(told: Told) -> set[tuple[str, str]]:
    return set(told.ties.select("sender", "receiver").rows())


# ---------------------------------------------------------------------------------------------------- addresses


@pytest.mark.parametrize(
    ("text", "keys"),
    [
        # RFC 5322, appendix A, by the numbers of its sections
        pytest.param("John Doe <jdoe@machine.example>", ["jdoe@machine.example"], id="A.1.1"),
        pytest.param('"Joe Q. Public" <john.q.public@example.com>', ["john.q.public@example.com"], id="A.1.2 from"),
        pytest.param(
            "Mary Smith <mary@x.test>, jdoe@example.org, Who? <one@y.test>",
            ["mary@x.test", "jdoe@example.org", "one@y.test"],
            id="A.1.2 to",
        ),
        pytest.param(
            '<boss@nil.test>, "Giant; \\"Big\\" Box" <sysservices@example.net>',
            ["boss@nil.test", "sysservices@example.net"],
            id="A.1.2 cc",
        ),
        pytest.param(
            "A Group:Ed Jones <c@a.test>,joe@where.test,John <jdoe@one.test>;",
            ["c@a.test", "joe@where.test", "jdoe@one.test"],
            id="A.1.3 to",
        ),
        pytest.param("Undisclosed recipients:;", [None], id="A.1.3 cc"),
        pytest.param(
            "Pete(A nice \\) chap) <pete(his account)@silly.test(his host)>", ["pete@silly.test"], id="A.5 from"
        ),
        pytest.param(
            "A Group(Some people)\r\n     :Chris Jones <c@(Chris's host.)public.example>,\r\n  joe@example.org,\r\n"
            "  John <jdoe@one.test> (my dear friend); (the end of the group)",
            ["c@public.example", "joe@example.org", "jdoe@one.test"],
            id="A.5 to",
        ),
        pytest.param("(Empty list)(start)Hidden recipients  :(nobody(that I know))  ;", [None], id="A.5 cc"),
        pytest.param("Joe Q. Public <john.q.public@example.com>", ["john.q.public@example.com"], id="A.6.1 from"),
        pytest.param(
            "Mary Smith <@node.test:mary@example.net>, , jdoe@test  . example",
            ["mary@example.net", "jdoe@test.example"],
            id="A.6.1 to",
        ),
        pytest.param("John Doe <jdoe@machine(comment).  example>", ["jdoe@machine.example"], id="A.6.3"),
    ],
)
def test_header_text_of_rfc_5322(text: str, keys: list[str | None]) -> None:
    told = tell(reading(), messages({"sender": "x@y.test", "recipients": None}).with_columns(recipients=pl.lit(text)))
    expected = {"used": len([k for k in keys if k])} if any(keys) else {"used": 0}
    assert told.counts["used"] == expected
    assert arcs(told) == {("x@y.test", key) for key in keys if key}
    assert told.counts.get("refused", {}) == ({} if any(keys) else {"receiver is empty": 1})


@pytest.mark.parametrize(
    ("text", "key"),
    [
        pytest.param("Alice@Site.EXAMPLE", "alice@site.example", id="case"),
        pytest.param('"alice"@site.example', "alice@site.example", id="RFC 5321, 4.1.2: quotes that need not be"),
        pytest.param('"alice doe"@site.example', '"alice doe"@site.example', id="RFC 5321, 4.1.2: quotes that must"),
        pytest.param("alice@[192.0.2.1]", "alice@[192.0.2.1]", id="RFC 5321, 4.1.3: address literal"),
        # RFC 5321, 4.5.3.1: 64 octets must be taken, and no limit be set where that can be helped
        pytest.param("A" * 64 + "@site.example", "a" * 64 + "@site.example", id="64 octets"),
        pytest.param("A" * 65 + "@site.example", "a" * 65 + "@site.example", id="65 octets"),
        pytest.param("a" * 242 + "@site.example", None, id="RFC 5321, 4.5.3.1.3: 255 octets without < and >"),
        pytest.param("a@" + "b" * 63 + ".test", "a@" + "b" * 63 + ".test", id="RFC 1035, 2.3.4: 63 octets"),
        pytest.param("a@" + "b" * 64 + ".test", None, id="RFC 1035, 2.3.4: 64 octets"),
        pytest.param("alice@mailhost", "alice@mailhost", id="a host inside"),
        pytest.param("alice@mail.local (Alice)", "alice@mail.local", id="name behind"),
        pytest.param("Doe, Alice <alice@site.example>", "alice@site.example", id="name with a comma"),
        pytest.param("al@x.test <alice@site.example>", "alice@site.example", id="never keyed on the display name"),
        pytest.param("bob@x.test, alice@site.example", None, id="two"),
        pytest.param("alice", None, id="name only"),
        pytest.param("alice@-site.example", None, id="hyphen first"),
        pytest.param("alice..b@site.example", None, id="two dots"),
        pytest.param("(" * 900 + "alice@site.example", None, id="nested deeper than a parser bears"),
    ],
)
def test_one_address(text: str, key: str | None) -> None:
    assert key_of(text) == key


@pytest.mark.parametrize("domain", ["bücher.example", "пример.example", "日本語.example"])
def test_domains_by_idna_are_as_pythons_own_codec_has_them(domain: str) -> None:
    wire = domain.encode("idna").decode()
    assert key_of(f"Alice@{domain.upper()}") == key_of(f"alice@{wire}") == f"alice@{wire}"
    assert reading(internal=[domain]).keys(pl.Series([f"a@mail.{wire}"]))["side"][0] == "internal"


def test_tags_and_dots_go_by_domain() -> None:
    rules = {"plus_tags": ["tags.example"], "dots": ["dots.example"]}
    assert key_of("alice+shop+2@Tags.Example", **rules) == "alice@tags.example"
    assert key_of("alice+shop@sub.tags.example", **rules) == "alice+shop@sub.tags.example"
    assert key_of("+shop@tags.example", **rules) == "+shop@tags.example"
    assert key_of('"a+b c"@tags.example', **rules) == '"a+b c"@tags.example'
    assert key_of("al.i.ce@dots.example", **rules) == "alice@dots.example"
    assert key_of("al.i.ce@tags.example", **rules) == "al.i.ce@tags.example"
    assert key_of("al.ice+x@any.example", plus_tags=["*"], dots=["*"]) == "alice@any.example"


# RFC 2142, sections 3, 4 and 5, without postmaster, who sends the bounces
RFC_2142 = [
    *("info", "marketing", "sales", "support", "abuse", "noc", "security"),
    *("hostmaster", "usenet", "news", "webmaster", "www", "uucp", "ftp"),
]


@pytest.mark.parametrize(
    ("local", "kind"),
    [
        *((name.upper(), "role") for name in RFC_2142),
        ("postmaster", "machine"),
        ("No_Reply", "machine"),
        ("bounces+alice=site.example", "machine"),
        ("newsreader", "person"),
        ("alice", "person"),
    ],
)
def test_kind_by_local_part(local: str, kind: str) -> None:
    assert reading().keys(pl.Series([f"{local}@site.example"]))["kind"][0] == kind


def test_side_by_domain() -> None:
    keys = pl.Series(["a@own.example", "a@mail.own.example", "a@notown.example", "a@own.example.test"])
    sides = reading(internal=["Own.example"]).keys(keys)["side"]
    assert sides.to_list() == ["internal", "internal", "external", "external"]
    assert reading().keys(keys)["side"].to_list() == ["unknown"] * 4


READINGS = [
    reading(plus_tags=plus_tags, dots=dots, internal=["site.example"])
    for plus_tags, dots in (([], []), (["*"], []), ([], ["*"]), (["*"], ["*"]))
]
ANY_TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=40)
PIECES = st.lists(
    st.sampled_from([*'@.<>"():;,+ \\[]-_aZé\u0130\u212a\u1e9eß日\u0301', "site.example", "xn--", "\r\n"]), max_size=14
)
LIKE_ADDRESSES = st.builds("{}@{}".format, PIECES.map("".join), PIECES.map("".join))


@settings(max_examples=400, deadline=None)
@given(st.lists(ANY_TEXT | PIECES.map("".join) | LIKE_ADDRESSES, min_size=1, max_size=8, unique=True))
@example(["a.+b@site.example", "a..+@x", "Σ@x.test", "ΑΣ@x.test", "A.\u0300@x"])
@example(["@" * 30, "(" * 2000, '"' * 51, "<" * 99, "a@" + "b." * 200 + "c"])
def test_any_text_is_a_key_that_stays_or_is_refused(texts: list[str]) -> None:
    for asked in READINGS:
        keys = asked.keys(pl.Series(texts, dtype=pl.String))
        assert keys.height == len(texts)
        known = keys.filter(pl.col("key").is_not_null())
        assert (known["fault"].is_null()).all()
        once_more = asked.keys(known["key"])
        assert once_more["key"].to_list() == known["key"].to_list()
        assert once_more["kind"].to_list() == known["kind"].to_list()
        for fault in keys.filter(pl.col("key").is_null())["fault"]:
            assert fault in (None, "is not an address")


# ------------------------------------------------------------------------------------------------------- truth


def rows_of(folder: Path, log: EmailLog) -> pl.DataFrame:
    written = pl.read_parquet(folder, hive_partitioning=False)
    named = written.select(pl.col(theirs).alias(ours) for ours, theirs in log.columns if theirs)
    return named.with_columns(pl.col("time").dt.replace_time_zone(None))


@pytest.fixture(scope="module", params=list(LAYOUTS))
def made(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> tuple[EmailLog, pl.DataFrame, Truth]:
    folder = tmp_path_factory.mktemp(request.param) / "email"
    truth = make_log(folder, LAST, days=7, people=200, layout=request.param)
    raw = tomllib.loads(config(request.param))["log"]
    raw["rules"]["aliases"] = str(folder.parent / "aliases.csv")
    log = EmailLog.model_validate(raw)
    return log, rows_of(folder, log), truth


def cuts(rows: pl.DataFrame, parts: int) -> list[pl.DataFrame]:
    """Parts of unlike sizes, which separate what belongs together."""
    places = np.linspace(0, 1, parts + 1) ** 1.7 * rows.height
    return [rows.slice(a, b - a) for a, b in pairwise(int(place) for place in places)]


@pytest.mark.parametrize("parts", [1, 5])
def test_what_was_planted_is_what_is_counted(made: tuple[EmailLog, pl.DataFrame, Truth], parts: int) -> None:
    log, rows, truth = made
    told = tell(EmailReading.open(log), *cuts(rows, parts))
    assert told.counts == truth.counts
    assert sum(sum(reasons.values()) for reasons in told.counts.values()) == truth.contacts
    gazette = truth.counts["filtered"]["bulk sender by behaviour"]
    expected = truth.ties.filter(pl.col("sender") != "gazette@lanternworks.example")
    assert told.ties.select("sender", "receiver", "contacts").rows() == expected.drop("share").rows()
    assert told.used.height - gazette == expected["contacts"].sum()
    kinds = dict(told.parties.select(pl.col("party").cast(pl.String), pl.col("kind").cast(pl.String)).iter_rows())
    assert {party: kinds[party] for party in truth.kinds} == truth.kinds
    assert {kind for party, kind in kinds.items() if party not in truth.kinds} == {"person"}


@pytest.mark.parametrize("parts", [1, 5])
def test_shares_of_a_message_add_up_exactly(made: tuple[EmailLog, pl.DataFrame, Truth], parts: int) -> None:
    log, rows, truth = made
    shared = log.model_copy(update={"rules": log.rules.model_copy(update={"worth": "share"})})
    told = tell(EmailReading.open(shared), *cuts(rows, parts))
    assert told.counts == truth.counts
    sums = told.used.group_by(sender="sender_key", receiver="receiver_key").agg(pl.col("amount").sum())
    both = truth.ties.join(sums, on=["sender", "receiver"], how="inner")
    assert both.height > 1000
    assert [Decimal(nano).scaleb(-9) for nano in both["share"]] == both["amount"].to_list()


def test_truth_is_exact_at_every_length_and_size(tmp_path: Path) -> None:
    for days, people, seed in ((1, 160, 2), (2, 163, 3), (4, 300, 4)):
        folder = tmp_path / f"{days}-{people}" / "email"
        truth = make_log(folder, LAST, days=days, people=people, seed=seed)
        log = EmailLog.model_validate(tomllib.loads(CONFIG)["log"] | {"path": "log"})
        log = log.model_copy(
            update={"rules": log.rules.model_copy(update={"aliases": str(folder.parent / "aliases.csv")})}
        )
        rows = rows_of(folder, log)
        assert rows.height == truth.rows
        assert tell(EmailReading.open(log), rows).counts == truth.counts


def test_a_day_of_the_log_is_drawn_from_the_seed_alone(tmp_path: Path) -> None:
    logs = [make_log(tmp_path / name / "email", LAST, days=2, people=160, seed=9) for name in ("one", "two")]
    assert logs[0].counts == logs[1].counts
    one, two = (pl.read_parquet(tmp_path / name / "email") for name in ("one", "two"))
    assert one.equals(two)
    with pytest.raises(StoreError, match="holds other days"):
        make_log(tmp_path / "one" / "email", LAST + timedelta(days=9), days=2, people=160)
    with pytest.raises(ValueError, match="people=159"):
        make_log(tmp_path / "few", LAST, people=159)


def test_the_desks_between_departments_lead(made: tuple[EmailLog, pl.DataFrame, Truth]) -> None:
    log, rows, truth = made
    told = tell(EmailReading.open(log), rows)
    graph = igraph.Graph.TupleList(told.ties.select("sender", "receiver").rows(), directed=True)
    names = np.array(graph.vs["name"])
    leading = names[np.argsort(-np.array(graph.betweenness()))][: len(truth.brokers)]
    assert set(leading) == set(truth.brokers)
    busiest = names[np.argsort(-np.array(graph.degree()))][:20]
    assert not set(busiest) & set(truth.brokers)


# ---------------------------------------------------------------------------------------------------- messages


@pytest.mark.parametrize(
    ("header", "value", "reason"),
    [
        # RFC 3834, section 5: anything but "no" is automatic; parameters may follow
        ("auto_submitted", "auto-generated", "automatic mail"),
        ("auto_submitted", "Auto-Replied; owner-token=1", "automatic mail"),
        ("auto_submitted", "no (a person)", None),
        ("auto_submitted", "", None),
        # RFC 5321, section 4.5.5: the null reverse-path of notifications
        ("return_path", "<>", "automatic mail"),
        ("return_path", "", "automatic mail"),
        ("return_path", "<a@site.example>", None),
        ("return_path", None, None),
        # RFC 2919, section 8; RFC 2369, section 3.2
        ("list_id", "List Header Mailing List <list-header.nisto.com>", "bulk mail"),
        ("list_unsubscribe", "<mailto:list@host.com?subject=unsubscribe>", "bulk mail"),
        ("list_id", " ", None),
        ("precedence", "Bulk", "bulk mail"),
        ("precedence", "first-class", None),
    ],
)
def test_what_headers_tell(header: str, value: str | None, reason: str | None) -> None:
    rows = messages(
        {"sender": "a@x.test", "recipients": ["b@x.test"], header: value},
        {"sender": "c@x.test", "recipients": ["b@x.test"], header: "no" if header == "auto_submitted" else None},
    )
    columns = LISTED | {header: header}
    told = tell(reading(columns), rows)
    assert told.counts.get("filtered", {}) == ({reason: 1} if reason else {})
    named = {"bulk mail": "bulk sender", "automatic mail": "machine", None: "person"}[reason]
    assert kind_of(told, "a@x.test") == ("person" if (value or "").startswith("Auto-Replied") else named)
    kept = tell(reading(columns, bulk="keep", automatic="keep"), rows)
    assert kept.counts == {"used": {"used": 2}}


def test_a_flag_may_stand_for_a_header() -> None:
    rows = messages({"sender": "a@x.test", "recipients": ["b@x.test"]}).with_columns(list_id=pl.lit(True))
    assert tell(reading(LISTED | {"list_id": "list_id"}), rows).counts["filtered"] == {"bulk mail": 1}
    assert tell(reading(LISTED | {"list_id": "list_id"}), rows.with_columns(list_id=pl.lit(False))).counts["used"]


def test_who_also_writes_as_a_person_is_one() -> None:
    """Whatever the parts: the list's post alone in one part must not name its author for good."""
    post = messages({"sender": "a@x.test", "recipients": ["b@x.test"], "list_id": "<l.x.test>"})
    own = messages({"sender": "a@x.test", "recipients": ["b@x.test"], "list_id": None})
    asked = reading(LISTED | {"list_id": "list_id"})
    assert kind_of(tell(asked, post, own), "a@x.test") == "person"
    assert kind_of(tell(asked, post), "a@x.test") == "bulk sender"


def test_machines_by_name_and_mail_to_them() -> None:
    rows = messages(
        {"sender": "no-reply@x.test", "recipients": ["b@x.test", "no-reply@x.test"]},
        {"sender": "b@x.test", "recipients": ["NoReply@x.test", "c@x.test"]},
    )
    assert tell(reading(), rows).counts == {
        "filtered": {"automatic mail": 2, "sent to a machine": 1},
        "used": {"used": 1},
    }
    assert tell(reading(machines=[]), rows).counts == {"filtered": {"self-contact": 1}, "used": {"used": 3}}


@pytest.mark.parametrize(
    ("contacts", "left_out"),
    [
        ("all", {}),
        ("one internal", {"between outsiders": 1}),
        ("both internal", {"between outsiders": 1, "outside mail": 2}),
    ],
)
def test_which_sides_must_be_internal(contacts: str, left_out: dict[str, int]) -> None:
    rows = messages(
        {"sender": "a@own.test", "recipients": ["b@sub.own.test", "c@x.test"]},
        {"sender": "c@x.test", "recipients": ["a@own.test", "d@x.test", "c@x.test"]},
    )
    told = tell(reading(internal=["own.test"], contacts=contacts), rows)
    assert told.counts.get("filtered", {}) == {"self-contact": 1} | left_out
    assert told.counts["used"]["used"] == 4 - sum(left_out.values())


def test_a_message_counts_once_however_often_it_comes() -> None:
    same = {"sender": "A <a@x.test>", "recipients": ["b@x.test", "c@x.test"], "message_id": "<1@mx>"}
    other_server = {
        "sender": "a@X.test",
        "recipients": ["B@x.test"],
        "message_id": "1@mx",
        "time": datetime(2026, 11, 29),
    }
    forged = {"sender": "z@x.test", "recipients": ["b@x.test"], "message_id": "<1@mx>"}
    rows = messages(same, other_server, forged)
    told = tell(reading(LISTED | {"message_id": "message_id"}), rows[:1], rows[1:])
    assert told.counts == {"duplicate": {"same message and receiver again": 1}, "used": {"used": 3}}


def test_without_message_id_its_content_tells_it_apart() -> None:
    one = {"sender": "a@x.test", "recipients": ["b@x.test"], "size": 7, "message_id": " "}
    rows = messages(
        one, one, one | {"size": 8}, one | {"time": NOON + timedelta(seconds=1)}, one | {"message_id": "<2>"}
    )
    columns = LISTED | {"message_id": "message_id"}
    assert tell(reading(columns), rows.drop("size")).counts["duplicate"] == {"same message and receiver again": 2}
    assert tell(reading(columns | {"size": "size"}), rows).counts["duplicate"] == {"same message and receiver again": 1}
    assert tell(reading(columns, content_hash=False), rows).counts == {"used": {"used": 5}}


@pytest.mark.parametrize("layout", ["list", "rows"])
def test_a_message_to_too_many_is_left_out_whole(layout: str) -> None:
    fits = {"sender": "a@x.test", "recipients": ["a@x.test", *(f"r{at}@x.test" for at in (0, 1, 2, 2))]}
    wide = {"sender": "b@x.test", "recipients": [f"r{at}@x.test" for at in range(4)]}
    rows = messages(fits | {"message_id": "1"}, wide | {"message_id": "2"})
    columns = LISTED | {"message_id": "message_id"}
    if layout == "rows":
        columns = {"receiver": "receiver", "message_id": "message_id"}
        rows = rows.explode("recipients").rename({"recipients": "receiver"})
    parts = [rows[at : at + 1] for at in range(rows.height)]
    told = tell(reading(columns, recipient_cap=3, worth="share"), *parts)
    assert told.counts == {
        "duplicate": {"same message and receiver again": 1},
        "filtered": {"more than 3 recipients": 4, "self-contact": 1},
        "used": {"used": 3},
    }
    assert told.used["amount"].unique().to_list() == [Decimal("0.333333333")]
    assert tell(reading(columns, recipient_cap=0), *parts).counts["used"]["used"] == 7


def test_only_the_columns_that_count_name_recipients() -> None:
    rows = messages({"sender": "a@x.test", "to": ["b@x.test"], "cc": "C <c@x.test>, d@x.test", "bcc": None})
    columns = {"to": "to", "cc": "cc", "bcc": "bcc"}
    assert {r for _, r in arcs(tell(reading(columns), rows))} == {"b@x.test", "c@x.test", "d@x.test"}
    assert {r for _, r in arcs(tell(reading(columns, count=["to"]), rows))} == {"b@x.test"}
    assert tell(reading(columns, count=["bcc"]), rows).counts["filtered"] == {"receiver is undisclosed": 1}


def test_bulk_senders_by_behaviour() -> None:
    def log(answers: int, receivers: int = 100) -> pl.DataFrame:
        sent = [{"sender": "a@x.test", "recipients": [f"r{at}@x.test"]} for at in range(receivers)]
        back = [{"sender": f"r{at}@x.test", "recipients": ["a@x.test"]} for at in range(answers)]
        return messages(*sent, *back, {"sender": "r1@x.test", "recipients": ["r2@x.test"]})

    told = tell(reading(), log(2))
    assert told.counts == {"filtered": {"bulk sender by behaviour": 102}, "used": {"used": 1}}
    assert kind_of(told, "a@x.test") == "bulk sender"
    assert arcs(told) == {("r1@x.test", "r2@x.test")}
    for spared in (log(3), log(0, 99)):
        assert kind_of(tell(reading(), spared), "a@x.test") == "person"
        assert "filtered" not in tell(reading(), spared).counts
    kept = tell(reading(bulk_behaviour="keep"), log(2))
    assert kept.counts == {"used": {"used": 103}}
    assert kind_of(kept, "a@x.test") == "bulk sender"
    assert kind_of(tell(reading(bulk_receivers=0), log(2)), "a@x.test") == "person"


# ----------------------------------------------------------------------------------------------------- aliases


def table(folder: Path, *lines: str) -> str:
    path = folder / "aliases.csv"
    path.write_text("\n".join(["address,person,from,to", *lines]) + "\n", encoding="utf-8")
    return str(path)


def test_an_address_belongs_to_whoever_has_it_that_day(tmp_path: Path) -> None:
    aliases = table(
        tmp_path,
        "Duty@x.test,E-1,,2026-11-10",
        "duty@x.test,Bo <BO@x.test>,2026-11-11,2026-11-20",
        "info@x.test,E-1,,",
    )
    days = [datetime(2026, 11, day, 23, 59) for day in (10, 11, 20, 21)]
    rows = messages(*({"sender": "DUTY@x.test", "recipients": ["c@x.test"], "time": day} for day in days))
    told = tell(reading(aliases=aliases, internal=["x.test"]), rows)
    assert arcs(told) == {(party, "c@x.test") for party in ("E-1", "bo@x.test", "duty@x.test")}
    assert told.ties["contacts"].sort().to_list() == [1, 1, 2]
    assert set(told.parties["side"]) == {"internal"}
    assert kind_of(told, "E-1") == "person"
    own = messages({"sender": "info@x.test", "recipients": ["duty@x.test"], "time": days[0]})
    assert tell(reading(aliases=aliases), own).counts["filtered"] == {"self-contact": 1}
    timeless = messages({"sender": "duty@x.test", "recipients": ["info@x.test"], "time": None})
    assert tell(reading(aliases=aliases), timeless).counts["refused"] == {"time is null": 1}


@pytest.mark.parametrize(
    ("lines", "said"),
    [
        (
            ["a@x.test,E1,,2026-11-10", "b@x.test,E1,,", "A@x.test,E2,2026-11-10,"],
            "row 3 after the header: the address has",
        ),
        (["a@x.test,E1,2026-11-10,2026-11-09"], "row 1 after the header: `from` is after `to`"),
        (["b@x.test,E1,,", "nobody,E1,,"], "row 2 after the header: the address is none"),
        (["a@x.test,,,"], "row 1 after the header: column 'person'"),
        (["a@x.test,E1,soon,"], "row 1 after the header: column 'from' is not a date"),
    ],
)
def test_tables_that_contradict_themselves(tmp_path: Path, lines: list[str], said: str) -> None:
    with pytest.raises(SettingsError) as caught:
        reading(aliases=table(tmp_path, *lines))
    assert said in str(caught.value)
    assert "log.rules.aliases" in str(caught.value)
    assert "x.test" not in str(caught.value)  # a key is never told


def test_the_fingerprint_follows_rules_and_tables(tmp_path: Path) -> None:
    plain = reading().fingerprint
    assert plain == reading().fingerprint
    one = reading(aliases=table(tmp_path, "a@x.test,E1,,")).fingerprint
    two = reading(aliases=table(tmp_path, "a@x.test,E2,,")).fingerprint
    assert len({plain, one, two, reading(recipient_cap=9).fingerprint}) == 4


# ------------------------------------------------------------------------------------------- settings, anything


@pytest.mark.parametrize(
    ("columns", "rules", "said"),
    [
        ({}, {}, "none is set"),
        ({"recipients": "r", "to": "t"}, {}, "recipients, to are set"),
        ({"recipients": "r", "receiver": "t"}, {}, "recipients, receiver are set"),
        ({"cc": "r"}, {"count": ["to"]}, "none of them is a column"),
        ({"receiver": "r"}, {"contacts": "both internal"}, "log.rules.internal is empty"),
    ],
)
def test_settings_that_cannot_be_together(columns: dict[str, str], rules: dict[str, Any], said: str) -> None:
    with pytest.raises(ValidationError, match=said):
        reading(columns, **rules)


@pytest.mark.parametrize(("rule", "domain"), [("internal", "*"), ("plus_tags", "not a domain"), ("dots", "a@b.test")])
def test_domains_that_are_none(rule: str, domain: str) -> None:
    with pytest.raises(SettingsError, match=f"log.rules.{rule}, item 2: not a domain"):
        reading(**{rule: ["site.example", domain]})


MAILBOXES = st.none() | st.sampled_from(["a@x.test", "B <b@x.test>", "c@y.test", "no-reply@x.test", "", "?"])
HEADER_VALUES = st.none() | st.sampled_from(["", "<>", "no", "auto-replied", "bulk", "x"])
ROW = st.fixed_dictionaries(
    {
        "sender": MAILBOXES,
        "time": st.none() | st.sampled_from([NOON, datetime(2026, 11, 29)]),
        "recipients": st.none() | st.lists(MAILBOXES, max_size=4),
        "message_id": st.none() | st.sampled_from(["", "<1>", "<2>"]),
        "size": st.none() | st.integers(0, 2),
        **dict.fromkeys(HEADERS, HEADER_VALUES),
    }
)


@settings(max_examples=150, deadline=None)
@given(st.lists(ROW, max_size=6), st.sampled_from(["list", "rows"]), st.booleans(), st.integers(1, 3))
def test_any_mix_of_nulls_is_accounted_for(rows: list[dict[str, Any]], layout: str, untyped: bool, parts: int) -> None:
    columns = LISTED | {name: name for name in ("message_id", "size", *HEADERS)}
    types = {"recipients": pl.List(pl.String), "time": pl.Datetime("us"), "size": pl.Int64}
    frame = pl.DataFrame(rows, {name: types.get(name, pl.String) for name in ("sender", "time", *columns)})
    contacts = sum(max(len(row["recipients"] or []), 1) for row in rows)
    if layout == "rows":
        columns["receiver"] = columns.pop("recipients")
        frame = frame.explode("recipients", empty_as_null=True).rename({"recipients": "receiver"})
    if untyped:  # a column without any value has no type
        empty = [name for name in columns if frame[name].is_null().all() and name not in ("receiver", "size")]
        frame = frame.cast(dict.fromkeys(empty, pl.Null))
    rules = {"recipient_cap": 2, "worth": "share", "internal": ["x.test"], "contacts": "both internal"}
    told = tell(
        reading({k: "recipients" if k == "receiver" else v for k, v in columns.items()}, **rules), *cuts(frame, parts)
    )
    assert sum(sum(reasons.values()) for reasons in told.counts.values()) == contacts
    assert (told.used["amount"] > 0).all()
    assert told.used["amount"].sum() <= len(rows)


def test_every_rule_has_a_use() -> None:
    home = Path(inspect.getfile(EmailReading)).parent
    source = "".join(path.read_text(encoding="utf-8") for path in home.glob("email*.py"))
    assert [
        name for name in EmailRules.model_fields if f"rules.{name}" not in source and f'"{name}"' not in source
    ] == []
