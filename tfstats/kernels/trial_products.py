"""Means of logarithms without many logarithms: the logarithm of a product, kept as mantissa and exponent.

The product of the rows of each cell is mantissa * 2^exponent with a mantissa from 1 to 2.  Mantissas are multiplied in the order
of the rows and the exponent is split off after every few; splitting is exact, so that a product has the same bits however its
rows are cut into blocks.  A piece in which a product leaves the range of float64 between two splits, or meets NaN, is left as it
was and flagged; `present_products` then goes value by value, with the same bits where nothing is missing.
"""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined

__all__ = ["line_means", "products", "products_left_out", "present_products"]

# The parts of an IEEE 754 double: 52 bits of mantissa under 11 of exponent, biased by 1023.
_MANTISSA = np.int64(0x000FFFFFFFFFFFFF)
_ONE = np.int64(0x3FF0000000000000)
_BITS = 52
_BIAS = 1023
_ALL_ONES = 2047


@inlined
def _split(bits, exponents, size):
    """Split the exponents off; whether all were those of ordinary positive numbers."""
    strange = False
    for k in range(size):
        field = bits[k] >> _BITS
        strange |= (field <= 0) | (field >= _ALL_ONES)
        exponents[k] += field - _BIAS
        bits[k] = (bits[k] & _MANTISSA) | _ONE
    return strange


@compiled
def products(values, scale, width, order, starts, piece, mantissas, exponents, flagged, begin, end):
    """Multiply values * scale of the rows of each cell into mantissas and exponents (cells, points).

    values : (rows, points); scale (rows, lines) holds for the `width` points of a line
    order, starts : the rows of cell c are order[starts[c]:starts[c + 1]]
    flagged : (cells, pieces of `piece` lines); the pieces begin, ..., end - 1 are done
    """
    lines = scale.shape[1]
    held = np.empty(piece * width, np.float64)
    bits = held.view(np.int64)
    powers = np.empty(piece * width, np.int64)
    for number in range(begin, end):
        first = number * piece
        last = min(first + piece, lines)
        size = (last - first) * width
        for cell in range(mantissas.shape[0]):
            row, stop = starts[cell], starts[cell + 1]
            if row == stop:
                continue
            held[:size] = mantissas[cell, first * width : last * width]
            powers[:size] = exponents[cell, first * width : last * width]
            strange = False
            while row + 4 <= stop:
                i, j, m, n = order[row], order[row + 1], order[row + 2], order[row + 3]
                for line in range(first, last):
                    low, high = line * width, (line + 1) * width
                    a, b, c, d = values[i, low:high], values[j, low:high], values[m, low:high], values[n, low:high]
                    s, t, u, v = scale[i, line], scale[j, line], scale[m, line], scale[n, line]
                    target = held[(line - first) * width : (line - first + 1) * width]
                    for k in range(width):
                        target[k] = target[k] * (a[k] * s) * (b[k] * t) * (c[k] * u) * (d[k] * v)
                strange |= _split(bits, powers, size)
                row += 4
            while row < stop:
                i = order[row]
                for line in range(first, last):
                    a, s = values[i, line * width : (line + 1) * width], scale[i, line]
                    target = held[(line - first) * width : (line - first + 1) * width]
                    for k in range(width):
                        target[k] *= a[k] * s
                strange |= _split(bits, powers, size)
                row += 1
            if strange:
                flagged[cell, number] = True
            else:
                mantissas[cell, first * width : last * width] = held[:size]
                exponents[cell, first * width : last * width] = powers[:size]


@compiled
def products_left_out(values, scale, width, totals, order, starts, piece, mantissas, exponents, flagged, begin, end):
    """Multiply totals - values * scale: what is left of a cell's total (cells, points) without each of its rows."""
    lines = scale.shape[1]
    held = np.empty(piece * width, np.float64)
    bits = held.view(np.int64)
    powers = np.empty(piece * width, np.int64)
    for number in range(begin, end):
        first = number * piece
        last = min(first + piece, lines)
        size = (last - first) * width
        for cell in range(mantissas.shape[0]):
            if starts[cell] == starts[cell + 1]:
                continue
            held[:size] = mantissas[cell, first * width : last * width]
            powers[:size] = exponents[cell, first * width : last * width]
            strange = False
            row, stop = starts[cell], starts[cell + 1]
            while row + 4 <= stop:
                i, j, m, n = order[row], order[row + 1], order[row + 2], order[row + 3]
                for line in range(first, last):
                    low, high = line * width, (line + 1) * width
                    a, b, c, d = values[i, low:high], values[j, low:high], values[m, low:high], values[n, low:high]
                    s, t, u, v = scale[i, line], scale[j, line], scale[m, line], scale[n, line]
                    total = totals[cell, low:high]
                    target = held[(line - first) * width : (line - first + 1) * width]
                    for k in range(width):
                        product = target[k] * (total[k] - a[k] * s) * (total[k] - b[k] * t)
                        target[k] = product * (total[k] - c[k] * u) * (total[k] - d[k] * v)
                strange |= _split(bits, powers, size)
                row += 4
            while row < stop:
                i = order[row]
                for line in range(first, last):
                    low, high = line * width, (line + 1) * width
                    a, total, s = values[i, low:high], totals[cell, low:high], scale[i, line]
                    target = held[(line - first) * width : (line - first + 1) * width]
                    for k in range(width):
                        target[k] *= total[k] - a[k] * s
                strange |= _split(bits, powers, size)
                row += 1
            if strange:
                flagged[cell, number] = True
            else:
                mantissas[cell, first * width : last * width] = held[:size]
                exponents[cell, first * width : last * width] = powers[:size]


@compiled
def present_products(
    values, scale, width, totals, left_out, order, starts, points_a_piece, flagged, mantissas, exponents, missing
):
    """The flagged pieces again, value by value; NaN (also of the scale) is passed over, and `missing` counts it.

    left_out : whether the factor is totals - value * scale, as in `products_left_out`, or value * scale
    A factor of zero leaves a mantissa of zero, an infinite one NaN.
    """
    for cell in range(flagged.shape[0]):
        for number in range(flagged.shape[1]):
            if not flagged[cell, number]:
                continue
            first = number * points_a_piece
            last = min(first + points_a_piece, values.shape[1])
            for row in range(starts[cell], starts[cell + 1]):
                i = order[row]
                for k in range(first, last):
                    factor = values[i, k] * scale[i, k // width]
                    if factor != factor:
                        missing[cell, k] += 1
                        continue
                    if left_out:
                        factor = totals[cell, k] - factor
                    part, power = math.frexp(factor)
                    product, more = math.frexp(mantissas[cell, k] * (2.0 * part))
                    mantissas[cell, k] = 2.0 * product
                    exponents[cell, k] += power - 1 + more - 1


@compiled
def line_means(values, width, start, stop, means):
    """Mean log2 of points start, ..., stop - 1 of each line of `width` points; NaN is left out, NaN where nothing is left.

    values : (rows, points); means (rows, lines), written
    """
    for row in range(values.shape[0]):
        for line in range(means.shape[1]):
            source = values[row, line * width + start : line * width + stop]
            product, exponent, count = 1.0, 0, 0
            for k in range(stop - start):
                value = np.float64(source[k])
                if value != value:
                    continue
                count += 1
                longer = product * value
                if 1e-200 < longer < 1e200:
                    product = longer
                else:
                    # Mantissas alone: a factor of any size may come in.
                    part, power = math.frexp(value)
                    product, more = math.frexp(product * part)
                    exponent += power + more
            means[row, line] = (math.log2(product) + exponent) / count if count else np.nan
