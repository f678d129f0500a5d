"""One-sample t maps of sign flips, and what needs every point of them.

A row of flips (0 keeps, 1 flips a unit) turns values x into s*x.  The sum of squares Q does not change, so with c units the
statistic is t = Z * sqrt((c - 1) / (c*Q - Z^2)), Z the signed sum.  All sums here are float64, in the order of the units.
"""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined

__all__ = ["flipped_t_maps", "sums_of_squares", "t_from_sum"]

BLOCK = 64  # points worked on at once: their sums stay in registers and in the nearest cache


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
def flipped_t_maps(values, flips, counts, squares, largest, out):
    """Fill out (rows, points) with the t maps of the rows of flips.

    values (units, points); counts, squares (points,) float64: units there and their sum of squares.
    """
    units, points = values.shape
    rows = flips.shape[0]
    block = np.empty((units, BLOCK), np.float64)
    total = np.empty(BLOCK, np.float64)
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        for i in range(units):
            for k in range(width):
                block[i, k] = values[i, first + k]
            for k in range(width, BLOCK):
                block[i, k] = 0.0
        for row in range(rows):
            for k in range(BLOCK):
                total[k] = 0.0
            for i in range(units):
                if flips[row, i] != 0:
                    for k in range(BLOCK):
                        total[k] -= block[i, k]
                else:
                    for k in range(BLOCK):
                        total[k] += block[i, k]
            for k in range(width):
                at = first + k
                out[row, at] = t_from_sum(total[k], squares[at], counts[at], largest)
