"""The null distribution of a sign-flip test, from values and rows of flips.

All functions take values (units, channels, frequencies, times), C-contiguous float32 or float64 without NaN; a unit that is
missing at a point has 0 there and `unit_counts` says how many are present; a point that is not tested is 0 in all
units.  Flips are rows of 0 (keep) and 1 (flip), an array (rows, units) uint8 or a callable rows(first, last); row 0 is all zeros, the
observed labelling, and goes through the same arithmetic as every other row.

The statistic is the one-sample t with the units present as its n.  Where the values of a point have no spread it is
`LARGEST_T` in size.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels.components import map_workspace, summarise_map
from tfstats.kernels.sign_flip_maps import flipped_t_maps, sums_of_squares
from tfstats.permutation.row_panels import Progress, RowSource, row_count, row_panels, run_in_threads

__all__ = ["LARGEST_T", "Summary", "Tail", "counts_at_least", "null_of_sign_flips", "statistic_of_flips"]

LARGEST_T = 1e6

Summary = Literal["maximum", "mass", "extent", "enhanced"]
Tail = Literal["two-sided", "greater", "less"]
SUMMARY_CODES: dict[str, int] = {"maximum": 0, "mass": 1, "extent": 2, "enhanced": 3}
TAIL_CODES: dict[str, int] = {"two-sided": 0, "greater": 1, "less": 2}

_Values = NDArray[np.float32] | NDArray[np.float64]


def _counts_map(values: _Values, unit_counts: NDArray[np.integer] | None) -> NDArray[np.float64]:
    points = values[0].size
    if unit_counts is None:
        return np.full(points, len(values), np.float64)
    return np.ascontiguousarray(unit_counts, np.float64).reshape(points)


def _critical_map(counts: NDArray[np.float64], critical: float | NDArray[np.float64] | None) -> NDArray[np.float64]:
    if critical is None:
        return np.full(counts.shape, np.inf)
    by_count = np.asarray(critical, np.float64)
    return np.full(counts.shape, float(by_count)) if by_count.ndim == 0 else by_count[counts.astype(np.int64)]


def _edge_array(edges: NDArray[np.integer] | None) -> NDArray[np.int64]:
    return np.zeros((0, 2), np.int64) if edges is None else np.ascontiguousarray(edges, np.int64).reshape(-1, 2)


def null_of_sign_flips(
    values: _Values,
    flips: RowSource,
    *,
    summary: Summary,
    tail: Tail,
    critical: float | NDArray[np.float64] | None = None,
    edges: NDArray[np.integer] | None = None,
    threads: int = 1,
    unit_counts: NDArray[np.integer] | None = None,
    E: float = 0.5,
    H: float = 2.0,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness for each row of flips: the largest |t|, cluster mass, cluster extent or enhanced value of its map.

    Parameters
    ----------
    summary : "maximum", "mass", "extent" or "enhanced"
    tail : "two-sided", "greater" or "less"
        Two-sided takes the larger of both signs; less the extremeness of -t.
    critical : float or float64 array by unit count
        Cluster-forming value, strict; entry c of the array is for points with c units.
    edges : (edges, 2) integers
        Channels that are neighbours; None joins none.
    """
    shape = values.shape[1:]
    flat = np.ascontiguousarray(values).reshape(len(values), -1)
    counts = _counts_map(values, unit_counts)
    squares = sums_of_squares(flat)
    limit = _critical_map(counts, critical).reshape(shape)
    joined = _edge_array(edges)
    total = row_count(flips, number_of_rows)
    null = np.full(total, np.nan)

    def work(piece: tuple[int, NDArray[np.uint8]]) -> int:
        first, rows = piece
        maps = np.empty((len(rows), flat.shape[1]), flat.dtype)
        flipped_t_maps(flat, rows, counts, squares, LARGEST_T, maps)
        space = map_workspace(shape)
        for row in range(len(rows)):
            null[first + row] = summarise_map(
                maps[row].reshape(shape), limit, TAIL_CODES[tail], SUMMARY_CODES[summary], joined, E, H, *space
            )
        return len(rows)

    run_in_threads(work, row_panels(flips, total, 16), threads, progress)
    return null


def counts_at_least(
    values: _Values,
    flips: RowSource,
    *,
    tail: Tail,
    tolerance: float,
    threads: int = 1,
    unit_counts: NDArray[np.integer] | None = None,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.int64]:
    """How many rows have a t at each point that is at least as extreme as that of row 0, row 0 included.

    At least: t_b >= t_0 - tolerance * |t_0|, with |t| two-sided and -t for less.
    """
    flat = np.ascontiguousarray(values).reshape(len(values), -1)
    counts = _counts_map(values, unit_counts)
    squares = sums_of_squares(flat)
    total = row_count(flips, number_of_rows)

    def extremeness(maps: NDArray[np.floating]) -> NDArray[np.floating]:
        return np.abs(maps) if tail == "two-sided" else -maps if tail == "less" else maps

    observed = extremeness(statistic_of_flips(values, next(row_panels(flips, total, 1))[1][0], unit_counts=unit_counts).reshape(-1))
    limit = observed - tolerance * np.abs(observed)
    tallies = np.zeros(flat.shape[1], np.int64)
    for _first, rows in row_panels(flips, total, 16):
        maps = np.empty((len(rows), flat.shape[1]), np.float64)
        flipped_t_maps(flat, rows, counts, squares, LARGEST_T, maps)
        tallies += (extremeness(maps) >= limit).sum(axis=0)
    return tallies.reshape(values.shape[1:])


def statistic_of_flips(
    values: _Values, flip_row: NDArray[np.uint8], *, unit_counts: NDArray[np.integer] | None = None
) -> NDArray[np.float64]:
    """The t map (channels, frequencies, times) of one row of flips, float64; 0 where all values are 0."""
    flat = np.ascontiguousarray(values).reshape(len(values), -1)
    row = np.ascontiguousarray(flip_row, np.uint8).reshape(1, -1)
    out = np.empty((1, flat.shape[1]), np.float64)
    flipped_t_maps(flat, row, _counts_map(values, unit_counts), sums_of_squares(flat), LARGEST_T, out)
    return out.reshape(values.shape[1:])
