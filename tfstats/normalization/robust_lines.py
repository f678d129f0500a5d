"""Straight lines that a few outlying points cannot turn: the median of all pairwise slopes."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels import pair_slopes

__all__ = ["FEWEST_POINTS", "robust_lines"]

Floats = NDArray[np.float64]

FEWEST_POINTS = 3
"""Two points lie on any line."""


def robust_lines(values: Floats, places: Floats) -> tuple[Floats, Floats]:
    """Slope, and height at place 0, of the line through each row of values over the same places (Theil 1950; Sen 1968).

    The slope is the median of the slopes between all pairs of points, the height the median of values - slope x place.
    Up to 29 % of the points may lie anywhere without the line following them.  Exactly equivariant: adding a line to
    the values adds its slope and height.  Its efficiency for Gaussian deviations is 95 % of least squares on even
    places and 72 % on the logarithms of even ones.

    Parameters
    ----------
    values : array (..., places)
        NaN is left out.
    places : array, ascending

    Returns
    -------
    slope, height : arrays (...)
        NaN where fewer than three values are there.

    Notes
    -----
    No randomness, no iteration.  Time grows with rows x places^2 / 2: about 3 ns a pair.
    """
    rows = values.reshape(-1, values.shape[-1])
    slopes, heights = np.full(len(rows), np.nan), np.full(len(rows), np.nan)
    there = ~np.isnan(rows)
    # Gaps are the same in most rows (wavelets leave the ends of a trial empty, frequency by frequency).
    for pattern, mine in _patterns(there):
        if np.count_nonzero(pattern) < FEWEST_POINTS:
            continue
        slope, height = np.empty(mine.size), np.empty(mine.size)
        pair_slopes.median_lines(np.ascontiguousarray(rows[mine][:, pattern]), places[pattern], slope, height)
        slopes[mine], heights[mine] = slope, height
    shape = values.shape[:-1]
    return slopes.reshape(shape), heights.reshape(shape)


def _patterns(there: NDArray[np.bool_]) -> Iterator[tuple[NDArray[np.bool_], NDArray[np.intp]]]:
    """Each different row of `there`, and the numbers of the rows that have it."""
    packed = np.packbits(there, axis=1)
    names = np.ascontiguousarray(packed).view([("", np.void, packed.shape[1])])[:, 0]
    if len(names) and np.all(packed == packed[0]):
        yield there[0], np.arange(len(names))
        return
    _, name_of_row = np.unique(names, return_inverse=True)
    order = np.argsort(name_of_row, kind="stable")
    for mine in np.split(order, np.cumsum(np.bincount(name_of_row))[:-1]):
        yield there[mine[0]], mine
