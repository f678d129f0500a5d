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

from tfstats.kernels.compile_policy import compiled, inlined
from tfstats.kernels.normal_score import score_of_t

__all__ = ["BLOCK", "load_block", "ratios_of_row", "statistic_at", "value_of_ratio"]

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
    centred = design in (POOLED, WELCH, F_LABELS)
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
def ratios_of_row(design, total, moments, counts, sizes, above, below):
    """The square of t, or F, of one row as above / below; above carries the sign of the effect.

    total (planes * code sets, BLOCK): the signed sums of the row.  counts (BLOCK,): units present (design 0); sizes
    (groups,): group
    sizes (1, 2, 4), for design 3 the number of units.  For design 2 the square of Welch's t, not of its score.
    """
    if design == ONE_SAMPLE:
        for k in range(BLOCK):
            square = total[0, k] * total[0, k]
            above[k] = math.copysign((counts[k] - 1.0) * square, total[0, k])
            below[k] = counts[k] * moments[1, k] - square
    elif design == POOLED:
        share_1 = 1.0 / sizes[0]
        share_2 = 1.0 / sizes[1]
        scale = (sizes[0] + sizes[1] - 2.0) / (share_1 + share_2)
        for k in range(BLOCK):
            first = 0.5 * (moments[0, k] + total[0, k])
            second = 0.5 * (moments[0, k] - total[0, k])
            difference = first * share_1 - second * share_2
            above[k] = math.copysign(difference * difference * scale, difference)
            below[k] = moments[1, k] - first * first * share_1 - second * second * share_2
    elif design == WELCH:
        share_1 = 1.0 / sizes[0]
        share_2 = 1.0 / sizes[1]
        for k in range(BLOCK):
            first = 0.5 * (moments[0, k] + total[0, k])
            second = 0.5 * (moments[0, k] - total[0, k])
            error_1 = 0.5 * (moments[1, k] + total[1, k]) - first * first * share_1
            error_2 = 0.5 * (moments[1, k] - total[1, k]) - second * second * share_2
            difference = first * share_1 - second * share_2
            above[k] = math.copysign(difference * difference, difference)
            below[k] = error_1 * share_1 / (sizes[0] - 1.0) + error_2 * share_2 / (sizes[1] - 1.0)
    elif design == F_FLIPS:
        for k in range(BLOCK):
            above[k] = 0.0
        for d in range(total.shape[0]):
            for k in range(BLOCK):
                above[k] += total[d, k] * total[d, k]
        for k in range(BLOCK):
            between = above[k] / sizes[0]
            above[k] = between * (sizes[0] - 1.0)
            below[k] = moments[1, k] - between
    else:
        groups = sizes.shape[0]
        units = 0.0
        for g in range(groups):
            units += sizes[g]
        for k in range(BLOCK):
            above[k] = 0.0
            below[k] = moments[0, k]
        for g in range(groups - 1):
            share = 1.0 / sizes[g]
            for k in range(BLOCK):
                own = 0.5 * (moments[0, k] + total[g, k])
                above[k] += own * own * share
                below[k] -= own
        for k in range(BLOCK):
            between = above[k] + below[k] * below[k] / sizes[groups - 1]
            above[k] = between * (units - groups)
            below[k] = (moments[1, k] - between) * (groups - 1.0)


@inlined
def value_of_ratio(design, above, below, largest):
    """t, or F, from its ratio; at most `largest` in size (F: its square), also where nothing is left below; 0
    without an effect."""
    ratio = abs(above) / below
    most = largest * largest
    # A negative or undefined ratio is neither; choices, not branches, so that whole blocks are worked on at once.
    ratio = ratio if (ratio >= 0.0) & (ratio < most) else most
    ratio = 0.0 if above == 0.0 else ratio
    return math.copysign(math.sqrt(ratio), above) if design < F_FLIPS else ratio


@compiled
def score_at(k, t, total, moments, sizes, fit):
    """Normal score of Welch's t at point k under its Welch-Satterthwaite degrees of freedom."""
    n1 = sizes[0]
    n2 = sizes[1]
    first = 0.5 * (moments[0, k] + total[0, k])
    second = 0.5 * (moments[0, k] - total[0, k])
    error_1 = max(0.0, 0.5 * (moments[1, k] + total[1, k]) - first * first / n1) / (n1 * (n1 - 1.0))
    error_2 = max(0.0, 0.5 * (moments[1, k] - total[1, k]) - second * second / n2) / (n2 * (n2 - 1.0))
    error = error_1 + error_2
    parts = error_1 * error_1 / (n1 - 1.0) + error_2 * error_2 / (n2 - 1.0)
    # Without any spread the degrees of freedom are undefined; those of equal variances stand in.
    df = error * error / parts if parts > 0.0 else n1 + n2 - 2.0
    return score_of_t(t, df, fit)


@inlined
def statistic_at(design, k, above, below, total, moments, sizes, largest, fit):
    """The statistic at point k of the block."""
    value = value_of_ratio(design, above[k], below[k], largest)
    if design == WELCH:
        value = score_at(k, value, total, moments, sizes, fit)
    return value
