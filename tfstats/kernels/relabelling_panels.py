"""What one panel of relabellings gives: runs beyond the threshold, maxima, counts, or whole maps.

Every kernel here goes block of points by block of points: it writes down the table of signed sums of the block once
and looks the sums of
each row of relabellings up.  `codes` is (code sets, rows, groups) from `signed_sums.table_rows`; see
`relabelled_statistics` for the designs.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled
from tfstats.kernels.relabelled_statistics import load_block, ratios_of_row, score_at, statistic_at, value_of_ratio
from tfstats.kernels.runs import append_runs, largest_of_runs, packed_flags, row_starts_word
from tfstats.kernels.signed_sums import signed_sum_tables
from tfstats.kernels.vector_instructions import trailing_zeros

__all__ = ["panel_at_least", "panel_maps", "panel_maxima", "panel_of_runs"]

BLOCK = 64


@compiled
def _look_up(tables, codes, row, total):
    """Fill total (planes * code sets, BLOCK) with the signed sums of one row, group after group."""
    planes = tables.shape[0]
    sets, _rows, groups = codes.shape
    for s in range(sets):
        entry = codes[s, row]
        for p in range(planes):
            table = tables[p]
            sums = total[s * planes + p]
            for k in range(BLOCK):
                sums[k] = table[entry[0], k]
            g = 1
            # Several groups at a time save going through memory; the order of the additions is the same.
            while g + 4 <= groups:
                a = table[entry[g]]
                b = table[entry[g + 1]]
                c = table[entry[g + 2]]
                d = table[entry[g + 3]]
                for k in range(BLOCK):
                    sums[k] = (((sums[k] + a[k]) + b[k]) + c[k]) + d[k]
                g += 4
            while g < groups:
                a = table[entry[g]]
                for k in range(BLOCK):
                    sums[k] += a[k]
                g += 1


@compiled
def _prepare(design, values, first, width, sizes, counts, block, moments, tables, count):
    load_block(design, values, first, width, block, moments)
    for p in range(tables.shape[0]):
        signed_sum_tables(block[p], sizes, tables[p])
    for k in range(BLOCK):
        count[k] = counts[first + k] if k < width else 1.0


@compiled
def _workspace(design, values, sizes, sets):
    """block, moments, tables, totals, counts, above and below of the ratio."""
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
        np.empty(BLOCK, np.float64),
        np.empty(BLOCK, np.float64),
    )


@compiled
def _flag_above(above, below, bound, tail, flags):
    """Flag the points whose ratio is above the bound (BLOCK,) and has the sign of the tail."""
    if tail == 0:
        for k in range(BLOCK):
            flags[k] = abs(above[k]) > bound[k] * below[k]
    elif tail == 1:
        for k in range(BLOCK):
            flags[k] = above[k] > bound[k] * below[k]
    else:
        for k in range(BLOCK):
            flags[k] = -above[k] > bound[k] * below[k]


@compiled
def panel_of_runs(
    design, values, codes, sizes, counts, groups, largest, fit, critical, tail, times, places, masses, number
):
    """Append the runs beyond `critical` (points,), above 0, of each row to its list, see `runs.run_lists`.

    Returns the longest list wanted; when it is above the room, the lists are cut and the panel must be done again
    with more.
    """
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count, above, below = _workspace(design, values, sizes, codes.shape[0])
    out = np.empty(BLOCK, np.float64)
    limit = np.empty(BLOCK, np.float64)
    bound = np.empty(BLOCK, np.float64)
    flags = np.zeros(BLOCK, np.uint8)
    packed = flags.view(np.uint64)
    number[:] = 0
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for k in range(BLOCK):
            limit[k] = critical[first + k] if k < width else np.inf
            # A little low: the statistic itself decides.  Welch's score is never larger than its t.
            bound[k] = limit[k] * (limit[k] if design < 3 else 1.0) * (1.0 - 1e-9)
        row_starts = row_starts_word(first, times)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            ratios_of_row(design, total, moments, count, groups, above, below)
            _flag_above(above, below, bound, tail, flags)
            word = packed_flags(packed)
            if word == 0:
                continue
            rest = word
            while rest != 0:
                k = trailing_zeros(rest)
                out[k] = statistic_at(design, k, above, below, total, moments, groups, largest, fit)
                if not abs(out[k]) > limit[k]:
                    word &= ~(np.uint64(1) << np.uint64(k))
                rest &= rest - np.uint64(1)
            number[row] = append_runs(word, row_starts, out, first, places[row], masses[row], number[row])
    longest = 0
    for row in range(rows):
        longest = max(longest, number[row])
    return longest


@compiled
def summaries_of_lists(places, masses, number, times, plane, edges, by_extent, wide, space, out):
    """Largest component of each list, see `runs.largest_of_runs`; space from `runs.run_workspace`."""
    start, stop, label, parent, total, channel_first, bits, word_first = space
    for row in range(number.shape[0]):
        out[row] = largest_of_runs(
            places[row],
            masses[row],
            number[row],
            times,
            plane,
            edges,
            by_extent,
            wide,
            start,
            stop,
            label,
            parent,
            total,
            channel_first,
            bits,
            word_first,
        )


@compiled
def panel_maxima(design, values, codes, sizes, counts, groups, largest, fit, tail, out):
    """Largest extremeness over the points for each row; 0 when no point is above 0."""
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count, above, below = _workspace(design, values, sizes, codes.shape[0])
    bound = np.empty(BLOCK, np.float64)
    flags = np.zeros(BLOCK, np.uint8)
    packed = flags.view(np.uint64)
    out[:] = 0.0
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            ratios_of_row(design, total, moments, count, groups, above, below)
            bound[:] = out[row] * (out[row] if design < 3 else 1.0) * (1.0 - 1e-9)
            _flag_above(above, below, bound, tail, flags)
            rest = packed_flags(packed)
            while rest != 0:
                k = trailing_zeros(rest)
                value = statistic_at(design, k, above, below, total, moments, groups, largest, fit)
                out[row] = max(out[row], abs(value))
                rest &= rest - np.uint64(1)


@compiled
def panel_at_least(
    design, values, codes, sizes, counts, groups, largest, fit, tail, limits, least_ratio, sure_ratio, tallies
):
    """Add to tallies (points,) the number of rows whose extremeness is at least limits (points,).

    A ratio (with sign) below least_ratio is not, one from sure_ratio on is; between them the statistic itself decides.
    """
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count, above, below = _workspace(design, values, sizes, codes.shape[0])
    least = np.empty(BLOCK, np.float64)
    sure = np.empty(BLOCK, np.float64)
    tally = np.empty(BLOCK, np.int64)
    least_share = 1.0 / (largest * largest)
    flags = np.zeros(BLOCK, np.uint8)
    packed = flags.view(np.uint64)
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for k in range(BLOCK):
            tally[k] = 0
            least[k] = least_ratio[first + k] if k < width else np.inf
            sure[k] = sure_ratio[first + k] if k < width else np.inf
        for row in range(rows):
            _look_up(tables, codes, row, total)
            ratios_of_row(design, total, moments, count, groups, above, below)
            if tail == 0:
                for k in range(BLOCK):
                    above[k] = abs(above[k])
            elif tail == 2:
                for k in range(BLOCK):
                    above[k] = -above[k]
            for k in range(BLOCK):
                # No ratio beyond that of the largest statistic.
                below[k] = max(below[k], abs(above[k]) * least_share)
                surely = above[k] >= sure[k] * below[k]
                tally[k] += surely
                flags[k] = (not surely) & (above[k] >= least[k] * below[k])
            rest = packed_flags(packed)
            while rest != 0:
                k = trailing_zeros(rest)
                if k < width:
                    value = statistic_at(design, k, above, below, total, moments, groups, largest, fit)
                    tally[k] += value >= limits[first + k]
                rest &= rest - np.uint64(1)
        for k in range(width):
            tallies[first + k] += tally[k]


@compiled
def panel_maps(design, values, codes, sizes, counts, groups, largest, fit, out):
    """Fill out (rows, points) with the statistic of each row."""
    points = values.shape[2]
    rows = codes.shape[1]
    block, moments, tables, total, count, above, below = _workspace(design, values, sizes, codes.shape[0])
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        _prepare(design, values, first, width, sizes, counts, block, moments, tables, count)
        for row in range(rows):
            _look_up(tables, codes, row, total)
            ratios_of_row(design, total, moments, count, groups, above, below)
            if design < 3:
                for k in range(BLOCK):
                    below[k] = value_of_ratio(0, above[k], below[k], largest)
            else:
                for k in range(BLOCK):
                    below[k] = value_of_ratio(3, above[k], below[k], largest)
            if design == 2:
                for k in range(width):
                    below[k] = score_at(k, below[k], total, moments, groups, fit)
            for k in range(width):
                out[row, first + k] = below[k]
