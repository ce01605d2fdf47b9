"""Pseudonyms: no byte that a night writes holds a key of the log, and nothing else about the night changes."""

from __future__ import annotations

import hashlib
import hmac
import io
import json
import re
from collections.abc import Callable, Iterable
from datetime import date
from pathlib import Path
from types import ModuleType

import numpy as np
import polars as pl
import pytest

from isthmus.errors import SettingsError
from isthmus.inventions import calls, email, payments
from isthmus.privacy import Pseudonyms, open_pseudonyms, siphash
from isthmus.settings import Privacy, load
from nights import BETWEEN, DAYS, PARTIES, Said, Site, isthmus, noon

KINDS: dict[str, ModuleType] = {"email": email, "calls": calls, "payments": payments}
# so that parties of several kinds are published, and what a name tells is asked for after the pseudonyms are there
RULES = {
    "email": 'automatic = "keep"\nbulk_behaviour = "keep"\n',
    "calls": 'short_codes = "keep"\nmachines = "keep"\n',
    "payments": 'hubs = "label"\nmerge_owners = true\n',
}
LAST, FEW_DAYS, PEOPLE = date(2026, 11, 30), 5, 1000
SECRET, OTHER = "correct-horse-battery-staple-9", "another-secret-of-some-length"
PRIVACY = '[privacy]\npseudonyms = true\npurpose = "teams"\nsecret_env = "ISTHMUS_TEST_SECRET"\n'


@pytest.fixture(autouse=True)
def secret(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", SECRET)


def opened(kind: str = "plain", purpose: str = "teams") -> Pseudonyms:
    found = open_pseudonyms(Privacy(pseudonyms=True, purpose=purpose, secret_env="ISTHMUS_TEST_SECRET"), kind)
    assert found is not None
    return found


def one(key: str, **how: str) -> str:
    return str(opened(**how).of(pl.Series([key])).item())


def written(root: Path, log: Path) -> dict[str, str]:
    """Every file below the root but the log: its bytes, and its values where it is a table; in small letters."""
    found = {}
    for path in root.rglob("*"):
        if not path.is_file() or path.is_relative_to(log) or path.suffix in (".toml", ".csv"):
            continue
        data = path.read_bytes()
        read: Callable[[io.BytesIO], pl.DataFrame] | None = {b"PAR1": pl.read_parquet, b"ARRO": pl.read_ipc}.get(
            data[:4]
        )
        values = str(read(io.BytesIO(data)).rows()) if read else ""
        found[str(path)] = (str(path) + data.decode("latin-1") + data.decode("utf-8", "replace") + values).lower()
    return found


def held_in(texts: dict[str, str], keys: Iterable[str]) -> list[tuple[str, str]]:
    """(file, key), by pieces of the size of the shortest key, so that many keys are looked for at once."""
    keys = [key.lower() for key in keys]
    shortest = min(map(len, keys))
    heads: dict[str, list[str]] = {}
    for key in keys:
        heads.setdefault(key[:shortest], []).append(key)
    found = []
    for name, text in texts.items():
        pieces = {text[at : at + shortest] for at in range(len(text))} & heads.keys()
        found += [(name, key) for piece in pieces for key in heads[piece] if key in text]
    return found


def raw_keys(log: Path) -> set[str]:
    """What stands in the text columns of a log, as written, as far as it is long enough to mean somebody."""
    frame = pl.read_parquet(log / "**" / "*.parquet", hive_partitioning=False)
    sides = [name for name in frame.columns if re.search("sender|receiver|from|to|number|account|party|cc", name)]
    texts: set[str] = set()
    for name in sides:
        column = frame[name].explode() if frame[name].dtype.is_nested() else frame[name]
        if column.dtype == pl.String:
            texts |= {text for text in column.drop_nulls().unique() if len(text) >= 8}
    return texts


def table(folder: Path, name: str) -> pl.DataFrame:
    return pl.read_parquet(folder / name / "*" / "*" / f"{name}.parquet")


# ---- what a pseudonym is


def test_pseudonyms_are_hmac_sha256_of_purpose_kind_and_key() -> None:
    by_hand = hmac.new(SECRET.encode(), b'["teams", "plain"]ada', hashlib.sha256).hexdigest()[:32]
    assert one("ada") == by_hand
    assert one("ada") == one("ada")


def test_purpose_secret_and_kind_give_unrelated_pseudonyms(monkeypatch: pytest.MonkeyPatch) -> None:
    told = {one("ada"), one("ada", purpose="fraud"), one("ada", kind="email")}
    ids = {opened().key_id, opened(purpose="fraud").key_id}
    assert len(told) == 3
    assert len(ids) == 1  # of the secret alone
    assert len({opened().check, opened(purpose="fraud").check, opened(kind="email").check}) == 3
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", OTHER)
    assert one("ada") not in told
    assert opened().key_id not in ids


def test_siphash_is_the_published_one() -> None:
    """SipHash-2-4's reference vectors (Aumasson and Bernstein), key 00..0f, the message of 8 bytes 00..07."""
    key, word = np.frombuffer(bytes(range(16)), "<u8"), np.frombuffer(bytes(range(8)), "<u8")
    assert siphash(key, word).tobytes().hex() == "6224939a79f5f593"


def test_marks_keep_equality_and_nulls() -> None:
    marks = pl.Series("a", [7, None, 7, 8, 2**64 - 1], dtype=pl.UInt64)
    keyed = opened().marked(marks)
    assert keyed.is_null().to_list() == [False, True, False, False, False]
    assert keyed[0] == keyed[2] != keyed[3]
    assert not set(keyed.drop_nulls()) & set(marks.drop_nulls())
    assert opened(purpose="fraud").marked(marks)[0] != keyed[0]
    assert opened().marked(marks.clear()).is_empty()


# ---- the secret


@pytest.mark.parametrize("text", ["", "short-secret-15"])
def test_a_missing_or_short_secret_is_refused_unquoted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, text: str
) -> None:
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", text)
    site = Site(tmp_path, PRIVACY)
    for said in (site.score(), site.check()):
        assert said.code == 78
        assert "secret" in said.err
        assert not text or text not in said.err + said.out


def test_a_secret_by_file_is_the_same_secret(tmp_path: Path) -> None:
    (tmp_path / "key").write_text(SECRET + "\n")
    site = Site(tmp_path, PRIVACY.replace('secret_env = "ISTHMUS_TEST_SECRET"', 'secret_file = "key"'))
    assert site.score().code == 0
    assert one(BETWEEN) in site.table("scores")["party"]
    (tmp_path / "key").unlink()
    assert site.score().code == 78


@pytest.mark.parametrize(
    "more",
    [
        'pseudonyms = true\npurpose = "p"',
        'pseudonyms = true\npurpose = "p"\nsecret_env = "A"\nsecret_file = "b"',
        'pseudonyms = true\nsecret_env = "A"',
        f'pseudonyms = true\npurpose = "p"\nsecret_env = "{SECRET}"',
    ],
)
def test_settings_that_cannot_be(tmp_path: Path, more: str) -> None:
    site = Site(tmp_path, f"[privacy]\n{more}\n", log=False)
    said = site.check()
    assert said.code == 78
    assert "privacy." in said.err
    assert SECRET not in said.err


def test_definition_tells_purpose_and_switch_and_not_where_the_secret_is(tmp_path: Path) -> None:
    def definition(more: str) -> str:
        return load(Site(tmp_path, more, log=False).config).definition

    off, on = definition(""), definition(PRIVACY)
    assert off != on
    assert definition(PRIVACY.replace("teams", "fraud")) not in (off, on)
    assert definition(PRIVACY.replace('env = "ISTHMUS_TEST_SECRET"', 'file = "key"')) == on
    assert definition('[privacy]\npurpose = "teams"\n') == off


# ---- every byte


@pytest.fixture(scope="module", params=["plain", *KINDS])
def nights(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> tuple[str, Path, Said]:
    """Kind; folder with the log, a night in clear below `clear`, one with pseudonyms below `hidden`; what that said."""
    kind = request.param
    folder = tmp_path_factory.mktemp(kind)
    if kind == "plain":
        site = Site(folder)
        config, last = site.config.read_text(), DAYS[-1]
    else:
        config = KINDS[kind].CONFIG.replace("[window]\ndays = 28\n", "") + f"\n[window]\ndays = {FEW_DAYS}\n"
        config = config.replace("[log.rules]\n", f"[log.rules]\n{RULES[kind]}")
        config += "\n[gates]\nrefused_limit = 0.5\nnulls_limit = 0.5\n"
        KINDS[kind].make_log(folder / kind, LAST, days=FEW_DAYS, people=PEOPLE)
        last = LAST
    signals = '\n[signals]\nlog = "hidden/log.jsonl"\nprometheus = "hidden/m.prom"\nopenlineage = "hidden/ol.jsonl"\n'
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("ISTHMUS_TEST_SECRET", SECRET)
        for name, more in (("clear", ""), ("hidden", PRIVACY + signals)):
            run = f'warehouse = "{name}/warehouse"\nwork = "{name}/work"\n'
            text = re.sub(r"(?m)^(warehouse|work) = .*\n", "", config)
            text = text.replace("[run]\n", f"[run]\n{run}") if "[run]" in text else f"{text}\n[run]\n{run}"
            (folder / f"{name}.toml").write_text(f"{text}\n{more}")
            said = isthmus("score", folder / f"{name}.toml", "--as-of", last, "--json")
            assert said.code == 0, said.err
    return kind, folder, said


def test_no_byte_written_holds_a_key(nights: tuple[str, Path, Said]) -> None:
    kind, folder, said = nights
    log = folder / ("log" if kind == "plain" else kind)
    clear = set(table(folder / "clear" / "warehouse", "scores")["party"])
    keys = clear | raw_keys(log)
    assert len(keys) >= len(PARTIES)
    assert held_in(written(folder / "clear", log), clear), "the search itself must find keys where they are"
    texts = written(folder / "hidden", log) | {"stdout": said.out.lower(), "stderr": said.err.lower()}
    assert any("rows.arrow" in name for name in texts) == (kind != "plain")
    assert held_in(texts, keys) == []
    assert [name for name, text in texts.items() if SECRET in text] == []


def test_ties_kinds_and_counts_are_the_same_up_to_renaming(nights: tuple[str, Path, Said]) -> None:
    kind, folder, _ = nights
    clear, hidden = (folder / name / "warehouse" for name in ("clear", "hidden"))
    made = opened(kind=kind)
    for name, sides in (("ties", ["sender", "receiver"]), ("parties", ["party"])):
        before, after = table(clear, name).drop("run_id"), table(hidden, name).drop("run_id")
        renamed = before.with_columns(made.of(before[side]).alias(side) for side in sides).sort(sides)
        assert renamed.equals(after), name
    kinds = set(table(hidden, "parties")["kind"])
    assert len(kinds) >= {"plain": 1, "email": 4, "calls": 3, "payments": 3}[kind]
    before, after = table(clear, "runs"), table(hidden, "runs")
    assert before["outcomes"].to_list() == after["outcomes"].to_list()
    assert before["key_id"].item() is None
    assert after["key_id"].item() == made.key_id


def test_the_hashes_of_rows_are_keyed(nights: tuple[str, Path, Said]) -> None:
    kind, folder, _ = nights
    if kind == "plain":
        pytest.skip("its log has no ids, so its rows are not kept")

    def marks(name: str) -> set[int]:
        frames = [pl.read_ipc(path) for path in (folder / name / "work").rglob("rows.arrow")]
        return {mark for frame in frames for column in frame.select(pl.col(pl.UInt64)) for mark in column.drop_nulls()}

    assert marks("clear")
    assert len(marks("clear")) == len(marks("hidden"))
    assert not marks("clear") & marks("hidden")


def test_what_a_name_tells_is_known_behind_a_pseudonym(tmp_path: Path) -> None:
    """A role's mailbox that sends nothing but bulk mail in some files, gets mail there, and writes itself in others."""
    role, person, other = "info@own.example", "ada@own.example", "ben@own.example"
    for day, precedence in zip(DAYS, ("bulk", "bulk", "", ""), strict=True):
        frame = pl.DataFrame(
            {
                "from": [role, person, other],
                "to": [person, other, role],
                "date": [noon(day)] * 3,
                "precedence": [precedence, precedence, ""],
            }
        )
        (tmp_path / "log").mkdir(exist_ok=True)
        frame.write_parquet(tmp_path / "log" / f"{day}.parquet")
    kinds = []
    for more in ("", PRIVACY):
        (tmp_path / "c.toml").write_text(
            'series = "s"\n[log]\nkind = "email"\npath = "log"\n[log.columns]\nreceiver = "to"\n'
            f'precedence = "precedence"\n[window]\ndays = 4\n{more}'
        )
        said = isthmus("score", tmp_path / "c.toml", "--as-of", DAYS[-1])
        assert said.code == 0, said.err
        kinds.append(dict(table(tmp_path / "warehouse", "parties").select("party", "kind").iter_rows()))
    assert kinds[0] == {role: "role", person: "person", other: "person"}
    assert kinds[1] == {one(party, kind="email"): kind for party, kind in kinds[0].items()}


# ---- nights that go wrong


@pytest.mark.parametrize("fault", ["gate", "damaged", "pages", "workers", "workers damaged"])
def test_nor_when_it_stops_or_runs_elsewhere(tmp_path: Path, fault: str) -> None:
    more = "workers = 2\n" if "workers" in fault else ""
    signals = '[signals]\nlog = "s.jsonl"\nprometheus = "m.prom"\nopenlineage = "ol.jsonl"\n'
    site = Site(tmp_path, f"{more}{PRIVACY}{signals}")
    if fault == "gate":
        site.file(DAYS[1]).unlink()
    if fault == "damaged":
        site.file(DAYS[1]).write_bytes(site.file(DAYS[1]).read_bytes()[:-200])
    if fault in ("pages", "workers damaged"):
        data = bytearray(site.file(DAYS[1]).read_bytes())
        data[4:400] = bytes(396)
        site.file(DAYS[1]).write_bytes(bytes(data))
    said = site.score("--json")
    assert said.code == (0 if fault == "workers" else 65), said.err
    history = isthmus("history", site.config, "--json")
    texts = written(tmp_path, site.log) | {
        "stdout": said.out.lower(),
        "stderr": said.err.lower(),
        "history": (history.out + history.err).lower(),
    }
    assert held_in(texts, PARTIES) == []


# ---- kept work


def test_kept_work_of_another_secret_or_none_is_not_used(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = Site(tmp_path)
    parties = []
    for more, secret_now in (
        ("", SECRET), (PRIVACY, SECRET), (PRIVACY, OTHER), (PRIVACY.replace("teams", "fraud"), OTHER), ("", OTHER),
    ):  # fmt: skip
        monkeypatch.setenv("ISTHMUS_TEST_SECRET", secret_now)
        site.settings(more)
        assert site.score().code == 0
        parties.append(frozenset(site.table("scores")["party"]))
    assert parties[0] == parties[4] == frozenset(PARTIES)
    assert len(set(parties)) == 4
    assert not frozenset.intersection(*parties[:2])
    assert all(len(one | two) == 2 * len(PARTIES) for one in parties[:4] for two in parties[:4] if one != two)


def test_a_rerun_gives_the_same_bytes(tmp_path: Path) -> None:
    site = Site(tmp_path, PRIVACY)
    assert site.score().code == 0
    before = {name: data for name, data in site.published().items() if "runs" not in name}
    assert site.score().code == 0
    assert {name: data for name, data in site.published().items() if "runs" not in name} == before
    run = json.loads((site.warehouse / "runs" / "series=s" / f"as_of={DAYS[-1]}" / "run.json").read_text())
    assert run["key_id"] == opened().key_id


def test_a_worker_with_another_secret_is_found_out(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from isthmus.ingest import rows as ingest_rows

    site = Site(tmp_path, PRIVACY)
    real = ingest_rows.open_pseudonyms

    def elsewhere(privacy: Privacy, kind: str) -> Pseudonyms | None:
        monkeypatch.setenv("ISTHMUS_TEST_SECRET", OTHER)
        return real(privacy, kind)

    monkeypatch.setattr(ingest_rows, "open_pseudonyms", elsewhere)
    said = site.score()
    assert said.code == 78
    assert "another secret" in said.err


# ---- lookup


def asked(monkeypatch: pytest.MonkeyPatch, text: str, *arguments: object) -> Said:
    monkeypatch.setattr("sys.stdin", io.StringIO(text))
    return isthmus("lookup", *arguments)


def test_lookup_both_ways(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = Site(tmp_path, PRIVACY + '[signals]\nlog = "s.jsonl"\n')
    there = asked(monkeypatch, f"  {BETWEEN} \n", site.config)
    assert (there.code, there.out, there.err) == (0, one(BETWEEN) + "\n", "")
    back = asked(monkeypatch, there.out, site.config, "--reverse", "--as-of", DAYS[-1])
    assert (back.code, back.out, back.err) == (0, BETWEEN + "\n", "")
    lines = (tmp_path / "s.jsonl").read_text()
    assert lines.count('"lookup"') == 2
    assert held_in({"log": lines, "files": str(written(tmp_path, site.log))}, [BETWEEN, one(BETWEEN)]) == []
    assert not site.work.exists()


def test_lookup_normalises_as_the_log_does_and_knows_persons_of_tables(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    pl.DataFrame({"address": ["ada@one.example"], "person": ["Ada L."], "from": [None], "to": [None]}).write_csv(
        tmp_path / "aliases.csv"
    )
    (tmp_path / "c.toml").write_text(email.CONFIG + PRIVACY)
    for written_as, keys in (
        ("Ada <ADA@One.Example>", ["Ada L.", "ada@one.example"]),
        ("Ada L.", ["Ada L."]),
        ("b@one.example", ["b@one.example"]),
    ):  # fmt: skip
        said = asked(monkeypatch, written_as, tmp_path / "c.toml")
        assert (said.code, said.out.split()) == (0, [one(key, kind="email") for key in keys]), said.err
    said = asked(monkeypatch, "nobody at all", tmp_path / "c.toml")
    assert (said.code, said.out) == (65, "")
    assert "nobody at all" not in said.err


def test_lookup_of_what_is_not_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    site = Site(tmp_path, PRIVACY)
    reverse = (site.config, "--reverse", "--as-of", DAYS[-1])
    for text, arguments, code in (
        ("", (site.config,), 64),
        ("0" * 32, reverse, 65),
        (BETWEEN, reverse, 65),
        (one(BETWEEN, purpose="fraud"), reverse, 65),
    ):
        said = asked(monkeypatch, text, *arguments)
        assert (said.code, said.out) == (code, "")
        assert not text or text not in said.err
    pseudonym = one(BETWEEN)
    monkeypatch.setenv("ISTHMUS_TEST_SECRET", OTHER)
    assert asked(monkeypatch, pseudonym, *reverse).code == 65
    site.settings("")
    assert asked(monkeypatch, BETWEEN, site.config).code == 78


def test_secrets_are_not_shown(tmp_path: Path) -> None:
    assert SECRET not in repr(opened())
    for wrong in (f'secret = "{SECRET}"', f'secret_env = ["{SECRET}"]', f'purpose = {{"{SECRET}" = 1}}'):
        site = Site(tmp_path, f"[privacy]\npseudonyms = true\n{wrong}\n")
        for command in ("score", "check", "history"):
            said = isthmus(command, site.config)
            assert said.code == 78
            assert "privacy." in said.err
            assert SECRET not in said.err + said.out


def test_nothing_in_clear_stays_after_the_switch(tmp_path: Path) -> None:
    """Nights that were published in clear, and all kept of them, once they are computed again with pseudonyms."""
    site = Site(tmp_path)
    assert site.score().code == 0
    assert held_in(written(tmp_path, site.log), PARTIES)
    site.settings(PRIVACY)
    assert isthmus("backfill", site.config, "--from", DAYS[-1], "--to", DAYS[-1]).code == 0
    assert held_in(written(tmp_path, site.log), PARTIES) == []
    with pytest.raises(SettingsError):
        open_pseudonyms(Privacy(pseudonyms=True, purpose="p", secret_env="ISTHMUS_NOT_SET"), "plain")
