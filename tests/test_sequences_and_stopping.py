"""Intervals, betting sequences and stopping rules: by formula, on statistics made up for the purpose.

Also run without the compiler: test_kernels_uncompiled.py. That the intervals hold: test_coverage_numba.py.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom

import oracles
from isthmus.betweenness.engine_numba import kernels_bets
from isthmus.betweenness.engine_numba.accelerate import COMPILED
from isthmus.betweenness.engine_numba.intervals import (
    Bounds,
    clopper_pearson,
    path_bounds,
)
from isthmus.betweenness.engine_numba.sequences import (
    FALLS,
    GRID,
    RISES,
    STEEPEST,
    Bets,
    PivotEvidence,
    Scale,
    draw_order,
    spread,
)
from isthmus.betweenness.engine_numba.stopping import (
    Look,
    Rules,
    Verdict,
    every_block,
    planned_looks,
    top_settled,
    watch,
)

SHARES = st.lists(st.floats(0, 1), min_size=1, max_size=12)


class Narrowing:
    """Three parties whose intervals shrink as 1 / samples."""

    def __init__(self, size: int = 100) -> None:
        self.taken, self.size = 0, size
        self.shares: list[float] = []

    def bounds(self, share: float) -> Bounds:
        self.shares.append(share)
        middle = np.array([0.5, 0.4, 0.1])
        half = 20 / self.taken
        return Bounds(middle, middle - half, middle + half, np.full(3, half / 4))

    def advance(self) -> Iterator[None]:
        for _ in range(20_000):  # a rule that never holds must fail a test, not hang it
            self.taken += self.size
            yield


def stopped(rules: Rules, **options: Any) -> tuple[Narrowing, Verdict]:
    evidence = Narrowing()
    return evidence, watch(evidence, evidence.advance(), planned_looks(rules, 100), rules, **options)


def test_samples_alone_has_one_look_at_full_delta() -> None:
    evidence, verdict = stopped(Rules(samples=1000))
    assert evidence.shares == [1.0]
    assert (verdict.samples, verdict.stopped_because) == (1000, "samples")


@pytest.mark.parametrize(
    "rules", [Rules(samples=10**6, top=5), Rules(minutes=3), Rules(half_width=0.1, samples=300), Rules(50, minutes=1)]
)
def test_looks_spend_at_most_delta_and_are_whole_blocks(rules: Rules) -> None:
    looks = list(itertools.islice(planned_looks(rules, 100), 60))
    assert sum(look.share for look in looks) <= 1
    assert all(a.samples < b.samples for a, b in itertools.pairwise(looks))
    assert all(look.samples % 100 == 0 for look in looks if not look.last)
    assert looks[-1].last == bool(rules.samples)


def test_an_endless_plan_spends_all_of_delta_in_the_end() -> None:
    looks = itertools.islice(planned_looks(Rules(minutes=1), 1), 160)
    assert 0.95 < sum(look.share for look in looks) <= 1


def test_half_width_stops_at_the_first_look_that_is_narrow_enough() -> None:
    _, verdict = stopped(Rules(half_width=0.05))
    assert verdict.stopped_because == "half_width"
    assert verdict.bounds.half_width.max() <= 0.05
    assert 400 <= verdict.samples <= 500


def test_top_stops_once_settled() -> None:
    _, verdict = stopped(Rules(samples=10**6, top=1))  # .5 and .4 part at half-width .05
    assert verdict.stopped_because == "top"
    assert 400 < verdict.samples <= 550
    _, verdict = stopped(Rules(samples=10**6, top=2))
    assert verdict.samples < 250


@pytest.mark.parametrize("pace", [0.5, 1.7, 3.1])
def test_the_clock_only_chooses_the_look(pace: float) -> None:
    """And a run that is told where the clock stopped it stops there again, however late it is."""
    time = itertools.count()
    evidence, verdict = stopped(Rules(minutes=1), clock=lambda: next(time) * pace)
    assert verdict.stopped_because == "minutes"
    assert verdict.samples in {look.samples for look in itertools.islice(planned_looks(Rules(minutes=1), 100), 40)}
    assert verdict.bounds.half_width[0] == pytest.approx(20 / verdict.samples)
    again, repeated = stopped(Rules(minutes=1, repeat=verdict.samples), clock=lambda: next(time) * 1000.0)
    assert repeated.stopped_because == "minutes"
    assert repeated.samples == verdict.samples
    assert (repeated.bounds.upper == verdict.bounds.upper).all()
    assert again.shares == evidence.shares


def test_the_first_look_is_always_reached() -> None:
    time = itertools.count(0, 1000)
    _, verdict = stopped(Rules(minutes=1), clock=lambda: next(time))
    assert (verdict.samples, verdict.stopped_because) == (100, "minutes")


def test_a_resumed_run_passes_over_looks_behind_it() -> None:
    rules = Rules(samples=5000, half_width=1e-9)
    whole, _ = stopped(rules)
    resumed = Narrowing()
    resumed.taken = 1500
    verdict = watch(resumed, resumed.advance(), planned_looks(rules, 100), rules)
    assert verdict.samples == 5000
    assert resumed.shares == whole.shares[-len(resumed.shares) :]
    assert len(resumed.shares) < len(whole.shares)


def test_nothing_left_to_sample_stops_at_once() -> None:
    sure = Bounds(*np.array([[0.5, 0.2]] * 3), np.zeros(2))
    evidence = Narrowing()
    evidence.bounds = lambda share: sure  # type: ignore[method-assign]
    verdict = watch(evidence, evidence.advance(), planned_looks(Rules(minutes=1), 100), Rules(minutes=1))
    assert (verdict.samples, verdict.stopped_because) == (100, "settled")


def test_sequences_are_looked_at_after_every_block() -> None:
    assert list(every_block([(0, 100), (100, 100), (200, 50)], 250)) == [
        Look(100, 1.0),
        Look(200, 1.0),
        Look(250, 1.0, last=True),
    ]


@pytest.mark.parametrize("rules", [{}, {"top": 3}, {"samples": -1}, {"minutes": -0.1, "samples": 5}])
def test_rules_that_cannot_end_are_refused(rules: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match=r"stopping rules|give samples"):
        Rules(**rules)


@settings(max_examples=200, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 6), st.integers(0, 3)), max_size=7), st.integers(1, 8))
def test_top_is_settled_when_so_many_are_surely_in(intervals: list[tuple[int, int]], top: int) -> None:
    lower = [low / 10 for low, _ in intervals]
    upper = [(low + wide) / 10 for low, wide in intervals]
    said = oracles.settle(lower, upper, top).count("in")
    bounds = Bounds(np.array(lower), np.array(lower), np.array(upper), np.zeros(len(lower)))
    assert top_settled(bounds, top) is (said == min(top, len(lower)))


@settings(max_examples=100, deadline=None)
@given(st.integers(1, 2000), st.data())
def test_clopper_pearson_by_the_binomial(samples: int, data: st.DataObject) -> None:
    """The ends are where the count seen, or one beyond it, has a chance of alpha / 2."""
    count, alpha = data.draw(st.integers(0, samples)), data.draw(st.sampled_from([0.1, 1e-3, 1e-8]))
    lower, upper = clopper_pearson(np.array([count]), samples, alpha)
    assert count == 0 or binom.sf(count - 1, samples, lower[0]) == pytest.approx(alpha / 2, rel=1e-6)
    assert count == samples or binom.cdf(count, samples, upper[0]) == pytest.approx(alpha / 2, rel=1e-6)
    assert (lower[0] == 0) == (count == 0)
    assert (upper[0] == 1) == (count == samples)


def test_clopper_pearson_covers_at_every_share() -> None:
    samples, alpha = 50, 0.1
    lower, upper = clopper_pearson(np.arange(samples + 1), samples, alpha)
    for p in np.linspace(0.001, 0.999, 333):
        inside = (lower <= p) & (p <= upper)
        assert binom.pmf(np.arange(samples + 1), samples, p)[inside].sum() >= 1 - alpha


def test_a_party_never_hit_is_known_well() -> None:
    """One of a million parties, never hit by a million paths: below 1.8e-5."""
    _, upper = clopper_pearson(np.array([0]), 10**6, 0.05 / 10**6)
    assert upper[0] == pytest.approx(1 - (0.025 / 10**6) ** 1e-6, rel=1e-9)
    assert upper[0] < 1.8e-5


def test_intervals_of_paths_come_to_freemans_scale_and_split_delta() -> None:
    hits, settled = np.array([30, 0, 0, 5]), np.array([False, True, True, False])
    exact, ceiling = np.array([0.1, 0.2, 0.0, 0.0]), np.array([1.0, 1.0, 1.0, 0.11])
    bounds = path_bounds(hits, 100, exact, ceiling, settled, 0.1)
    lower, upper = clopper_pearson(hits, 100, 0.05)  # two of the four are open
    assert bounds.estimate == pytest.approx([0.1 + 2 * 0.3, 0.2, 0, 2 * 0.05])
    assert bounds.lower == pytest.approx([0.1 + 2 * lower[0], 0.2, 0, 2 * lower[3]])
    assert bounds.upper == pytest.approx([0.1 + 2 * upper[0], 0.2, 0, 0.11])
    assert bounds.std_error == pytest.approx([2 * math.sqrt(0.3 * 0.7 / 100), 0, 0, 2 * math.sqrt(0.05 * 0.95 / 100)])


@settings(max_examples=150, deadline=None)
@given(SHARES)
def test_spread_keeps_the_sum_and_understates_every_logarithm(values: list[float]) -> None:
    x = np.array(values)
    weights = spread(x)
    by_hand = np.sum([oracles.spread(value, GRID.tolist()) for value in values], axis=0)
    np.testing.assert_allclose(weights, by_hand, atol=1e-12)
    np.testing.assert_allclose(weights @ GRID, x.sum(), atol=1e-12)
    for theta in (-0.97, -0.1, 0.5, 30.0, 400.0):
        assert weights @ np.log1p(theta * GRID) <= np.log1p(theta * x).sum() + 1e-9


@settings(max_examples=60 if COMPILED else 25, deadline=None)
@given(SHARES, st.floats(0.001, 0.5))
def test_the_best_bet(values: list[float], cost: float) -> None:
    draws, x = len(values), np.array(values)
    weights, sums = spread(x)[None], x.sum()[None]
    rise, fall = np.zeros((2, 1), np.int8)
    low, high = np.zeros((2, 1))
    kernels_bets.review(
        np.arange(1), draws, weights, sums, np.log1p(np.outer(GRID, RISES)), np.log1p(-np.outer(GRID, FALLS)), RISES,
        FALLS, cost, rise, fall, low, high,
    )  # fmt: skip
    seen = (draws, weights[0].tolist(), float(sums[0]), GRID.tolist())
    _, lowest = oracles.best_bet(*seen, RISES.tolist(), cost, 1)
    _, highest = oracles.best_bet(*seen, FALLS.tolist(), cost, -1)
    assert low[0] == pytest.approx(lowest, abs=1e-12)
    assert high[0] == pytest.approx(highest, abs=1e-12)


@settings(max_examples=80 if COMPILED else 25, deadline=None)
@given(st.lists(st.lists(st.floats(0, 1), min_size=1, max_size=4), min_size=2, max_size=5), st.data())
def test_what_is_excluded_was_paid_for(blocks: list[list[float]], data: st.DataObject) -> None:
    """At the limits the capital, every draw booked by itself, is at least what excluding costs: 2 / alpha."""
    drawn = sum(map(len, blocks))
    population = drawn + data.draw(st.integers(1, 30))
    ell = data.draw(st.floats(0.05, 3.0))
    bets = Bets(1, population, data.draw(st.integers(1, 50)), ell)
    lowest, highest = np.zeros(1), np.ones(1)
    seen: list[float] = []
    up: list[tuple[list[float], float]] = []
    down: list[tuple[list[float], float]] = []
    for block in blocks:
        draws, before = len(seen), np.array([sum(seen)])
        if draws:
            bets.review(np.arange(1), draws, spread(np.array([seen])), before)
            pull = population / (population - draws)
            up.append((block, float(RISES[bets.rise[0]] * pull)))
            down.append((block, float(min(FALLS[bets.fall[0]] * pull, STEEPEST))))
            bets.settle(np.arange(1), draws, before, len(block), spread(np.array([block])), lowest, highest)
        else:
            up.append((block, 0.0))
            down.append((block, 0.0))
        low, high = (
            (bets.gain_low - ell) / (bets.slope_low + 1e-300),
            (ell - bets.gain_high) / (bets.slope_high + 1e-300),
        )
        seen += block
        for limit, capital, sign in ((low[0], up, 1), (high[0], down, -1)):
            # limits beyond what the rest of the population could be are cut off elsewhere
            if draws and sum(seen) - len(block) <= population * limit <= population - draws + before[0]:
                left = [(population * limit - sum(seen[:at])) / (population - at) for at in _starts(blocks, len(seen))]
                if all(0 <= m <= 1 for m in left):
                    assert oracles.log_capital(capital, population, limit, sign) >= ell - 1e-9


def _starts(blocks: list[list[float]], end: int) -> list[int]:
    return [at for at in itertools.accumulate(map(len, blocks), initial=0) if at < end]


def test_a_sequence_is_only_looked_at_at_full_delta() -> None:
    one = np.ones(3)
    evidence = PivotEvidence(10, Scale(one, one < 0, 0 * one, one, np.arange(one.size, dtype=np.int32)), 0.05)
    with pytest.raises(ValueError, match="full delta"):
        evidence.bounds(0.5)


def test_certain_bounds_hold_whatever_was_drawn() -> None:
    """Even at a delta so small that no bet is ever paid: S / N at least, (S + N - k) / N at most."""
    population, drawn = 20, np.array([[1.0, 0.5, 0.0], [0.25, 0.25, 0.25]])
    one = np.ones(2)
    evidence = PivotEvidence(population, Scale(one, one < 0, 0 * one, one, np.arange(one.size, dtype=np.int32)), 1e-300)
    evidence.add(3, spread(drawn), drawn.sum(1), (drawn**2).sum(1))
    bounds = evidence.bounds()
    np.testing.assert_allclose(bounds.lower, drawn.sum(1) / population)
    np.testing.assert_allclose(bounds.upper, (drawn.sum(1) + 17) / population)
    variance = drawn.var(1, ddof=1)
    np.testing.assert_allclose(bounds.std_error, np.sqrt(variance / 3 * (1 - 3 / 20)))


def test_draws_are_a_random_order() -> None:
    """Each place of the order is each party equally often: chi-square over 4000 seeds, one in a million."""
    counts = np.zeros((6, 6))
    for seed in range(4000):
        order = draw_order(6, seed)
        assert sorted(order) == list(range(6))
        counts[np.arange(6), order] += 1
    assert ((counts - 4000 / 6) ** 2 / (4000 / 6)).sum() < 86  # 25 degrees of freedom: .999999 quantile 73
