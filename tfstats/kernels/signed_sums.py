"""Signed sums by looking them up.

The units are taken in small groups.  For a block of points all signed sums of each group are written down once; the
signed
sum of a row of flips is then one table row of each group, added in the order of the groups.  A group of five
replaces five
multiplications and additions by one addition.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["group_sizes", "signed_sum_tables", "table_rows"]


def group_sizes(units: int) -> np.ndarray:
    """Sizes of the groups: the first five units, the next four, the rest in groups of at most five.

    The sizes depend on nothing but the number of units, and so do the bytes of every sum.
    """
    sizes = [min(5, units)]
    if units > 5:
        sizes.append(min(4, units - 5))
    rest = units - sum(sizes)
    groups = -(-rest // 5)
    sizes += [rest // groups + (i < rest % groups) for i in range(groups)] if groups else []
    return np.array(sizes, np.int64)


@compiled
def table_rows(flips, sizes, out):
    """Fill out (rows, groups) int32: the table row that each group of units has in each row of flips (rows, units)."""
    for row in range(flips.shape[0]):
        unit = 0
        base = 0
        for g in range(sizes.shape[0]):
            code = 0
            for j in range(sizes[g]):
                code |= (flips[row, unit + j] != 0) << j
            out[row, g] = base + code
            unit += sizes[g]
            base += 1 << sizes[g]


@compiled
def signed_sum_tables(block, sizes, table):
    """Fill table (sum of 2^size, points) with all signed sums of each group of block (units, points).

    Row `code` of a group has the units whose bit is set in code with a minus sign.
    """
    width = block.shape[1]
    unit = 0
    base = 0
    for g in range(sizes.shape[0]):
        for k in range(width):
            table[base, k] = block[unit, k]
            table[base + 1, k] = -block[unit, k]
        made = 2
        for j in range(1, sizes[g]):
            for row in range(made):
                for k in range(width):
                    value = table[base + row, k]
                    table[base + made + row, k] = value - block[unit + j, k]
                    table[base + row, k] = value + block[unit + j, k]
            made *= 2
        unit += sizes[g]
        base += made
