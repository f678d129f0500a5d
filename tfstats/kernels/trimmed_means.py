"""Yuen's t of a trimmed mean for flipped values."""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["trimmed_t_maps"]


@compiled
def trimmed_t_maps(values, flips, cut, largest, out):
    """Fill out (rows, points) with the trimmed mean over its Winsorised standard error.

    values (units, points) float64 without NaN, flips (rows, units) uint8, `cut` units are trimmed at either end.
    With h = units - 2 cut: t = mean / (s_w / ((h / n) sqrt(n))), s_w the SD (ddof 1) of the Winsorised values.
    """
    units, points = values.shape
    kept = units - 2 * cut
    column = np.empty(units)
    for p in range(points):
        for r in range(flips.shape[0]):
            for i in range(units):
                v = values[i, p]
                if flips[r, i] == 1:
                    v = -v
                # Insertion keeps the column sorted; a lab has tens of subjects, not thousands.
                k = i
                while k > 0 and column[k - 1] > v:
                    column[k] = column[k - 1]
                    k -= 1
                column[k] = v
            total = 0.0
            for i in range(cut, units - cut):
                total += column[i]
            mean = total / kept
            low = column[cut]
            high = column[units - cut - 1]
            winsorised = total + cut * (low + high)
            centre = winsorised / units
            square = cut * ((low - centre) ** 2 + (high - centre) ** 2)
            for i in range(cut, units - cut):
                square += (column[i] - centre) ** 2
            error = math.sqrt(square / (units - 1)) * math.sqrt(units) / kept
            if error > 0.0:
                t = mean / error
                out[r, p] = min(largest, max(-largest, t))
            elif mean == 0.0:
                out[r, p] = 0.0
            else:
                out[r, p] = math.copysign(largest, mean)
