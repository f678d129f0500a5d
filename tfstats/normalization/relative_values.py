"""The formulas: activity power and a reference into a relative unit."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.normalization.window_statistics import References

__all__ = ["ratio_in_unit", "relative_trial_values"]


def ratio_in_unit(ratio: NDArray[np.float64], unit: str) -> NDArray[np.float64]:
    """A/B in decibels, percent change, or as it is; may work in place."""
    if unit == "decibel":
        np.log10(ratio, out=ratio)
        ratio *= 10.0
    elif unit == "percent_change":
        ratio -= 1.0
        ratio *= 100.0
    return ratio


def relative_trial_values(
    power: NDArray[Any],
    unit: str,
    references: References,
    rows: NDArray[np.int64],
    channels: slice,
    frequencies: slice,
) -> NDArray[np.float64]:
    """Single trials in a unit.

    Parameters
    ----------
    power : array (trials, channels, frequencies, times)
        A block; its channels and frequencies stand at the given slices of the references.
    rows : array (trials,)
        The reference of each trial.
    """
    exact = power.astype(np.float64)
    if unit == "none":
        return exact
    level = references.level[rows, channels, frequencies][..., None]
    if unit == "z_score":
        assert references.spread is not None
        exact -= level
        exact /= references.spread[rows, channels, frequencies][..., None]
    else:
        exact /= level
        exact = ratio_in_unit(exact, unit)
    return exact
