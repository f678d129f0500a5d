"""Sums by point that no relabelling changes.

A row of flips (0 keeps, 1 flips a unit) turns values x into s*x.  The sum of squares Q does not change, so with c units the
statistic is t = Z * sqrt((c - 1) / (c*Q - Z^2)), Z the signed sum.  All sums here are float64, in the order of the
units.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["centres_and_squares", "sums_of_squares"]


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
