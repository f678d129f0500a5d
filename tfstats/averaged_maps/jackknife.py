"""The jackknife over trials: decibels of a mean, rid of the bias that a small number of trials gives them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from tfstats.normalization.power_blocks import read_windows, spans_all_times, whole_blocks
from tfstats.normalization.power_sums import LeftOutLogarithms
from tfstats.normalization.window_statistics import TrialWindows

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["condition_corrections", "reference_correction"]

Floats = NDArray[np.float64]


def condition_corrections(
    power: TrialPower,
    codes: NDArray[np.int64],
    totals: Floats,
    finite: NDArray[np.int64],
    scale: Floats | None,
    window: slice,
    windows: TrialWindows | None,
) -> Floats:
    """What to add to the decibel of each condition's mean: (n - 1)(T - mean of T without each trial).

    Parameters
    ----------
    codes : array (trials,)
        Number of the condition of each trial; -1 for none.
    totals, finite : arrays (conditions, channels, frequencies, times)
        Sum over the trials' values, and how many there are.
    scale : array (trials, channels, frequencies) or None
        By which power was multiplied before it was summed.
    windows : TrialWindows or None
        Filled on the way, where given.

    Returns
    -------
    array (conditions, channels, frequencies, times)
        NaN where fewer than two trials have a value.
    """
    left = LeftOutLogarithms(codes, totals)
    pending = windows is not None
    for place, block in whole_blocks(power):
        if windows is not None and pending:
            if spans_all_times(place, power):
                windows.add(block[..., window], place[:3])
            else:
                read_windows(power, window, windows)
                pending = False
        left.add(block, place, None if scale is None else scale[place[:3]])
    return _correction(np.log10(totals), left.total, finite)


def reference_correction(levels: Floats) -> Floats:
    """The same for the decibel of a baseline: levels (trials, channels, frequencies), each the mean over a trial's samples."""
    known = ~np.isnan(levels)
    finite = known.sum(axis=0)
    total = np.where(known, levels, 0.0).sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        left = np.where(known, np.log10(total - levels), 0.0).sum(axis=0)
        return _correction(np.log10(total), left, finite)


def _correction(whole: Floats, left: Floats, finite: NDArray[np.int64]) -> Floats:
    """From log10 of the sum over trials and the sum of log10 of what is left without each."""
    number = finite.astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        of_mean = whole - np.log10(number)
        without_one = left / number - np.log10(number - 1.0)
        made = 10.0 * (number - 1.0) * (of_mean - without_one)
    return np.where(finite > 1, made, np.nan)
