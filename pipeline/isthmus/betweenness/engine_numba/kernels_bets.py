"""Compiled loops over parties for `sequences.Bets`; the formulas and their source stand there.

Axes: v = parties, g = points of the grid, j = choices of theta.
"""

from __future__ import annotations

import math

import numpy as np

from isthmus.betweenness.engine_numba.accelerate import kernel


@kernel
def review(parties, draws, weights, sums, log_rise, log_fall, rises, falls, cost, rise, fall, low, high):
    """Choose theta for each of `parties` from what all draws so far showed.

    weights: float64[v, g], sums: float64[v], of `draws` draws; log_rise, log_fall: float64[g, j], log(1 + theta x) and
    log(1 - theta x); cost: what the log capital must exceed per draw. Writes rise, fall: int8[v], the choices, and low,
    high: float64[v], where each promises the bound at the horizon.
    """
    up, down = np.empty(rises.size), np.empty(falls.size)
    for v in parties:
        up[:] = -cost
        down[:] = -cost
        for g in range(log_rise.shape[0]):
            seen = weights[v, g] / (draws + 1)  # one more, a zero, in favour of caution
            if seen > 0.0:
                for j in range(rises.size):
                    up[j] += seen * log_rise[g, j]
                for j in range(falls.size):
                    down[j] += seen * log_fall[g, j]
        best, choice = -math.inf, 0
        for j in range(rises.size):
            promised = math.expm1(up[j]) / rises[j]
            if promised > best:
                best, choice = promised, j
        mean = sums[v] / draws
        rise[v] = choice
        low[v] = min(max(best, 0.0), mean)
        best, choice = math.inf, 0
        for j in range(falls.size):
            promised = -math.expm1(down[j]) / falls[j]
            if promised < best:
                best, choice = promised, j
        fall[v] = choice
        high[v] = min(max(best, mean), 1.0)


@kernel
def settle(
    parties, size, weights, passed, pull, log_rise, log_fall, rises, falls, rise, fall, low, high,
    gain_low, slope_low, gain_high, slope_high, ell, lowest, highest,
):  # fmt: skip
    """Book a block of `size` draws and tighten the limits.

    weights: float64[v, g] of the block; passed: float64[v], (sum of all draws before) / (draws left); pull: N / (draws
    left). lowest, highest: float64[v], the tightest limits so far of all bets, on the mean of all N values.
    """
    for v in parties:
        theta = rises[rise[v]]
        expected = min(max(pull * low[v] - passed[v], 0.0), 1.0)
        tilt = size * theta / (1.0 + theta * expected)
        gain = gain_low[v] - size * math.log1p(theta * expected) + tilt * (passed[v] + expected)
        for g in range(log_rise.shape[0]):
            gain += weights[v, g] * log_rise[g, rise[v]]
        gain_low[v] = gain
        slope_low[v] += tilt * pull
        if slope_low[v] > 0.0:
            lowest[v] = max(lowest[v], (gain - ell) / slope_low[v])
        theta = falls[fall[v]]
        expected = min(max(pull * high[v] - passed[v], 0.0), 1.0)
        tilt = size * theta / (1.0 - theta * expected)
        gain = gain_high[v] - size * math.log1p(-theta * expected) - tilt * (passed[v] + expected)
        for g in range(log_fall.shape[0]):
            gain += weights[v, g] * log_fall[g, fall[v]]
        gain_high[v] = gain
        slope_high[v] += tilt * pull
        if slope_high[v] > 0.0:
            highest[v] = min(highest[v], (ell - gain) / slope_high[v])
