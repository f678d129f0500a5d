"""What one panel of relabellings gives: runs beyond the threshold, maxima, counts, or whole maps.

Every kernel here goes block of points by block of points: it writes down the table of signed sums of the block once and looks the sums of
each row of relabellings up.  `codes` is (code sets, rows, groups) from `signed_sums.table_rows`; see
`relabelled_statistics` for the designs.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled
from tfstats.kernels.relabelled_statistics import load_block, statistics_of_row
from tfstats.kernels.runs import append_runs, largest_of_runs, packed_flags, row_starts_word
from tfstats.kernels.signed_sums import signed_sum_tables

__all__ = ["panel_at_least", "panel_maps", "panel_maxima", "panel_of_runs"]

BLOCK = 64


@compiled
def _look_up(tables, codes, row, total):
    """Fill total (planes * code sets, BLOCK) with the signed sums of one row."""
    planes = tables.shape[0]
    sets, _rows, groups = codes.shape
    for s in range(sets):
        for p in range(planes):
            at = s * planes + p
            table = tables[p]
            first = codes[s, row, 0]
            for k in range(BLOCK):
                total[at, k] = table[first, k]
            for g in range(1, groups):
                entry = codes[s, row, g]
                for k in range(BLOCK):
                    total[at, k] += table[entry, k]


@compiled
def _prepare(design, values, first, width, sizes, counts, block, moments, tables, count):
    load_block(design, values, first, width, block, moments)
    for p in range(tables.shape[0]):
        signed_sum_tables(block[p], sizes, tables[p])
    for k in range(BLOCK):
        count[k] = counts[first + k] if k < width else 1.0


@compiled
def _workspace(design, values, sizes, sets):
    units, components, _points = values.shape
    planes = 2 if design == 2 else components
    table_length = 0
    for g in range(sizes.shape[0]):
        table_length += 1 << sizes[g]
    return (
        np.empty((planes, units, BLOCK), np.float64),
        np.empty((2, BLOCK), np.float64),
        np.empty((planes, table_length, BLOCK), np.float64),
        np.empty((planes * sets, BLOCK), np.float64),
        np.empty(BLOCK, np.float64),
    )


@compiled
def panel_of_runs(design, values, codes, sizes, counts, groups, largest, fit, critical, tail, times, places, masses, number):
    """Append the runs beyond `critical` (points,) of each row to its list, see `runs.run_lists`.

    Returns the longest list wanted; when it is above the room, the lists are cut and the panel must be done again with more.
    """
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count = _workspace(design, values, sizes, codes.shape[0])
    df = np.empty(BLOCK, np.float64)
    out = np.empty(BLOCK, np.float64)
    limit = np.empty(BLOCK, np.float64)
    flags = np.zeros(BLOCK, np.uint8)
    packed = flags.view(np.uint64)
    number[:] = 0
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for k in range(BLOCK):
            limit[k] = critical[first + k] if k < width else np.inf
        row_starts = row_starts_word(first, times)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            statistics_of_row(design, total, moments, count, groups, largest, fit, limit, df, out)
            if tail == 0:
                for k in range(BLOCK):
                    flags[k] = abs(out[k]) > limit[k]
            elif tail == 1:
                for k in range(BLOCK):
                    flags[k] = out[k] > limit[k]
            else:
                for k in range(BLOCK):
                    flags[k] = -out[k] > limit[k]
            word = packed_flags(packed)
            if word != 0:
                number[row] = append_runs(word, row_starts, out, first, places[row], masses[row], number[row])
    longest = 0
    for row in range(rows):
        longest = max(longest, number[row])
    return longest


@compiled
def summaries_of_lists(places, masses, number, times, plane, edges, by_extent, wide, space, out):
    """Largest component of each list, see `runs.largest_of_runs`; space from `runs.run_workspace`."""
    start, stop, label, parent, total, channel_first = space
    for row in range(number.shape[0]):
        out[row] = largest_of_runs(
            places[row], masses[row], number[row], times, plane, edges, by_extent, wide, start, stop, label, parent, total, channel_first
        )


@compiled
def panel_maxima(design, values, codes, sizes, counts, groups, largest, fit, tail, out):
    """Largest extremeness over the points for each row; 0 when no point is above 0."""
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count = _workspace(design, values, sizes, codes.shape[0])
    df = np.empty(BLOCK, np.float64)
    statistic = np.empty(BLOCK, np.float64)
    limit = np.empty(BLOCK, np.float64)
    out[:] = 0.0
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            best = out[row]
            limit[:] = best
            statistics_of_row(design, total, moments, count, groups, largest, fit, limit, df, statistic)
            for k in range(BLOCK):
                value = statistic[k]
                if tail == 0:
                    value = abs(value)
                elif tail == 2:
                    value = -value
                best = max(best, value)
            out[row] = best


@compiled
def panel_at_least(design, values, codes, sizes, counts, groups, largest, fit, tail, limits, tallies):
    """Add to tallies (points,) the number of rows whose extremeness is at least limits (points,)."""
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count = _workspace(design, values, sizes, codes.shape[0])
    df = np.empty(BLOCK, np.float64)
    statistic = np.empty(BLOCK, np.float64)
    limit = np.empty(BLOCK, np.float64)
    below = np.empty(BLOCK, np.float64)
    tally = np.empty(BLOCK, np.int64)
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for k in range(BLOCK):
            tally[k] = 0
            limit[k] = limits[first + k] if k < width else np.inf
            below[k] = abs(limit[k]) * (1.0 - 1e-6)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            statistics_of_row(design, total, moments, count, groups, largest, fit, below, df, statistic)
            if tail == 0:
                for k in range(BLOCK):
                    tally[k] += abs(statistic[k]) >= limit[k]
            elif tail == 1:
                for k in range(BLOCK):
                    tally[k] += statistic[k] >= limit[k]
            else:
                for k in range(BLOCK):
                    tally[k] += -statistic[k] >= limit[k]
        for k in range(width):
            tallies[first + k] += tally[k]


@compiled
def panel_maps(design, values, codes, sizes, counts, groups, largest, fit, out):
    """Fill out (rows, points) with the statistic of each row."""
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count = _workspace(design, values, sizes, codes.shape[0])
    df = np.empty(BLOCK, np.float64)
    statistic = np.empty(BLOCK, np.float64)
    limit = np.full(BLOCK, -1.0)
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            statistics_of_row(design, total, moments, count, groups, largest, fit, limit, df, statistic)
            for k in range(width):
                out[row, first + k] = statistic[k]
