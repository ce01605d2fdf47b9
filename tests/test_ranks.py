"""Ranks, possible ranks and `top` against counting by hand."""

from __future__ import annotations

import numpy as np
import polars as pl
from hypothesis import given
from hypothesis import strategies as st

import oracles
from isthmus.betweenness import Estimate
from isthmus.betweenness.ranks import rank, rank_range, settle

# few distinct values, so that equal bounds are common
values = st.integers(0, 6).map(lambda i: i / 6)
intervals = st.lists(st.tuples(values, values).map(sorted), max_size=12)


def bounds(cases):
    pairs = np.array(cases, np.float64).reshape(-1, 2)
    return pairs[:, 0], pairs[:, 1]


@given(intervals)
def test_rank_range(cases):
    lower, upper = bounds(cases)
    best, worst = rank_range(lower, upper)
    assert list(zip(best, worst, strict=True)) == oracles.rank_range(lower.tolist(), upper.tolist())


@given(intervals, st.integers(0, 14))
def test_settle(cases, top):
    lower, upper = bounds(cases)
    assert settle(lower, upper, top).tolist() == oracles.settle(lower.tolist(), upper.tolist(), top)


@given(intervals, st.randoms(use_true_random=False))
def test_every_truth_inside_the_intervals_has_a_possible_rank(cases, random):
    lower, upper = bounds(cases)
    truth = np.array([random.choice([low, high, (low + high) / 2]) for low, high in cases])
    best, worst = rank_range(lower, upper)
    said = settle(lower, upper, 3)
    for v, x in enumerate(truth):
        first, last = 1 + (truth > x).sum(), (truth >= x).sum()
        assert best[v] <= first
        assert last <= worst[v]
        assert said[v] != "in" or last <= 3
        assert said[v] != "out" or first > 3


@given(st.lists(values))
def test_rank_keeps_the_order_of_equals(given_values):
    order = sorted(range(len(given_values)), key=lambda i: (-given_values[i], i))
    ranks = rank(np.array(given_values, np.float64))
    assert [order.index(i) + 1 for i in range(len(given_values))] == ranks.tolist()


def test_frame():
    value = np.array([0.1, 0.5, 0.5, 0.0])
    parties = pl.Series("party", ["a", "b", "c", "d"])
    reach = np.array([0.2, 0.05, 0.05, 0.0])
    error = np.array([0.1, np.nan, 0.1, 0.0])
    low, high = np.clip(value - reach, 0, 1), value + reach
    estimate = Estimate(parties, False, value, low, high, error, "paths", "networkit", 9, 1, 0.95, "samples")
    frame = estimate.frame(top=2)
    assert frame["party"].to_list() == ["b", "c", "a", "d"]
    assert frame["rank"].to_list() == [1, 2, 3, 4]
    assert frame["rank_best"].to_list() == [1, 1, 3, 3]
    assert frame["rank_worst"].to_list() == [2, 2, 4, 4]
    assert frame["top"].to_list() == ["in", "in", "out", "out"]
    assert frame["std_error"].to_list() == [None, 0.1, 0.1, 0.0]
    assert frame["pairs"].to_list() == [1.5, 1.5, 0.30000000000000004, 0.0]
