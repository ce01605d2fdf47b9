"""The demo of each kind, and the invented log of kind "plain" against the files that it wrote."""

from __future__ import annotations

import json
import re
import subprocess
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import igraph
import numpy as np
import polars as pl
import pytest

from isthmus.errors import StoreError
from isthmus.inventions import LAST_DAY, Planted, invention
from isthmus.inventions.plain import CONFIG, Truth, make_log
from isthmus.settings import load
from isthmus.settings.kinds import KINDS
from nights import Said, isthmus

SMALL = {"rows": 80_000, "people": 6_000}


# --- the demo of each kind, as it stands ---------------------------------------------------------------------------


@dataclass(frozen=True)
class Shown:
    kind: str
    folder: Path
    said: Said
    truth: Planted


@pytest.fixture(scope="module", params=KINDS)
def shown(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Shown:
    """A folder that a shell must quote."""
    kind, folder = request.param, tmp_path_factory.mktemp("it's a demo ")
    log, truths = invention(kind), []
    with pytest.MonkeyPatch.context() as patch:
        make = log.make_log
        patch.setattr(log, "make_log", lambda *told: truths.append(make(*told)) or truths[0])
        said = isthmus("demo", folder, "--kind", kind, "--json")
    return Shown(kind, folder, said, *truths)


def test_each_demo_publishes_with_the_default_gates_and_counts_what_was_planted(shown: Shown) -> None:
    assert shown.said.code == 0, shown.said.err
    run = json.loads(shown.said.out)
    assert {gate["state"] for gate in run["gates"]} <= {"ok", "nothing to compare with"}
    assert not run["warnings"]
    told = {outcome: reasons for outcome, reasons in run["outcomes"].items() if reasons}
    assert told == shown.truth.counts
    assert run["rows_used"] == told["used"]["used"] > 0.3 * run["rows_read"]
    assert run["rows_read"] == sum(sum(reasons.values()) for reasons in told.values())


def test_each_demo_shows_its_brokers_first(shown: Shown) -> None:
    brokers = len(shown.truth.brokers)
    first = set(asked(shown)["party"][:10])
    assert set(shown.truth.brokers) <= first
    assert f"Planted: {brokers} parties that join the others; {brokers} of them are among the first 10." in (
        shown.said.err
    )
    for reason in (reason for reasons in shown.truth.counts.values() for reason in reasons if reason != "used"):
        assert reason in shown.said.err


def test_each_demo_ends_in_a_query_that_works_when_pasted(shown: Shown) -> None:
    pasted = shown.said.err[shown.said.err.index("paste this") :].split("\n\n")[1]
    ran = subprocess.run(["bash", "-c", pasted], capture_output=True, text=True)
    assert ran.returncode == 0, ran.stderr
    assert asked(shown)["party"][0][:12] in ran.stdout  # DuckDB shortens what a terminal has no room for


def test_each_demo_runs_again_by_its_settings(shown: Shown) -> None:
    again = re.search(r"^Run the night again: \S+ (score .+)$", shown.said.err, re.MULTILINE)
    assert again is not None
    said = isthmus("score", shown.folder / f"{shown.kind}.toml", "--as-of", LAST_DAY, "--json")
    assert str(LAST_DAY) in again[1]
    assert said.code == 0, said.err
    assert json.loads(said.out)["run_id"] == json.loads(shown.said.out)["run_id"]


def asked(shown: Shown) -> pl.DataFrame:
    return pl.read_parquet(shown.folder / "warehouse" / "scores" / "*" / "*" / "scores.parquet").sort("rank")


def test_demos_of_several_kinds_share_a_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sizes = {"plain": {"rows": 4_000, "people": 600}, "payments": {"people": 600}}
    for kind, size in sizes.items():
        log = invention(kind)
        make = log.make_log
        monkeypatch.setattr(log, "make_log", lambda *told, make=make, size=size: make(*told, days=28, **size))
        monkeypatch.setattr(log, "CONFIG", log.CONFIG + '\n[gates]\nrefused = "off"\nnulls = "off"\n')
    for kind in [*sizes, "plain"]:
        said = isthmus("demo", tmp_path, "--kind", kind)
        assert said.code == 0, said.err
    scores = pl.read_parquet(tmp_path / "warehouse" / "scores", hive_partitioning=True, glob=True)
    assert scores["series"].unique().sort().to_list() == ["ombriel", "ombriel-payments"]


def test_the_first_demo_is_the_plain_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(
        invention("plain"), "make_log", lambda folder, last: make_log(folder, last, 28, 600, rows=4_000)
    )
    said = isthmus("demo", tmp_path, "--json")
    assert said.code == 0, said.err
    assert json.loads(said.out)["series"] == "ombriel"


# --- the log of kind "plain" ---------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Truth]:
    folder = tmp_path_factory.mktemp("invented") / "plain"
    return folder, make_log(folder, LAST_DAY, **SMALL)


def read(folder: Path) -> pl.DataFrame:
    """Every row, with the day of the file that it lies in."""
    return pl.read_parquet(folder, hive_schema={"dt": pl.Date})


def sound(log: pl.DataFrame) -> pl.DataFrame:
    payer, payee, amount = pl.col("payer_account"), pl.col("payee_account"), pl.col("amount")
    return log.filter(
        payer.str.len_bytes() > 0,
        payee.str.len_bytes() > 0,
        payer != payee,
        amount.is_finite(),
        amount >= 0,
        pl.col("booked_at").dt.year() == 2026,
    ).unique("payment_id")


def test_truth_equals_a_recount(made: tuple[Path, Truth]) -> None:
    folder, truth = made
    log = read(folder)
    day = pl.col("booked_at").dt.date()
    recount = log.select(
        rows=pl.len(),
        null_payer=pl.col("payer_account").is_null().sum(),
        null_payee=pl.col("payee_account").is_null().sum(),
        empty_payer=(pl.col("payer_account") == "").sum(),
        empty_payee=(pl.col("payee_account") == "").sum(),
        null_time=pl.col("booked_at").is_null().sum(),
        odd_time=day.dt.year().is_in([102, 9999]).sum(),
        negative_amount=(pl.col("amount") < 0).sum(),
        nan_amount=pl.col("amount").is_nan().sum(),
        self_payment=(pl.col("payer_account") == pl.col("payee_account")).sum(),
        repeated=pl.len() - pl.col("payment_id").n_unique(),
        stray=((day == pl.col("dt") - pl.duration(days=1)) & pl.col("payment_id").is_unique()).sum(),
    ).row(0, named=True)
    assert recount == {kind: getattr(truth, kind) for kind in recount}
    assert min(recount.values()) > 0
    clean = sound(log)
    assert clean.height == truth.used
    assert clean.select("payer_account", "payee_account").n_unique() == truth.ties
    assert truth.rows == SMALL["rows"]
    assert truth.rows - truth.used + truth.stray < 0.01 * truth.rows


def test_a_row_delivered_twice_is_the_same_row(made: tuple[Path, Truth]) -> None:
    log = read(made[0])
    twice = log.filter(pl.col("payment_id").is_duplicated())
    assert twice.drop("dt").n_unique() == twice["payment_id"].n_unique() == made[1].repeated
    spread = twice.group_by("payment_id").agg((pl.col("dt").max() - pl.col("dt").min()).alias("apart"))["apart"]
    assert set(spread) == {timedelta(0), timedelta(days=1)}


def test_brokers_lead_and_hubs_do_not(made: tuple[Path, Truth]) -> None:
    folder, truth = made
    ties = sound(read(folder)).select("payer_account", "payee_account").unique(maintain_order=True)
    graph = igraph.Graph.TupleList(ties.rows(), directed=True)
    names = np.array(graph.vs["name"])
    by_betweenness = list(names[np.argsort(-np.array(graph.betweenness()))])
    degree = np.array(graph.as_undirected(mode="collapse").degree())
    by_degree = list(names[np.argsort(-degree)])
    assert set(truth.brokers) <= set(by_betweenness[:10])
    assert not set(truth.brokers) & set(by_degree[:100])
    assert set(truth.hubs) <= set(by_degree[:25])
    assert not set(truth.hubs) & set(by_betweenness[:100])
    assert max(graph.connected_components(mode="weak").sizes()) > 0.99 * len(names)


def test_counterparts_are_skewed_and_pairs_pay_again(made: tuple[Path, Truth]) -> None:
    folder, truth = made
    log = sound(read(folder))
    payees = log.group_by("payer_account").agg(pl.col("payee_account").n_unique().alias("payees"))["payees"]
    assert payees.max() > 20 * payees.median()
    assert 2 < truth.used / truth.ties < 6
    hours = log.group_by(pl.col("booked_at").dt.hour().alias("hour")).len().sort("hour")["len"]
    assert hours[8:18].sum() > 5 * hours[:6].sum()
    weeks = log.filter(pl.col("booked_at").dt.date() > date(2026, 11, 2))  # four whole ones
    weekdays = weeks.group_by(pl.col("booked_at").dt.weekday().alias("day")).len().sort("day")["len"]
    assert weekdays.arg_max() == 4  # Friday
    assert weekdays.arg_min() == 6  # Sunday


def test_same_seed_same_log(made: tuple[Path, Truth], tmp_path: Path) -> None:
    folder, truth = made
    assert make_log(tmp_path / "again", LAST_DAY, **SMALL) == truth
    assert read(tmp_path / "again").equals(read(folder))
    assert make_log(tmp_path / "other", LAST_DAY, **SMALL, seed=2) != truth
    assert not read(tmp_path / "other").equals(read(folder))


def test_clean_log_has_no_dirt(tmp_path: Path) -> None:
    truth = make_log(tmp_path, date(2026, 3, 2), days=7, people=600, rows=10_000, dirt=False)
    log = read(tmp_path)
    assert truth.used == truth.rows == log.height == sound(log).height
    assert log["dt"].unique().sort().to_list() == [date(2026, 2, 24) + timedelta(days=at) for at in range(7)]
    assert (log["dt"] == log["booked_at"].dt.date()).all()


def test_all_the_brokers_counterparts_show_within_a_week(tmp_path: Path) -> None:
    truth = make_log(tmp_path, LAST_DAY, days=7, people=3_000, rows=10_000, dirt=False)
    log = read(tmp_path)
    both = pl.concat(
        [
            log.select(party="payer_account", other="payee_account"),
            log.select(party="payee_account", other="payer_account"),
        ]
    )
    counterparts = both.filter(pl.col("party").is_in(truth.brokers)).group_by("party").agg(pl.col("other").n_unique())
    assert sorted(counterparts["other"]) == [12] * len(truth.brokers)


def test_the_folder_is_not_mixed_with_other_days(tmp_path: Path) -> None:
    make_log(tmp_path, LAST_DAY, days=3, people=600, rows=1_000)
    before = read(tmp_path)
    make_log(tmp_path, LAST_DAY, days=3, people=600, rows=1_000)
    assert read(tmp_path).equals(before)
    with pytest.raises(StoreError, match="holds other days"):
        make_log(tmp_path, LAST_DAY, days=2, people=600, rows=1_000)


def test_a_folder_that_cannot_be_written_is_told(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(StoreError, match="cannot write the log"):
        make_log(tmp_path / "file" / "plain", LAST_DAY, days=1, people=600, rows=1_000)


def test_progress_rises_to_one(tmp_path: Path) -> None:
    heard: list[float] = []
    make_log(tmp_path, LAST_DAY, days=4, people=600, rows=1_000, progress=heard.append)
    assert heard == [0.25, 0.5, 0.75, 1.0]


@pytest.mark.parametrize("wrong", [{"rows": 2_799}, {"people": 599}, {"days": 0}])
def test_too_small_a_log_is_refused(tmp_path: Path, wrong: dict[str, int]) -> None:
    with pytest.raises(ValueError, match="at least"):
        make_log(tmp_path, LAST_DAY, **wrong)
    assert not list(tmp_path.iterdir())


def test_the_settings_fit_the_log(made: tuple[Path, Truth], tmp_path: Path) -> None:
    path = tmp_path / "ombriel.toml"
    path.write_text(CONFIG)
    settings = load(path)
    columns = settings.log.columns
    named = [columns.id, columns.sender, columns.receiver, columns.time, columns.amount]
    assert read(made[0]).drop("dt").columns == named
    assert settings.window.days == 28
