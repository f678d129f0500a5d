"""Median of the slopes between all pairs of points, for many rows of values over the same places.

A median is found by halving the interval that holds it and counting.  The values are held as whole numbers in the same order,
since the compiler counts and compares several of those at a time.  The result is the exact median, the mean of the middle two
where their number is even.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined

__all__ = ["median_lines", "median_of"]

_MAGNITUDE = np.int64(0x7FFFFFFFFFFFFFFF)
_LEAST = np.int64(-0x7FFFFFFFFFFFFFFF)


@inlined
def _in_order(bits):
    """The bits of a double as a whole number, larger for a larger double; its own inverse."""
    return bits ^ ((bits >> 63) & _MAGNITUDE)


@compiled
def median_of(values):
    """The median of values (float64, without NaN), which it overwrites."""
    number = values.size
    keys = values.view(np.int64)
    low, high = _MAGNITUDE, _LEAST
    for k in range(number):
        key = _in_order(keys[k])
        keys[k] = key
        low, high = min(low, key), max(high, key)
    low -= 1
    wanted = (number + 1) // 2
    below_high = number
    # The wanted-th smallest lies above low and at or below high.
    while below_high != wanted:
        middle = (low >> 1) + (high >> 1) + (low & high & 1)
        if middle == low:
            break
        below = 0
        for k in range(number):
            below += keys[k] <= middle
        if below >= wanted:
            high, below_high = middle, below
        else:
            low = middle
    last, first = _LEAST, _MAGNITUDE
    for k in range(number):
        key = keys[k]
        last = max(last, key if key <= high else _LEAST)
        first = min(first, key if key > high else _MAGNITUDE)
    pair = np.empty(2, np.int64)
    pair[0], pair[1] = _in_order(last), _in_order(first)
    middle_two = pair.view(np.float64)
    if number % 2 == 1 or below_high > wanted:
        return middle_two[0]
    return 0.5 * (middle_two[0] + middle_two[1])


@compiled
def median_lines(rows, places, slopes, heights):
    """Write slope and height at place 0 of each row (rows, places), none of whose values is NaN."""
    points = places.size
    pairs = points * (points - 1) // 2
    between, inverse = np.empty(pairs, np.float64), np.empty(pairs, np.float64)
    rests = np.empty(points, np.float64)
    pair = 0
    for i in range(points):
        for k in range(i + 1, points):
            inverse[pair] = 1.0 / (places[k] - places[i])
            pair += 1
    for row in range(rows.shape[0]):
        values = rows[row]
        pair = 0
        for i in range(points - 1):
            length = points - 1 - i
            height = values[i]
            later, distance, target = values[i + 1 :], inverse[pair : pair + length], between[pair : pair + length]
            for k in range(length):
                target[k] = (later[k] - height) * distance[k]
            pair += length
        slope = median_of(between)
        for i in range(points):
            rests[i] = values[i] - slope * places[i]
        slopes[row] = slope
        heights[row] = median_of(rests)
