"""Sums over the rows of each cell, point by point, in float64 and in the order of the rows.

Four rows of a cell are added at a time while their points are in the processor's cache, one after the other in each point: so a
sum has the same bits however its rows are cut into blocks and its points into pieces.  A piece whose sum is NaN is left as it
was and flagged; `present_sums` then adds what is there and counts what is missing.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["plain_sums", "present_sums", "scaled_sums"]


@compiled
def plain_sums(values, order, starts, piece, sums, flagged, begin, end):
    """Add values (rows, points) to sums (cells, points).

    order, starts : the rows of cell c are order[starts[c]:starts[c + 1]]
    flagged : (cells, pieces of `piece` points), set where a sum would be NaN; the pieces begin, ..., end - 1 are done
    """
    points = values.shape[1]
    buffer = np.empty(piece, np.float64)
    for number in range(begin, end):
        first = number * piece
        last = min(first + piece, points)
        size = last - first
        held = buffer[:size]
        for cell in range(sums.shape[0]):
            row, stop = starts[cell], starts[cell + 1]
            if row == stop:
                continue
            into = sums[cell, first:last]
            held[:] = into
            while row + 4 <= stop:
                a, b = values[order[row], first:last], values[order[row + 1], first:last]
                c, d = values[order[row + 2], first:last], values[order[row + 3], first:last]
                for k in range(size):
                    held[k] = held[k] + a[k] + b[k] + c[k] + d[k]
                row += 4
            while row < stop:
                a = values[order[row], first:last]
                for k in range(size):
                    held[k] += a[k]
                row += 1
            unknown = False
            for k in range(size):
                unknown |= held[k] != held[k]
            if unknown:
                flagged[cell, number] = True
            else:
                into[:] = held


@compiled
def scaled_sums(values, shift, scale, width, order, starts, piece, sums, flagged, begin, end):
    """Add (values - shift) * scale; shift and scale (rows, lines) hold for the `width` points of a line.

    `piece` counts lines here, and flagged is (cells, pieces of `piece` lines).
    """
    lines = shift.shape[1]
    buffer = np.empty(piece * width, np.float64)
    for number in range(begin, end):
        first = number * piece
        last = min(first + piece, lines)
        size = (last - first) * width
        for cell in range(sums.shape[0]):
            if starts[cell] == starts[cell + 1]:
                continue
            into = sums[cell, first * width : last * width]
            held = buffer[:size]
            held[:] = into
            for row in range(starts[cell], starts[cell + 1]):
                unit = order[row]
                for line in range(first, last):
                    less, times = shift[unit, line], scale[unit, line]
                    source = values[unit, line * width : (line + 1) * width]
                    target = held[(line - first) * width : (line - first + 1) * width]
                    for k in range(width):
                        target[k] += (source[k] - less) * times
            unknown = False
            for k in range(size):
                unknown |= held[k] != held[k]
            if unknown:
                flagged[cell, number] = True
            else:
                into[:] = held


@compiled
def present_sums(values, shift, scale, width, order, starts, points_a_piece, flagged, sums, missing):
    """The flagged pieces again, without the values that are NaN (or whose shift or scale is), which `missing` counts.

    shift and scale without lines: the values as they are.
    """
    scaled = shift.shape[1] > 0
    for cell in range(flagged.shape[0]):
        for number in range(flagged.shape[1]):
            if not flagged[cell, number]:
                continue
            first = number * points_a_piece
            last = min(first + points_a_piece, values.shape[1])
            for row in range(starts[cell], starts[cell + 1]):
                unit = order[row]
                for k in range(first, last):
                    value = np.float64(values[unit, k])
                    if scaled:
                        value = (value - shift[unit, k // width]) * scale[unit, k // width]
                    if value == value:
                        sums[cell, k] += value
                    else:
                        missing[cell, k] += 1
