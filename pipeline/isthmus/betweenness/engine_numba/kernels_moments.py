"""What is kept of the values x in [0, 1] that sampled sources give a party: enough for a bound, never the values.

A value between two neighbouring points of `sequences.GRID` (2**-8 .. 1, and 0) is spread over both by linear
interpolation; the weights at the points but 0 stand in columns 0..8, the sum of squares in column 9.
"""

from __future__ import annotations

import math

from isthmus.betweenness.engine_numba.accelerate import kernel

MOMENTS = 10
_LOWEST = 2.0**-8


@kernel
def note(moments, v, x, times):
    """Add a value to row v, `times` over. Values that rounding lifted above 1 count as 1."""
    if x <= 0.0:
        return
    x = min(x, 1.0)
    moments[v, 9] += times * x * x
    if x < _LOWEST:
        moments[v, 0] += times * x / _LOWEST
        return
    mantissa, exponent = math.frexp(x)  # x = mantissa * 2**exponent, mantissa in [1/2, 1)
    above = 2.0 * mantissa - 1.0
    moments[v, exponent + 7] += times * (1.0 - above)
    if above > 0.0:
        moments[v, exponent + 8] += times * above
