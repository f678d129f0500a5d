"""The statistic of each row of relabellings at a block of points, for every design, from signed sums only.

Design codes and what they need from a block of points:

0 one-sample t     signed sums of x; the sum of squares does not change under flips
1 pooled t         signed sums of centred x, + for members of group one
2 Welch score      the same, and signed sums of the squares
3 F of flips       signed sums of each of the k - 1 contrasts of a unit, one sign a unit
4 F of labels      signed sums of centred x for each group but the last, + for its members

All sums are float64.  Two groups and labels are centred at each point first, so that a mean far above the spread
costs no digits.
"""

from __future__ import annotations

import math

from tfstats.kernels.compile_policy import compiled
from tfstats.kernels.normal_score import score_of_t
from tfstats.kernels.point_sums import t_from_sum

__all__ = ["BLOCK", "load_block", "statistics_of_row"]

ONE_SAMPLE, POOLED, WELCH, F_FLIPS, F_LABELS = 0, 1, 2, 3, 4
BLOCK = 64


@compiled
def load_block(design, values, first, width, block, moments):
    """Copy the points first .. first + width of values (units, components, points) to block (planes, units, BLOCK).

    moments (2, BLOCK): what is left of the sum after centring, and the sum of squares over units (and components).
    Designs 1, 2 and 4 are centred; design 2 gets a second plane of squares.
    """
    units, components, points = values.shape
    moments[:] = 0.0
    centred = design == POOLED or design == WELCH or design == F_LABELS
    for d in range(components):
        for i in range(units):
            for k in range(width):
                block[d, i, k] = values[i, d, first + k]
            for k in range(width, BLOCK):
                block[d, i, k] = 0.0
        if centred:
            # The mean of what the first pass leaves takes out the rounding of the first mean.
            for _repeat in range(2):
                moments[0, :] = 0.0
                for i in range(units):
                    for k in range(BLOCK):
                        moments[0, k] += block[d, i, k]
                for i in range(units):
                    for k in range(BLOCK):
                        block[d, i, k] -= moments[0, k] / units
            moments[0, :] = 0.0
        for i in range(units):
            for k in range(BLOCK):
                value = block[d, i, k]
                moments[0, k] += value
                moments[1, k] += value * value
                if design == WELCH:
                    block[1, i, k] = value * value


@compiled
def _pooled(total, moments, sizes, largest, out):
    n1 = sizes[0]
    n2 = sizes[1]
    both = 1.0 / n1 + 1.0 / n2
    degrees = n1 + n2 - 2.0
    for k in range(BLOCK):
        first = 0.5 * (moments[0, k] + total[0, k])
        second = 0.5 * (moments[0, k] - total[0, k])
        difference = first / n1 - second / n2
        spread = moments[1, k] - first * first / n1 - second * second / n2
        above = difference * difference * degrees
        below = spread * both
        if difference == 0.0:
            out[k] = 0.0
        elif below * largest * largest <= above:
            out[k] = math.copysign(largest, difference)
        else:
            out[k] = math.copysign(math.sqrt(above / below), difference)


@compiled
def _welch(total, moments, sizes, largest, fit, limit, t, df):
    n1 = sizes[0]
    n2 = sizes[1]
    for k in range(BLOCK):
        first = 0.5 * (moments[0, k] + total[0, k])
        second = 0.5 * (moments[0, k] - total[0, k])
        squares_1 = 0.5 * (moments[1, k] + total[1, k])
        squares_2 = 0.5 * (moments[1, k] - total[1, k])
        error_1 = max(0.0, squares_1 - first * first / n1) / (n1 * (n1 - 1.0))
        error_2 = max(0.0, squares_2 - second * second / n2) / (n2 * (n2 - 1.0))
        difference = first / n1 - second / n2
        error = error_1 + error_2
        if difference == 0.0:
            t[k] = 0.0
            df[k] = 1.0
        elif error * largest * largest <= difference * difference:
            t[k] = math.copysign(largest, difference)
            df[k] = n1 + n2 - 2.0
        else:
            t[k] = difference / math.sqrt(error)
            df[k] = error * error / (error_1 * error_1 / (n1 - 1.0) + error_2 * error_2 / (n2 - 1.0))
    for k in range(BLOCK):
        # The score is never larger than t, so what t keeps below the limit needs no score.
        if abs(t[k]) > limit[k]:
            t[k] = score_of_t(t[k], df[k], fit)


@compiled
def _f_of_flips(total, moments, units, largest, out):
    for k in range(BLOCK):
        between = 0.0
        for d in range(total.shape[0]):
            between += total[d, k] * total[d, k]
        between /= units
        left = moments[1, k] - between
        above = between * (units - 1.0)
        if above == 0.0:
            out[k] = 0.0
        elif left * largest <= above:
            out[k] = largest
        else:
            out[k] = above / left


@compiled
def _f_of_labels(total, moments, sizes, largest, out):
    groups = sizes.shape[0]
    units = 0.0
    for g in range(groups):
        units += sizes[g]
    for k in range(BLOCK):
        between = 0.0
        others = 0.0
        for g in range(groups - 1):
            own = 0.5 * (moments[0, k] + total[g, k])
            others += own
            between += own * own / sizes[g]
        own = moments[0, k] - others
        between += own * own / sizes[groups - 1]
        left = moments[1, k] - between
        above = between * (units - groups)
        below = left * (groups - 1.0)
        if above == 0.0:
            out[k] = 0.0
        elif below * largest <= above:
            out[k] = largest
        else:
            out[k] = above / below


@compiled
def statistics_of_row(design, total, moments, counts, sizes, largest, fit, limit, df, out):
    """Fill out (BLOCK,) with the statistic from the totals (planes * code sets, BLOCK) of one row.

    counts (BLOCK,): units present at each point (design 0); sizes (groups,): group sizes (1, 2, 4), for design 3 the number of
    units; largest: the largest size of a t; F is kept below its square.
    Welch scores are worked out only where |t| is above limit (BLOCK,); elsewhere t stands, which is not above it either.
    """
    if design == ONE_SAMPLE:
        for k in range(BLOCK):
            out[k] = t_from_sum(total[0, k], moments[1, k], counts[k], largest)
    elif design == POOLED:
        _pooled(total, moments, sizes, largest, out)
    elif design == WELCH:
        _welch(total, moments, sizes, largest, fit, limit, out, df)
    elif design == F_FLIPS:
        _f_of_flips(total, moments, sizes[0], largest * largest, out)
    else:
        _f_of_labels(total, moments, sizes, largest * largest, out)
