"""One row a cluster: its extent as observed, its mass and p, its peak, and the effect of its units."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.contrast import Contrast
from tfstats.findings.effect_sizes import effect_of

__all__ = ["CLUSTER_COLUMNS", "cell_sizes", "cluster_table", "region_values"]

Floats = NDArray[np.float64]

CLUSTER_COLUMNS = (
    "cluster", "sign", "mass", "points", "p", "p_low", "p_high", "frequency_low", "frequency_high", "time_start",
    "time_stop", "channels", "peak_statistic", "peak_channel", "peak_frequency", "peak_time", "octave_seconds",
    "estimate", "estimate_low", "estimate_high", "effect_size", "effect_low", "effect_high", "effect_hedges",
)  # fmt: skip
"""Columns in order.  Extents are those observed, not tested boundaries; intervals are 95 %, t-based, unadjusted."""


def cell_sizes(frequencies: Floats, times: Floats) -> Floats:
    """(frequencies, times) size of each cell in octave seconds.

    A cell reaches to the geometric midpoint of neighbouring frequencies and the midpoint of neighbouring times;
    the ends are mirrored.  An axis of one point has no width, and the sizes are NaN.
    """
    return np.outer(_widths(np.log2(frequencies)), _widths(times))


def _widths(axis: Floats) -> Floats:
    if axis.size == 1:
        return np.full(1, np.nan)
    steps = np.diff(axis)
    return np.asarray((np.concatenate([steps[:1], steps]) + np.concatenate([steps, steps[-1:]])) / 2.0)


def region_values(values: NDArray[np.floating], region: NDArray[np.bool_] | NDArray[np.intp]) -> Floats:
    """(units, ...) unweighted mean over the finite points of a region: a mask, or positions in a flat last axis."""
    inside = np.asarray(values[..., region], dtype=np.float64)
    there = np.isfinite(inside)
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(there, inside, 0.0).sum(axis=-1) / there.sum(axis=-1))


def cluster_table(
    contrast: Contrast,
    statistic: Floats,
    labels: NDArray[np.int32],
    masses: Floats,
    p: Floats,
    p_low: Floats,
    p_high: Floats,
) -> pd.DataFrame:
    """Table of clusters numbered 1, 2, ... in `labels`; masses and p-values by number."""
    cells = cell_sizes(contrast.frequencies, contrast.times)
    # One sort of the labelled points serves all clusters; a mask a cluster would cost clusters x points.
    flat = labels.ravel()
    members = np.flatnonzero(flat)
    members = members[np.argsort(flat[members], kind="stable")]
    starts = np.searchsorted(flat[members], np.arange(1, masses.size + 2))
    shape = contrast.shape
    # The last axis flat: (units, points), or (units, conditions, points).
    values = contrast.values.reshape(*contrast.values.shape[:-3], -1)
    rows = []
    for number in range(1, masses.size + 1):
        points = members[starts[number - 1] : starts[number]]
        channel, frequency, time = np.unravel_index(points, shape)
        inside = statistic.ravel()[points]
        peak = int(np.argmax(np.abs(inside)))
        effect = effect_of(contrast, region_values(values, points)[..., None])
        covered = np.unique(frequency * shape[2] + time)
        rows.append(
            (
                number,
                1 if inside[peak] > 0 else -1,
                masses[number - 1],
                points.size,
                p[number - 1],
                p_low[number - 1],
                p_high[number - 1],
                contrast.frequencies[frequency.min()],
                contrast.frequencies[frequency.max()],
                contrast.times[time.min()],
                contrast.times[time.max()],
                ";".join(contrast.channels[place] for place in np.unique(channel)),
                inside[peak],
                contrast.channels[channel[peak]],
                contrast.frequencies[frequency[peak]],
                contrast.times[time[peak]],
                cells.ravel()[covered].sum(),
                *(
                    float(field[0])
                    for field in (
                        effect.estimate, effect.low, effect.high, effect.size, effect.size_low, effect.size_high, effect.hedges
                    )
                ),
            )
        )  # fmt: skip
    table = pd.DataFrame(rows, columns=list(CLUSTER_COLUMNS))
    return table.astype({"cluster": int, "sign": int, "points": int}) if rows else table
