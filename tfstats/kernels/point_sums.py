"""Sums by point that no relabelling changes, and the one-sample t from a signed sum.

A row of flips (0 keeps, 1 flips a unit) turns values x into s*x.  The sum of squares Q does not change, so with c
units the
statistic is t = Z * sqrt((c - 1) / (c*Q - Z^2)), Z the signed sum.  All sums here are float64, in the order of the
units.
"""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined

__all__ = ["centres_and_squares", "sums_of_squares", "t_from_sum"]


@inlined
def t_from_sum(total, squares, count, largest):
    """t of one point from its signed sum and sum of squares; `largest` in size where the spread vanishes."""
    degrees = count - 1.0
    spread = count * squares - total * total
    if total == 0.0 or degrees <= 0.0:
        return 0.0
    if spread * largest * largest <= degrees * total * total:
        return math.copysign(largest, total)
    return total * math.sqrt(degrees / spread)


@compiled
def sums_of_squares(values):
    """Sum of squares of each point of values (units, points), float64."""
    units, points = values.shape
    squares = np.zeros(points, np.float64)
    for i in range(units):
        for k in range(points):
            value = np.float64(values[i, k])
            squares[k] += value * value
    return squares


@compiled
def centres_and_squares(values):
    """Mean of each point of values (units, points) and sum of squares about it, float64.

    The mean of what the first mean leaves takes out its rounding.
    """
    units, points = values.shape
    centre = np.zeros(points, np.float64)
    left = np.zeros(points, np.float64)
    squares = np.zeros(points, np.float64)
    for i in range(units):
        for k in range(points):
            centre[k] += values[i, k]
    for k in range(points):
        centre[k] /= units
    for i in range(units):
        for k in range(points):
            left[k] += values[i, k] - centre[k]
    for k in range(points):
        centre[k] += left[k] / units
    for i in range(units):
        for k in range(points):
            value = values[i, k] - centre[k]
            squares[k] += value * value
    return centre, squares
