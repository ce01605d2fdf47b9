"""Which ties count, and several series from one reading."""

from __future__ import annotations

import io
import json
from pathlib import Path

import polars as pl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from isthmus.errors import SettingsError
from isthmus.ingest.chosen import choose
from isthmus.settings import Ties, load_all
from nights import AS_OF, PAIRS, Site, isthmus, rows

BOTH = "[definitions.mutual.ties]\nmutual = true\n[definitions.short.window]\ndays = 2\n"
MORE = [(two, one) for one, two in PAIRS[:4]]


@pytest.fixture
def site(tmp_path: Path) -> Site:
    """Half of the pairs answer each other, on the last two days."""
    site = Site(tmp_path, '[gates]\nvolume = "off"\n' + BOTH)
    for day in (AS_OF.replace(day=3), AS_OF):
        site.write(rows(day, [*PAIRS, *MORE]), day)
    return site


def test_two_definitions_of_one_log_side_by_side(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    from isthmus.ingest import window

    read, real = [], window.read_part
    monkeypatch.setattr(window, "read_part", lambda task: read.append(task.part.name) or real(task))
    said = site.score("--json")
    assert said.code == 0, said.err
    assert len(read) == len(set(read)) == 4  # each part is read once, whoever asks
    runs = pl.read_parquet(site.warehouse / "runs" / "*" / "*" / "runs.parquet", hive_partitioning=True)
    assert sorted(runs["series"]) == ["s", "s-mutual", "s-short"]
    assert runs["definition"].n_unique() == 3
    ties = pl.read_parquet(site.warehouse / "ties" / "*" / "*" / "ties.parquet", hive_partitioning=True)
    sizes = dict(ties.group_by("series").len().iter_rows())
    assert sizes == {"s": 12, "s-mutual": 8, "s-short": 12}
    assert [run["series"] for run in json.loads(said.out)] == ["s", "s-mutual", "s-short"]
    mutual = next(run for run in json.loads(said.out) if run["series"] == "s-mutual")
    # of 4 days x 8 pairs and 2 x 4 answers: the pairs that nobody answers
    assert mutual["outcomes"]["filtered"] == {"tie one way only": 16}
    assert mutual["rows_read"] == 40 == mutual["rows_used"] + mutual["rows_filtered"]


def test_each_series_equals_its_own_settings_alone(site: Site, tmp_path: Path) -> None:
    assert site.score().code == 0
    alone = Site(tmp_path / "alone", '[gates]\nvolume = "off"\n[ties]\nmutual = true\n')
    for day in (AS_OF.replace(day=3), AS_OF):
        alone.write(rows(day, [*PAIRS, *MORE]), day)
    assert alone.score().code == 0
    for table in ("scores", "ties"):
        one = pl.read_parquet(site.warehouse / table / "series=s-mutual" / "*" / f"{table}.parquet").drop("run_id")
        assert one.equals(alone.table(table).drop("run_id"))


def test_all_commands_speak_of_every_series(site: Site) -> None:
    assert isthmus("check", site.config, "--as-of", AS_OF).err.count("Nothing was written") == 3
    assert isthmus("backfill", site.config, "--from", AS_OF, "--to", AS_OF).code == 0
    said = isthmus("history", site.config)
    for name in ("s", "s-mutual", "s-short"):
        assert f"Series {name}, " in said.err


def test_a_party_is_forgotten_in_every_series(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    assert site.score().code == 0
    monkeypatch.setattr("sys.stdin", io.StringIO("ada@k1\n"))
    said = isthmus("forget", site.config, "--party")
    assert said.code == 0, said.err
    scores = pl.read_parquet(site.warehouse / "scores" / "*" / "*" / "scores.parquet", hive_partitioning=True)
    assert "ada@k1" not in set(scores["party"])
    assert scores["series"].n_unique() == 3


def test_one_series_that_fails_does_not_keep_the_others(site: Site) -> None:
    text = site.config.read_text()
    site.config.write_text(text.replace("mutual = true", "mutual = true\nleast_contacts = 99"))
    said = site.score()
    assert said.code == 65
    assert "series s-mutual: no tie of the window counts" in said.err
    runs = pl.read_parquet(site.warehouse / "runs" / "*" / "*" / "runs.parquet", hive_partitioning=True)
    assert sorted(runs["series"]) == ["s", "s-short"]


@pytest.mark.parametrize(
    ("told", "words"),
    [
        ("[definitions.x.log]\npath = 'y'", "definitions.x.log: a definition may differ in window, ties"),
        ("[definitions.x.ties]\nmutal = true", "definitions.x: ties.mutal = true: unknown key; did you mean mutual?"),
        ("[definitions.'X Y'.ties]\nmutual = true", "definitions.X Y: series"),
    ],
)
def test_wrong_definitions_are_told(site: Site, told: str, words: str) -> None:
    site.config.write_text(site.config.read_text().replace(BOTH, told))
    with pytest.raises(SettingsError) as error:
        load_all(site.config)
    assert words in str(error.value)


PARTY = st.sampled_from("abcde")
TIE = st.tuples(PARTY, PARTY, st.integers(1, 4), st.integers(1, 3)).filter(lambda tie: tie[0] != tie[1])


@given(
    st.lists(TIE, unique_by=lambda tie: tie[:2]),
    st.builds(Ties, least_contacts=st.integers(1, 4), least_days=st.integers(1, 3), mutual=st.booleans()),
)
def test_choosing_equals_its_words(told: list[tuple[str, str, int, int]], rules: Ties) -> None:
    ties = pl.DataFrame(
        told,
        schema=["sender", "receiver", "contacts", "days"],
        orient="row",
        schema_overrides={"sender": pl.String, "receiver": pl.String, "contacts": pl.Int64, "days": pl.Int64},
    )
    strong = {tie[:2] for tie in told if tie[2] >= rules.least_contacts and tie[3] >= rules.least_days}
    kept = {pair for pair in strong if not rules.mutual or pair[::-1] in strong}
    found, left_out = choose(ties, rules)
    assert set(found.select("sender", "receiver").iter_rows()) == kept
    assert found["contacts"].sum() + sum(left_out.values()) == sum(tie[2] for tie in told)
