"""Invented logs of each kind through the whole night: what was planted is what is counted, at every stage."""

from __future__ import annotations

import json
from datetime import date
from pathlib import Path
from types import ModuleType

import polars as pl
import pytest

from isthmus.inventions import calls, email, payments
from nights import isthmus

LAST = date(2026, 11, 30)
DAYS, PEOPLE = 14, 1000
KINDS: dict[str, ModuleType] = {"email": email, "calls": calls, "payments": payments}


@pytest.fixture(scope="module", params=KINDS)
def site(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> tuple[str, Path, object]:
    """Kind, folder with log and settings, truth; scored."""
    kind = request.param
    folder = tmp_path_factory.mktemp(kind)
    config = KINDS[kind].CONFIG.replace("[window]\ndays = 28\n", "") + f"\n[window]\ndays = {DAYS}\n"
    (folder / "isthmus.toml").write_text(config + "\n[gates]\nrefused_limit = 0.05\nnulls_limit = 0.01\n")
    truth = KINDS[kind].make_log(folder / kind, LAST, days=DAYS, people=PEOPLE)
    said = isthmus("score", folder / "isthmus.toml", "--as-of", LAST)
    assert said.code == 0, said.err
    return kind, folder, truth


def table(folder: Path, name: str) -> pl.DataFrame:
    return pl.read_parquet(folder / "warehouse" / name / "*" / "*" / f"{name}.parquet")


def counts_of(run: dict) -> dict[str, dict[str, int]]:
    return {outcome: reasons for outcome, reasons in run["outcomes"].items() if reasons}


def test_counts_are_the_planted_ones(site) -> None:
    _, folder, truth = site
    (path,) = (folder / "warehouse" / "runs").rglob("run.json")
    run = json.loads(path.read_text())
    told = counts_of(run)
    told["filtered"].pop("outside the window", None)
    assert told == truth.counts
    assert run["rows_read"] == sum(sum(reasons.values()) for reasons in run["outcomes"].values())
    row = table(folder, "runs").row(0, named=True)
    assert sum(each["rows"] for each in row["outcomes"]) == row["rows_read"]
    assert {each["reason"] for each in row["outcomes"]} == {r for reasons in run["outcomes"].values() for r in reasons}


def test_check_tells_the_same_counts_in_one_screen(site) -> None:
    _, folder, truth = site
    said = isthmus("check", folder / "isthmus.toml", "--as-of", LAST, "--json")
    assert said.code == 0, said.err
    told = counts_of(json.loads(said.out))
    told["filtered"].pop("outside the window", None)
    assert told == truth.counts
    assert len(said.err.splitlines()) <= 60
    for reasons in truth.counts.values():
        for reason in reasons.keys() - {"used"}:
            assert reason in said.err


def test_brokers_come_out_first_and_kinds_are_told(site) -> None:
    _, folder, truth = site
    parties = table(folder, "parties")
    scores = table(folder, "scores")
    assert sorted(parties["party"]) == sorted(scores["party"])
    assert len(set(scores["party"][:12]) & set(truth.brokers)) >= 5
    known = dict(parties.select("party", "kind").iter_rows())
    for party, kind in truth.kinds.items():
        assert known.get(party, kind) == kind


def test_cut_in_other_parts_and_on_workers_the_same(site, monkeypatch: pytest.MonkeyPatch) -> None:
    from isthmus.ingest import files

    _, folder, _ = site
    before = table(folder, "ties").drop("run_id")
    monkeypatch.setattr(files, "ROWS_PER_PART", 1)
    text = (folder / "isthmus.toml").read_text()
    other = folder / "other.toml"
    other.write_text(
        text.replace('warehouse = "warehouse"', 'warehouse = "wh2"').replace(
            'work = "work"', 'work = "work2"\nworkers = 2'
        )
    )
    assert isthmus("score", other, "--as-of", LAST).code == 0
    after = pl.read_parquet(folder / "wh2" / "ties" / "*" / "*" / "ties.parquet").drop("run_id")
    assert after.equals(before)
